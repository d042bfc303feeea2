# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A coupling that does nothing, and one that asks more of a tick than it can keep."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ..graph import NeighbourGraph
from .copying import copy_matrix

_NOTHING = 0.05  # of a neighbour's turning: less is lost in the noise of poses
_SETTLED = 0.02  # of the slowest disagreement: what is left is smaller than what limits and noise leave
# Condition of I + chi L beyond which ticks were seen to take longer and to end farther from the optimum: at 3,700 all
# end within 3e-3 of the best cost, at 7,500 some are not solved; test/measure_conditioning.py, six robots in a line.
_ILL = 4000.0


@attrs.frozen
class Strength:
    """How strong a coupling is on a graph.

    Attributes:
        condition: largest over smallest eigenvalue of I + chi L, the price of turning.
        neighbour: largest part of a neighbour's turning that any robot copies. slowest: part of the slowest
            disagreement that is left, over all groups of joined robots; 0 where nobody is joined.
        useful: couplings from which neighbours copy a twentieth, and from which more gains nothing;
            NaN where nobody is joined.
        warnings: what is wrong with it, each with what to do.
    """

    condition: float
    neighbour: float
    slowest: float
    useful: tuple[float, float]
    warnings: tuple[str, ...]


def strength(graph: NeighbourGraph, coupling: float) -> Strength:
    """Judge a coupling."""
    spectrum = np.maximum(graph.spectrum(), 0.0)
    joined = spectrum[spectrum > 1e-9 * max(float(spectrum[-1]), 1.0)]
    condition = 1.0 + coupling * float(spectrum[-1])
    if not len(joined):
        alone = "no two robots are joined: nobody copies anybody, whatever the coupling; add links to graph.edges"
        return Strength(condition, 0.0, 0.0, (math.nan, math.nan), (alone,) if len(graph.names) > 1 else ())
    edges = graph.index_edges()
    useful = _from_which_something_is_copied(graph), (1.0 / _SETTLED - 1.0) / float(joined[0])
    shares = copy_matrix(graph, coupling)
    neighbour = float(max(shares[edges[:, 0], edges[:, 1]].max(), shares[edges[:, 1], edges[:, 0]].max()))
    slowest = 1.0 / (1.0 + coupling * float(joined[0]))
    return Strength(condition, neighbour, slowest, useful, _warnings(coupling, condition, neighbour, slowest, useful))


def _warnings(
    coupling: float, condition: float, neighbour: float, slowest: float, useful: tuple[float, float]
) -> tuple[str, ...]:
    found = []
    if neighbour < _NOTHING:
        found.append(
            f"a coupling of {coupling:g} does next to nothing: nobody copies more than {100 * neighbour:.2g}% of a "
            f"neighbour's turning; {100 * _NOTHING:g}% needs {useful[0]:.2g}"
        )
    if condition > _ILL:
        found.append(
            f"a coupling of {coupling:g} makes some differences in turning {condition:.3g} times as dear as turning "
            f"itself: ticks are ill-conditioned, take longer and end farther from the best plan; stay below "
            f"{coupling * _ILL / condition:.3g}"
        )
    elif slowest < _SETTLED:
        found.append(
            f"a coupling of {coupling:g} gains nothing over {useful[1]:.3g}, where no disagreement keeps more than "
            f"{100 * _SETTLED:g}%"
        )
    return tuple(found)


def _from_which_something_is_copied(graph: NeighbourGraph) -> float:
    """Smallest coupling, to a hundredth, with which some neighbour copies a twentieth."""
    edges = graph.index_edges()
    low, high = 1e-9, 1e9
    while high / low > 1.01:  # what is copied grows with the coupling
        middle = math.sqrt(low * high)
        shares = copy_matrix(graph, middle)
        most = max(shares[edges[:, 0], edges[:, 1]].max(), shares[edges[:, 1], edges[:, 0]].max())
        low, high = (low, middle) if most >= _NOTHING else (middle, high)
    return high
