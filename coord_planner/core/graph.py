# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The neighbour graph: who copies whom, and what follows from it."""

from __future__ import annotations

import math

import attrs
import networkx as nx
import numpy as np

from ..errors import SettingsError

Edge = tuple[str, str, float]
_KEY = "graph.edges"


@attrs.frozen
class NeighbourGraph:
    """Undirected, weighted. Rows and columns of every matrix are in the order of ``names``.

    Raises:
        SettingsError: an edge names a robot that is not there, joins a robot with itself, stands twice, or
            has a weight that is not a positive number.
    """

    names: tuple[str, ...]
    edges: tuple[Edge, ...] = ()

    def __attrs_post_init__(self) -> None:
        seen: set[frozenset[str]] = set()
        for first, second, weight in self.edges:
            shown = f"'{first} {second} {weight:g}'"
            for name in (first, second):
                if name not in self.names:
                    raise SettingsError(f"{shown} names {name!r}, which is not in the fleet", key=_KEY,
                                        allowed=", ".join(self.names))
            if first == second:
                raise SettingsError(f"{shown} joins {first!r} with itself", key=_KEY, allowed="two different robots")
            if frozenset((first, second)) in seen:
                raise SettingsError(f"{shown} stands there twice", key=_KEY, allowed="each pair once, in either order")
            if not (math.isfinite(weight) and weight > 0):
                raise SettingsError(f"{shown} has the weight {weight:g}", key=_KEY, allowed="a number above 0")
            seen.add(frozenset((first, second)))

    def index_edges(self) -> np.ndarray:
        """Edges as positions of their robots, shape (E, 2)."""
        where = {name: k for k, name in enumerate(self.names)}
        return np.array([[where[a], where[b]] for a, b, _ in self.edges], dtype=int).reshape(-1, 2)

    def weights(self) -> np.ndarray:
        """Weights of the edges, shape (E,)."""
        return np.array([weight for _, _, weight in self.edges], dtype=float)

    def networkx(self) -> nx.Graph:
        """The same graph as networkx holds it; attribute ``weight`` on the edges."""
        graph = nx.Graph()
        graph.add_nodes_from(self.names)
        graph.add_weighted_edges_from(self.edges)
        return graph

    def laplacian(self) -> np.ndarray:
        """Weighted graph Laplacian, shape (N, N): degrees on the diagonal, minus the weights beside it."""
        matrix = np.zeros((len(self.names), len(self.names)))
        for (k, j), weight in zip(self.index_edges(), self.weights()):
            matrix[[k, j], [k, j]] += weight
            matrix[[k, j], [j, k]] -= weight
        return matrix

    @property
    def connected(self) -> bool:
        """Whether a way along edges leads from every robot to every other."""
        return nx.is_connected(self.networkx())

    def components(self) -> tuple[tuple[str, ...], ...]:
        """Robots that are joined, in the order of ``names``."""
        groups = [set(group) for group in nx.connected_components(self.networkx())]
        ordered = [tuple(name for name in self.names if name in group) for group in groups]
        return tuple(sorted(ordered, key=lambda group: self.names.index(group[0])))

    def spectrum(self) -> np.ndarray:
        """Eigenvalues of the Laplacian, ascending, shape (N,)."""
        return np.linalg.eigvalsh(self.laplacian())

    def copying(self, coupling: float) -> np.ndarray:
        """Psi = (I + chi L)^-1, shape (N, N); with one led robot 0, u_k = (Psi_k0 / Psi_00) u_0."""
        return np.linalg.inv(np.eye(len(self.names)) + coupling * self.laplacian())

    def hops(self) -> np.ndarray:
        """Edges on the shortest way from robot to robot, shape (N, N), inf where there is none."""
        counted = np.full((len(self.names),) * 2, np.inf)
        where = {name: k for k, name in enumerate(self.names)}
        for name, lengths in nx.all_pairs_shortest_path_length(self.networkx()):
            for other, count in lengths.items():
                counted[where[name], where[other]] = count
        return counted

    def relative_to(self, names: tuple[str, ...]) -> NeighbourGraph:
        """The same edges over another list of robots, without edges to robots that are not in it."""
        kept = tuple(edge for edge in self.edges if edge[0] in names and edge[1] in names)
        return NeighbourGraph(names, kept)


def path(names: tuple[str, ...], weight: float = 1.0) -> NeighbourGraph:
    """Every robot joined with the next one."""
    return NeighbourGraph(names, tuple((a, b, weight) for a, b in zip(names, names[1:])))


def hop_fraction(coupling: float) -> float:
    """Fraction of its neighbour's turning that each further robot copies along a long line.

    Decaying root of chi r^2 - (1 + 2 chi) r + chi = 0: (1 + 2 chi - sqrt(1 + 4 chi)) / (2 chi).
    Written without the cancellation at small chi.
    """
    return 2.0 * coupling / (1.0 + 2.0 * coupling + math.sqrt(1.0 + 4.0 * coupling))
