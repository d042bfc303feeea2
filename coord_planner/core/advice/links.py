# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Which links and robots hold the graph together, and what further links would gain."""

from __future__ import annotations

from itertools import combinations
from typing import Optional

import attrs
import networkx as nx
import numpy as np

from ..graph import NeighbourGraph
from .copying import copy_matrix

_RANKED_THE_SAME = 1e-9


@attrs.frozen
class Split:
    """What falls apart when a link or a robot is lost.

    Attributes:
        lost: the names of the link's two robots, or of one robot.
        parts: groups that are no longer joined, within the part of the graph that the lost one was in.
    """

    lost: tuple[str, ...]
    parts: tuple[tuple[str, ...], ...]


@attrs.frozen
class NewLink:
    """A link that is not there, and what it would do.

    Attributes:
        robots: its two ends. joins: whether they are in parts that no way joins yet.
        weakest_before, weakest_after: smallest part that any robot copies of a led one's turning.
        connectivity_before, connectivity_after: second-smallest eigenvalue of the Laplacian (Fiedler 1973).
        secured: links whose loss would then no longer split anything.
        distance: metres between the two at the start; None when a start is not known.
    """

    robots: tuple[str, str]
    joins: bool
    weakest_before: float
    weakest_after: float
    connectivity_before: float
    connectivity_after: float
    secured: tuple[tuple[str, str], ...]
    distance: Optional[float] = None


def critical_links(graph: NeighbourGraph) -> tuple[Split, ...]:
    """Links whose loss splits the graph (bridges), in the order of the edges."""
    whole, found = graph.networkx(), []
    bridges = {frozenset(bridge) for bridge in nx.bridges(whole)}
    for first, second, _ in graph.edges:
        if frozenset((first, second)) in bridges:
            rest = nx.restricted_view(whole, [], [(first, second)])
            found.append(Split((first, second), _parts(graph, rest, (first, second))))
    return tuple(found)


def critical_robots(graph: NeighbourGraph) -> tuple[Split, ...]:
    """Robots whose loss splits the rest (articulation points), in the order of the names."""
    whole, found = graph.networkx(), []
    joints = set(nx.articulation_points(whole))
    for name in graph.names:
        if name in joints:
            rest = nx.restricted_view(whole, [name], [])
            found.append(Split((name,), _parts(graph, rest, tuple(whole[name]))))
    return tuple(found)


def suggested_links(
    graph: NeighbourGraph, coupling: float, led: tuple[int, ...], weight: float = 1.0,
    places: Optional[np.ndarray] = None,
) -> tuple[NewLink, ...]:
    """Every link that is not there, the most useful first.

    Ranked by whether it joins parts of the graph, then by what the least of the copying robots gains, by what the
    connectivity gains, and by distance.

    Args:
        led: robots that may be led. places: x and y of the robots at the start, shape (N, 2), NaN where not known.
    """
    there = {frozenset(edge[:2]) for edge in graph.edges}
    before, connected, bridges = _weakest(graph, coupling, led), _connectivity(graph), _bridges(graph)
    part = {name: n for n, names in enumerate(graph.components()) for name in names}
    found = []
    for k, j in combinations(range(len(graph.names)), 2):
        first, second = graph.names[k], graph.names[j]
        if frozenset((first, second)) in there:
            continue
        more = NeighbourGraph(graph.names, (*graph.edges, (first, second, weight)))
        found.append(NewLink(
            (first, second), part[first] != part[second], before, _weakest(more, coupling, led),
            connected, _connectivity(more), tuple(sorted(bridges - _bridges(more))), _distance(places, k, j),
        ))
    return tuple(sorted(found, key=_rank))


def _rank(link: NewLink) -> tuple[bool, float, float, float]:
    def gained(after: float, before: float) -> float:
        return -round((after - before) / _RANKED_THE_SAME)

    far = np.inf if link.distance is None else link.distance
    return (not link.joins, gained(link.weakest_after, link.weakest_before),
            gained(link.connectivity_after, link.connectivity_before), far)


def _weakest(graph: NeighbourGraph, coupling: float, led: tuple[int, ...]) -> float:
    return float(copy_matrix(graph, coupling)[:, list(led)].min())


def _connectivity(graph: NeighbourGraph) -> float:
    return float(max(graph.spectrum()[1], 0.0)) if len(graph.names) > 1 else 0.0


def _bridges(graph: NeighbourGraph) -> set[tuple[str, str]]:
    where = {name: k for k, name in enumerate(graph.names)}
    ordered = (sorted(bridge, key=lambda name: where[name]) for bridge in nx.bridges(graph.networkx()))
    return {(first, second) for first, second in ordered}


def _distance(places: Optional[np.ndarray], k: int, j: int) -> Optional[float]:
    if places is None or not np.isfinite(places[[k, j]]).all():
        return None
    return float(np.hypot(*(places[k] - places[j])))


def _parts(graph: NeighbourGraph, rest: nx.Graph, beside: tuple[str, ...]) -> tuple[tuple[str, ...], ...]:
    """Groups of the rest that hold one of the robots beside what was lost."""
    groups = [set(group) for group in nx.connected_components(rest) if set(group) & set(beside)]
    ordered = [tuple(name for name in graph.names if name in group) for group in groups]
    return tuple(sorted(ordered, key=lambda group: graph.names.index(group[0])))
