# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Advice from the graph: the copying law, its inverse, what holds the graph together; plans and runs beside it."""

import json
import math
from fractions import Fraction
from functools import lru_cache
from pathlib import Path

import attrs
import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_cli_check import call, changed

from coord_planner import config
from coord_planner.core import graph as graphs
from coord_planner.core.advice.agreement import modes
from coord_planner.core.advice.choosing import Wanted, after_any_loss, smallest_coupling
from coord_planner.core.advice.copying import copy_matrix, led_shares, per_hop
from coord_planner.core.advice.links import critical_links, critical_robots, suggested_links
from coord_planner.core.advice.strength import strength
from coord_planner.core.graph import NeighbourGraph
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.trial.copying import LawBeside, beside_law

SITES = Path(__file__).parents[1] / "config"
SIX = tuple(f"r{n}" for n in range(6))
LINE = graphs.path(SIX)
RING = NeighbourGraph(SIX, (*LINE.edges, ("r5", "r0", 1.0)))
ANY = tuple(range(6))


@st.composite
def joined_graphs(draw: st.DrawFn) -> NeighbourGraph:
    """A tree of two to seven robots with a few more links and various weights."""
    count = draw(st.integers(2, 7))
    names = tuple(f"r{n}" for n in range(count))
    weight = st.floats(0.1, 10.0)
    edges = {(draw(st.integers(0, n - 1)), n): draw(weight) for n in range(1, count)}
    for _ in range(draw(st.integers(0, 3))):
        k, j = sorted(draw(st.lists(st.integers(0, count - 1), min_size=2, max_size=2, unique=True)))
        edges.setdefault((k, j), draw(weight))
    return NeighbourGraph(names, tuple((names[k], names[j], w) for (k, j), w in edges.items()))


# ---- the law ----


def test_six_in_a_line_led_from_one_end() -> None:
    """checks.md, section 2: 34/89, 13/89, 5/89, 2/89, 1/89 at coupling 1; Fibonacci numbers, from memory."""
    expected = [float(Fraction(n, 89)) for n in (34, 13, 5, 2, 1)]
    shares = copy_matrix(LINE, 1.0)
    assert shares[1:, 0] == pytest.approx(expected, rel=1e-12)
    assert [weakest for weakest, _ in per_hop(shares, LINE.hops(), ANY)] == pytest.approx(expected, rel=1e-12)


def test_a_star_led_from_its_hub() -> None:
    """checks.md, section 2: chi / (1 + chi)."""
    star = NeighbourGraph(SIX, tuple(("r0", name, 1.0) for name in SIX[1:]))
    assert copy_matrix(star, 3.0)[1:, 0] == pytest.approx([0.75] * 5)


@given(joined_graphs(), st.floats(1e-3, 1e3), st.floats(1.05, 10.0))
def test_more_coupling_copies_more_and_never_more_than_all(graph: NeighbourGraph, coupling: float, more: float) -> None:
    weaker, stronger = copy_matrix(graph, coupling), copy_matrix(graph, coupling * more)
    assert np.all(stronger >= weaker - 1e-12) and np.all(stronger <= 1.0)
    off = ~np.eye(len(graph.names), dtype=bool)
    assert np.all(stronger[off] > weaker[off])


@given(joined_graphs(), st.floats(1e-2, 1e2))
def test_shares_of_several_led_robots_satisfy_their_equations(graph: NeighbourGraph, coupling: float) -> None:
    """(I + chi L) u = mu, and mu is 0 for robots without an end (the maximum principle, see core/theory)."""
    count = len(graph.names)
    led = list(range(0, count, 2))
    shares = led_shares(graph, coupling, led)
    costates = (np.eye(count) + coupling * graph.laplacian()) @ shares
    behind = [k for k in range(count) if k not in led]
    assert costates[behind] == pytest.approx(np.zeros((len(behind), len(led))), abs=1e-9)
    assert np.all(shares.sum(axis=1) <= 1 + 1e-12)
    assert led_shares(graph, coupling, [0])[:, 0] == pytest.approx(copy_matrix(graph, coupling)[:, 0], abs=1e-12)


def test_modes_of_six_in_a_line() -> None:
    """Spectrum 2 - 2 cos(pi j / 6) (checks.md, section 2); the slowest disagreement is one half against the other."""
    found = modes(LINE, 2.0)
    assert [mode.eigenvalue for mode in found] == pytest.approx([2 - 2 * math.cos(math.pi * j / 6) for j in range(6)])
    assert found[0].kept == pytest.approx(1.0) and not found[0].one_side
    assert found[2].kept == pytest.approx(1 / 3)
    assert (found[1].one_side, found[1].other_side) == (SIX[:3], SIX[3:])


# ---- its inverse ----


def test_half_per_hop_along_a_long_line_takes_a_coupling_of_two() -> None:
    """(1 + 2 chi - sqrt(1 + 4 chi)) / (2 chi) = 1/2 at chi = 2 (design, copying law)."""
    line = graphs.path(tuple(f"r{n}" for n in range(40)))
    assert smallest_coupling(line, line.hops(), Wanted(0.5, 1, (0,))).coupling == pytest.approx(2.0, rel=1e-6)
    assert smallest_coupling(line, line.hops(), Wanted(0.125, 3, (0,))).coupling == pytest.approx(2.0, rel=1e-6)


def test_the_third_robot_copies_half_and_with_less_it_does_not() -> None:
    choice = smallest_coupling(LINE, LINE.hops(), Wanted(0.5, 3, (0,)))
    assert copy_matrix(LINE, choice.coupling)[3, 0] == pytest.approx(0.5, abs=1e-8)
    assert copy_matrix(LINE, 0.99 * choice.coupling)[3, 0] < 0.5
    assert (choice.led, choice.copying, choice.lost) == ("r0", "r3", None)
    # Led from one end there are the most robots behind that hold the third one back.
    assert smallest_coupling(LINE, LINE.hops(), Wanted(0.5, 3, ANY)).coupling == pytest.approx(choice.coupling)


def test_after_the_loss_of_any_link_of_a_ring() -> None:
    """Without a link the ring is a line, and two robots three hops apart are the ends of a line of four, or worse."""
    wanted = Wanted(0.5, 3, (0,))
    choice = after_any_loss(RING, RING.hops(), wanted)
    assert choice.coupling > smallest_coupling(RING, RING.hops(), wanted).coupling
    for lost in RING.edges:
        rest = NeighbourGraph(SIX, tuple(edge for edge in RING.edges if edge != lost))
        copied = copy_matrix(rest, choice.coupling)[3, 0]
        assert copied >= 0.5 - 1e-8
        if lost[:2] == choice.lost:
            assert copied == pytest.approx(0.5, abs=1e-8)


def test_what_no_coupling_can_do_is_refused_with_the_reason() -> None:
    with pytest.raises(RefusedError, match="r0 - r1 is lost, no way leads from r0 to r3.*add a link"):
        after_any_loss(LINE, LINE.hops(), Wanted(0.5, 3, (0,)))
    with pytest.raises(RefusedError, match=r"largest coupling, 10000, r5 copies 0\.99\d+ of the turning of r0"):
        smallest_coupling(LINE, LINE.hops(), Wanted(0.99999, 5, (0,)))
    with pytest.raises(SettingsError, match="--hops: no robot is 4 hops from any robot; allowed: 1 to 3"):
        smallest_coupling(RING, RING.hops(), Wanted(0.5, 4, ANY))
    with pytest.raises(SettingsError, match="--copy: 1 is no part"):
        smallest_coupling(RING, RING.hops(), Wanted(1.0, 1, ANY))


# ---- what holds it together ----


@given(joined_graphs())
def test_critical_links_and_robots_are_those_whose_loss_splits(graph: NeighbourGraph) -> None:
    """Held against taking each away (the definition), with networkx counting the parts."""
    whole = graph.networkx()
    links = {split.lost for split in critical_links(graph)}
    for first, second, _ in graph.edges:
        rest = whole.copy()
        rest.remove_edge(first, second)
        assert ((first, second) in links) == (not nx.is_connected(rest))
    robots = {split.lost[0]: split.parts for split in critical_robots(graph)}
    for name in graph.names:
        rest = whole.copy()
        rest.remove_node(name)
        parts = nx.number_connected_components(rest)
        assert (name in robots) == (parts > 1)
        assert name not in robots or len(robots[name]) == parts


def test_the_best_link_closes_a_line_to_a_ring() -> None:
    """The cycle of six has the second eigenvalue 1 (checks.md, section 2), and no link of it is critical."""
    best = suggested_links(LINE, 1.0, ANY)[0]
    assert best.robots == ("r0", "r5") and best.connectivity_after == pytest.approx(1.0)
    assert best.weakest_after == pytest.approx(copy_matrix(RING, 1.0).min())
    assert len(best.secured) == 5


def test_links_between_parts_come_first_and_nearer_ones_before_farther_ones() -> None:
    parts = NeighbourGraph(SIX[:4], (("r0", "r1", 1.0), ("r2", "r3", 1.0)))
    places = np.array([[0.0, 0.0], [1.0, 0.0], [2.0, 0.0], [3.0, 0.0]])
    found = suggested_links(parts, 1.0, (0, 1, 2, 3), places=places)
    assert all(link.joins for link in found)
    assert found[0].robots in (("r1", "r2"), ("r0", "r3"))  # both make a line of four
    assert found[0].robots == ("r1", "r2") and found[0].distance == pytest.approx(1.0)


def test_couplings_that_do_nothing_or_too_much_are_told() -> None:
    assert strength(LINE, 2.0).warnings == ()
    assert "next to nothing" in strength(LINE, 0.02).warnings[0]
    assert "ill-conditioned" in strength(LINE, 5000.0).warnings[0]
    assert "gains nothing over 183" in strength(LINE, 300.0).warnings[0]
    assert "no two robots are joined" in strength(NeighbourGraph(SIX), 1.0).warnings[0]
    assert strength(LINE, 1.0).condition == pytest.approx(np.linalg.cond(np.eye(6) + LINE.laplacian()))


# ---- plans and runs beside the law ----

# The law's own conditions: one robot led, nothing aligned, steering hardly priced, no limit and no clearance met (the
# ways are wide). Standing starts do not matter: all are asked for the same speed at the same time.
IN_THE_LAW = ["manoeuvres.led_left.alignment=0", "prices.curvature_rate=1e-6", "coupling.strength=1"]


@lru_cache
def led_left(*entries: str) -> LawBeside:
    park = config.load(SITES / "solar_park.yaml")
    configuration = config.from_parameters(config.set_values(park.flat, entries))
    return beside_law(attrs.evolve(configuration, file="park"), "led_left")


def test_a_reference_with_one_led_robot_follows_the_law_to_a_thousandth() -> None:
    beside = led_left(*IN_THE_LAW)
    broken = {condition.code for condition in beside.conditions if not condition.kept}
    assert broken <= {"equal speeds"}  # turn rates follow the law all the same
    assert beside.planned is not None
    assert beside.planned.gap.max() < 1e-3
    assert beside.planned.share[1:] == pytest.approx(np.array([34, 13, 5, 2, 1]) / 89, abs=1e-3)


def test_a_closed_loop_without_noise_stays_within_five_percent_of_the_led_robots_turning() -> None:
    beside = led_left(*IN_THE_LAW)
    assert beside.driven is not None and beside.run is not None and beside.run.completed
    assert beside.driven.gap.max() < 0.05
    assert beside.driven.turned == pytest.approx(beside.driven.predicted, abs=0.01)


# ---- the command ----


def test_advise_prints_its_keys_and_answers_in_reverse() -> None:
    status, output = call("advise", SITES / "solar_park.yaml", "--set", "coupling.strength=1", "--no-rehearse",
                          "--copy", "0.5", "--hops", "3", "--json")
    found = json.loads(output)
    assert status == 0
    assert found["connected"] is True and found["coupling"] == 1.0
    assert [row[0] for row in found["copy"]][1:] == pytest.approx(np.array([34, 13, 5, 2, 1]) / 89)
    assert found["copy_per_hop"] == pytest.approx(np.array([34, 13, 5, 2, 1]) / 89)
    assert found["spectrum"][1] == pytest.approx(2 - math.sqrt(3))
    assert [split["lost"] for split in found["critical_links"]] == [list(edge[:2]) for edge in found["edges"]]
    assert [split["lost"] for split in found["critical_robots"]] == [[name] for name in found["robots"][1:-1]]
    copied = copy_matrix(graphs.path(tuple(found["robots"])), found["recommended_coupling"])
    assert copied[3, 0] == pytest.approx(0.5, abs=1e-6)


def test_advise_puts_the_law_beside_plan_and_rehearsal(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("coord_planner.commands.advise.beside_law", lambda *_args, **_named: led_left(*IN_THE_LAW))
    words = "--set", "coupling.strength=1", "--manoeuvre", "led_left"
    status, output = call("advise", SITES / "solar_park.yaml", *words, "--json")
    robot = json.loads(output)["manoeuvres"]["led_left"]["robots"][1]
    assert status == 0
    for key in ("copy_predicted", "copy_planned", "copy_driven"):
        assert robot[key] == pytest.approx(34 / 89, abs=0.01)
    status, output = call("advise", SITES / "solar_park.yaml", *words)
    assert status == 0 and "off the law" in output and "not a safety function" in output


@pytest.mark.parametrize(("words", "status", "expected"), [
    (["--hops", "9"], 2, ["--hops", "1 to 5"]),
    (["--copy", "1.5"], 2, ["--copy", "above 0 and below 1"]),
    (["--led", "mower_9"], 2, ["--led", "mower_9", "mower_1"]),
    (["--manoeuvre", "spin"], 2, ["manoeuvres.names", "corner_left"]),
    (["--set", "coupling.strength=-1"], 2, ["coupling.strength", "at least 0"]),
    (["--worst-link"], 1, ["mower_1 - mower_2", "add a link"]),
])
def test_what_cannot_be_answered_says_so(words: list[str], status: int, expected: list[str]) -> None:
    found, output = call("advise", SITES / "solar_park.yaml", "--no-rehearse", *words)
    assert found == status, output
    for word in expected:
        assert word in output
    assert "Traceback" not in output


def test_advice_for_robots_that_nobody_joins(tmp_path: Path) -> None:
    edges = '["mower_1 mower_2", "mower_2 mower_3", "mower_3 mower_4", "mower_4 mower_5", "mower_5 mower_6"]'
    status, output = call("advise", changed(tmp_path, edges, "[]"), "--no-rehearse", "--json")
    found = json.loads(output)
    assert status == 0 and not found["connected"] and found["recommended_coupling"] is None
    assert found["copy_per_hop"] == [] and "no two robots are joined" in found["warnings"][0]
