# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The smallest coupling with which robots far from a led one still copy enough of its turning."""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np
from scipy.optimize import brentq

from ...errors import RefusedError, SettingsError
from ..graph import NeighbourGraph
from ..parameter import describe
from ..settings import Coupling
from .copying import copy_matrix

_LARGEST = float(describe(Coupling)["strength"].maximum or math.inf)
_SMALLEST = 1e-6
_PRECISION = 1e-9  # of the coupling, relative


@attrs.frozen
class Wanted:
    """What robots shall copy.

    Attributes:
        share: part of the led robot's turning, between 0 and 1. hops: links between it and the copying robot.
        led: robots that may be led.
    """

    share: float
    hops: int
    led: tuple[int, ...]


@attrs.frozen
class Choice:
    """A coupling, and the pair and the lost link that ask for it.

    Attributes:
        coupling: chi. led, copying: the pair that is weakest with it. lost: the link whose loss asks for it.
    """

    coupling: float
    led: str
    copying: str
    lost: Optional[tuple[str, str]] = None


def smallest_coupling(graph: NeighbourGraph, hops: np.ndarray, wanted: Wanted) -> Choice:
    """The smallest coupling for which every robot at so many hops copies the share, whichever robot is led.

    What is copied grows with the coupling (see ``copying``), so that bisection finds it.

    Args:
        hops: from robot to robot, shape (N, N), inf where there is no way.

    Raises:
        SettingsError: the share, the hops, or that no two robots are so many hops apart.
        RefusedError: not even the largest coupling that the parameter file allows does it.
    """
    pairs = _pairs(graph, hops, wanted)
    return _choose(graph, pairs, wanted, None)


def after_any_loss(graph: NeighbourGraph, hops: np.ndarray, wanted: Wanted) -> Choice:
    """The smallest coupling that still does after any one link is lost; hops are those of the whole graph.

    Raises:
        SettingsError, RefusedError: as for :func:`smallest_coupling`; refused also where a loss parts such a pair.
    """
    pairs = _pairs(graph, hops, wanted)
    choices = [_choose(graph, pairs, wanted, None)]
    for lost in graph.edges:
        rest = NeighbourGraph(graph.names, tuple(edge for edge in graph.edges if edge != lost))
        choices.append(_choose(rest, pairs, wanted, lost[:2]))
    return max(choices, key=lambda choice: choice.coupling)


def _choose(
    graph: NeighbourGraph, pairs: tuple[np.ndarray, np.ndarray], wanted: Wanted, lost: Optional[tuple[str, str]]
) -> Choice:
    def missing(log_coupling: float) -> float:
        return float(copy_matrix(graph, math.exp(log_coupling))[pairs].min()) - wanted.share

    low, high = math.log(_SMALLEST), math.log(_LARGEST)
    if missing(high) < 0.0:
        raise _out_of_reach(graph, pairs, wanted, lost)
    found = low if missing(low) >= 0.0 else float(brentq(missing, low, high, xtol=_PRECISION))
    copying, led = _weakest(graph, pairs, math.exp(found))
    return Choice(math.exp(found), led, copying, lost)


def _weakest(graph: NeighbourGraph, pairs: tuple[np.ndarray, np.ndarray], coupling: float) -> tuple[str, str]:
    """The copying robot and the led one of the pair in which least is copied."""
    at = int(np.argmin(copy_matrix(graph, coupling)[pairs]))
    return graph.names[pairs[0][at]], graph.names[pairs[1][at]]


def _pairs(graph: NeighbourGraph, hops: np.ndarray, wanted: Wanted) -> tuple[np.ndarray, np.ndarray]:
    if not 0.0 < wanted.share < 1.0:
        raise SettingsError(f"{wanted.share:g} is no part of a turn that could be copied", key="--copy",
                            allowed="above 0 and below 1, e.g. 0.5")
    chosen = np.zeros_like(hops, dtype=bool)
    chosen[:, list(wanted.led)] = hops[:, list(wanted.led)] == wanted.hops
    if not chosen.any():
        ways = hops[:, list(wanted.led)]
        farthest = int(np.max(ways, initial=0.0, where=np.isfinite(ways)))
        led = graph.names[wanted.led[0]] if len(wanted.led) == 1 else "any robot"
        raise SettingsError(
            f"no robot is {wanted.hops} hops from {led}", key="--hops",
            allowed=f"1 to {farthest}" if farthest else "nothing: no link leads from there to another robot",
        )
    copying, led_robots = np.nonzero(chosen)
    return copying, led_robots


def _out_of_reach(
    graph: NeighbourGraph, pairs: tuple[np.ndarray, np.ndarray], wanted: Wanted, lost: Optional[tuple[str, str]]
) -> RefusedError:
    copying, led = _weakest(graph, pairs, _LARGEST)
    share = float(copy_matrix(graph, _LARGEST)[graph.names.index(copying), graph.names.index(led)])
    if lost is not None and share == 0.0:
        return RefusedError(
            f"when the link {lost[0]} - {lost[1]} is lost, no way leads from {led} to {copying}, whatever the coupling",
            "add a link (see the suggested ones), so that no single link holds the graph together",
        )
    after = f" after the loss of {lost[0]} - {lost[1]}" if lost else ""
    return RefusedError(
        f"at the largest coupling, {_LARGEST:g}, {copying} copies {share:.4g} of the turning of {led}{after}, and "
        f"{wanted.share:g} is asked",
        "ask for less, for fewer hops, or add a link",
    )
