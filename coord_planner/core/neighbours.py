# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The neighbour graph from where the robots are: the nearest of each, or all within a range.

What is joined already counts as nearer than it is, so that edges do not flicker where two distances are about equal or
about the range.
"""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np

from .graph import NeighbourGraph
from .settings import Neighbours

_FADING = 0.25  # part of its reach in which an edge that is about to part counts less and less


def from_poses(
    settings: Neighbours, names: tuple[str, ...], places: np.ndarray, before: Optional[NeighbourGraph] = None
) -> NeighbourGraph:
    """The graph that the settings ask for; weights are 1.

    Args:
        places: shape (N, 2), metres, in the order of names. before: the graph in force, for the hysteresis.
    """
    apart = _felt(settings, names, places, before)
    if settings.source == "within_range":
        joined = apart < settings.range
    else:
        joined = np.zeros(apart.shape, dtype=bool)
        order = np.argsort(apart, axis=1, kind="stable")[:, : min(settings.count, len(names) - 1)]
        np.put_along_axis(joined, order, True, axis=1)
    pairs = np.argwhere(np.triu(joined | joined.T, k=1))
    return NeighbourGraph(names, tuple((names[k], names[j], 1.0) for k, j in pairs))


def _felt(
    settings: Neighbours, names: tuple[str, ...], places: np.ndarray, before: Optional[NeighbourGraph]
) -> np.ndarray:
    """Distances, shape (N, N), those of robots that are joined already made less; inf to oneself."""
    apart = np.linalg.norm(places[:, None] - places[None], axis=2)
    if before is not None:
        k, j = before.relative_to(names).index_edges().T
        apart[[k, j], [j, k]] /= 1.0 + settings.hysteresis
    np.fill_diagonal(apart, math.inf)
    return np.asarray(apart)


def holding(settings: Neighbours, graph: NeighbourGraph, places: np.ndarray) -> float:
    """How well the graph holds together: the second-smallest eigenvalue of its Laplacian (Fiedler, 1973), 0 where it
    falls apart. Where edges have a range they count less and less as they come near to it.

    Args:
        places: shape (N, 2), metres, in the order of the graph's names.
    """
    if len(graph.names) < 2:
        return math.inf
    if settings.source != "within_range" or not np.isfinite(places).all():
        return float(graph.spectrum()[1])
    reach = settings.range * (1.0 + settings.hysteresis)
    faded = []
    for (first, second, weight), (k, j) in zip(graph.edges, graph.index_edges()):
        left = 1.0 - float(np.linalg.norm(places[k] - places[j])) / reach
        faded.append((first, second, weight * min(max(left / _FADING, 1e-9), 1.0)))
    return float(NeighbourGraph(graph.names, tuple(faded)).spectrum()[1])


@attrs.define
class Lookout:
    """Looks again for neighbours every so often."""

    _looked: float = -math.inf

    def found(
        self, settings: Neighbours, graph: NeighbourGraph, places: np.ndarray, now: float, at_once: bool = False
    ) -> Optional[NeighbourGraph]:
        """Another graph than the one in force, or None.

        Args:
            places: shape (N, 2), in the order of the graph's names; NaN for robots that were never seen.
            now: seconds. at_once: whether or not it is time to look.
        """
        if settings.source == "listed" or not np.isfinite(places).all():
            return None
        if not at_once and 0.0 <= now - self._looked < settings.period:
            return None
        self._looked = now
        sensed = from_poses(settings, graph.names, places, graph)
        return sensed if {edge[:2] for edge in sensed.edges} != _pairs(graph) else None


def _pairs(graph: NeighbourGraph) -> set[tuple[str, str]]:
    """Edges with their robots in the order of names."""
    return {(graph.names[min(edge)], graph.names[max(edge)]) for edge in graph.index_edges().tolist()}
