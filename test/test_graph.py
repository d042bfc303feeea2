# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Neighbour graphs against published spectra and the copying law."""

import math

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import expm

from coord_planner.core import graph as neighbour_graph
from coord_planner.core.graph import NeighbourGraph
from coord_planner.errors import SettingsError

NAMES = tuple("abcdef")


def over(edges, names=NAMES):
    return NeighbourGraph(names, tuple((names[k], names[j], 1.0) for k, j in edges))


GRAPHS = {
    "path": over([(k, k + 1) for k in range(5)]),
    "cycle": over([(k, (k + 1) % 6) for k in range(6)]),
    "star": over([(0, k) for k in range(1, 6)]),
    "complete": over([(k, j) for k in range(6) for j in range(k)]),
    "grid": over([(0, 1), (1, 2), (3, 4), (4, 5), (0, 3), (1, 4), (2, 5)]),
}


# Fiedler 1973; Mohar 1991; Brouwer & Haemers, Spectra of Graphs, 1.4 (from memory)
@pytest.mark.parametrize(
    ("name", "spectrum"),
    [
        ("path", [2 - 2 * math.cos(math.pi * j / 6) for j in range(6)]),
        ("cycle", [0, 1, 1, 3, 3, 4]),
        ("star", [0, 1, 1, 1, 1, 6]),
        ("complete", [0, 6, 6, 6, 6, 6]),
        ("grid", [0, 1, 2, 3, 3, 5]),
    ],
)
def test_spectra(name, spectrum):
    np.testing.assert_allclose(GRAPHS[name].spectrum(), spectrum, atol=2e-14)


# Klein & Randic 1993 (Kirchhoff index); Kirchhoff 1847 (spanning trees); from memory
@pytest.mark.parametrize(
    ("name", "kirchhoff", "trees"),
    [("path", 35, 1), ("cycle", 17.5, 6), ("star", 25, 1), ("complete", 5, 1296), ("grid", 14.2, 15)],
)
def test_kirchhoff_index_and_spanning_trees(name, kirchhoff, trees):
    laplacian = GRAPHS[name].laplacian()
    assert 6 * np.sum(1 / GRAPHS[name].spectrum()[1:]) == pytest.approx(kirchhoff, rel=1e-12)
    assert np.linalg.det(laplacian[1:, 1:]) == pytest.approx(trees, rel=1e-12)
    inverse = np.linalg.pinv(laplacian)
    resistances = [inverse[k, k] + inverse[j, j] - 2 * inverse[k, j] for k, j in GRAPHS[name].index_edges()]
    assert sum(resistances) == pytest.approx(5, rel=1e-12)  # Foster 1949: over the edges they sum to N - 1


@st.composite
def weighted_graphs(draw):
    count = draw(st.integers(1, 7))
    names = tuple(f"r{k}" for k in range(count))
    pairs = [(a, b) for i, a in enumerate(names) for b in names[:i]]
    chosen = draw(st.lists(st.sampled_from(pairs), unique=True)) if pairs else []
    return NeighbourGraph(names, tuple((a, b, draw(st.floats(0.1, 10))) for a, b in chosen))


@given(weighted_graphs())
def test_agrees_with_networkx(graph):
    reference = nx.laplacian_matrix(graph.networkx(), nodelist=list(graph.names)).toarray()
    np.testing.assert_allclose(graph.laplacian(), reference, atol=1e-13)
    assert graph.connected == (len(graph.components()) == 1) == nx.is_connected(graph.networkx())
    assert sorted(sum(graph.components(), ())) == sorted(graph.names)


@given(weighted_graphs(), st.floats(0, 1000))
def test_copying_matrix(graph, chi):
    psi = graph.copying(chi)
    np.testing.assert_allclose(psi.sum(axis=1), 1, atol=1e-10)
    np.testing.assert_allclose(np.sort(np.linalg.eigvalsh(psi)), np.sort(1 / (1 + chi * graph.spectrum())), atol=1e-9)
    together = {name: number for number, group in enumerate(graph.components()) for name in group}
    for k, a in enumerate(graph.names):
        for j, b in enumerate(graph.names):
            if together[a] != together[b]:
                assert psi[k, j] == 0
            elif chi > 1e-3:
                assert psi[k, j] > 0


def test_copying_along_a_path():
    """Shared check values, section 2 (Fibonacci numbers, from inverting the tridiagonal matrix by hand)."""
    psi = GRAPHS["path"].copying(1.0)
    assert psi[0, 0] == pytest.approx(89 / 144, rel=1e-14)
    np.testing.assert_allclose(psi[1:, 0] / psi[0, 0], np.array([34, 13, 5, 2, 1]) / 89, rtol=1e-13)


@pytest.mark.parametrize("chi", np.logspace(-3, 3, 7))
def test_copying_from_the_hub_of_a_star(chi):
    """Shared check values, section 2: chi / (1 + chi)."""
    psi = GRAPHS["star"].copying(chi)
    np.testing.assert_allclose(psi[1:, 0] / psi[0, 0], chi / (1 + chi), rtol=1e-10)


@pytest.mark.parametrize("chi", np.logspace(-12, 4, 9))
def test_hop_fraction(chi):
    """The decaying root of chi r^2 - (1 + 2 chi) r + chi = 0, and what a long line does in its middle."""
    fraction = neighbour_graph.hop_fraction(chi)
    assert 0 < fraction < 1
    assert chi * fraction**2 + chi == pytest.approx((1 + 2 * chi) * fraction, rel=1e-12)
    if chi <= 100:
        line = neighbour_graph.path(tuple(f"r{k}" for k in range(200)))
        column = line.copying(chi)[:, 0]
        assert column[6] / column[5] == pytest.approx(fraction, rel=1e-6)


def test_hop_fraction_without_coupling():
    assert neighbour_graph.hop_fraction(0.0) == 0.0


def test_agreement_converges_at_the_second_eigenvalue():
    """x' = -L x: Olfati-Saber & Murray, IEEE TAC 49 (2004) 1520-1533."""
    start = np.array([1.0, -2, 0.5, 3, 0, 4])
    for graph in GRAPHS.values():
        rate = graph.spectrum()[1]
        apart = [np.linalg.norm(expm(-t / rate * graph.laplacian()) @ start - start.mean()) for t in (7.0, 8.0)]
        assert math.log(apart[0] / apart[1]) == pytest.approx(1.0, rel=1e-3)


def test_weights_and_order():
    graph = NeighbourGraph(("a", "b", "c"), (("c", "a", 0.5), ("b", "c", 2.0)))
    np.testing.assert_allclose(graph.laplacian(), [[0.5, 0, -0.5], [0, 2, -2], [-0.5, -2, 2.5]])
    assert graph.index_edges().tolist() == [[2, 0], [1, 2]]
    assert graph.components() == (("a", "b", "c"),)
    smaller = graph.relative_to(("c", "b"))
    assert smaller.edges == (("b", "c", 2.0),) and smaller.names == ("c", "b")


def test_no_edges():
    graph = NeighbourGraph(("a", "b"))
    assert graph.index_edges().shape == (0, 2) and not graph.connected
    np.testing.assert_array_equal(graph.copying(5.0), np.eye(2))


@pytest.mark.parametrize(
    ("edge", "words"),
    [
        (("a", "z", 1.0), "'z'"),
        (("a", "a", 1.0), "itself"),
        (("b", "a", 1.0), "twice"),
        (("a", "c", 0.0), "above 0"),
        (("a", "c", -1.0), "above 0"),
        (("a", "c", math.nan), "above 0"),
    ],
)
def test_bad_edges(edge, words):
    with pytest.raises(SettingsError, match=words) as caught:
        NeighbourGraph(("a", "b", "c"), (("a", "b", 1.0), edge))
    assert caught.value.key == "graph.edges" and caught.value.allowed
