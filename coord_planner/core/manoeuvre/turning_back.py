# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Ways that lead back beside themselves: out along x, half a turn to the left, home along a line further left.

The first piece begins at the origin heading along x, the last one ends on the line y = shift heading along -x. Loops
are driven forward only: half a turn with a straight piece across where there is room for it, else a bulb that swings
out to the other side first. Turns with changes of gear need less depth: of three points (ahead, back, ahead), with a
straight piece driven backward between two quarter turns, and of five points with a straight piece driven forward
between two quarter turns that are each made in two moves. (Common practice at row ends.)
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

import attrs
import numpy as np

from ..dubins import ArcPath

Segments = tuple[tuple[float, float], ...]

_PIECES = 6  # arcs that stand for a clothoid
_QUARTER = math.pi / 2
_FIVE_POINTS = (math.radians(60.0), math.radians(45.0), math.radians(30.0))  # first moves of a quarter turn
_SAMPLES = 0.1  # metres between poses at which an outline is looked at


@attrs.frozen(eq=False)
class TurnBack:
    """A way back.

    Attributes:
        kind: what it is called. segments: curvature, left positive, and signed length of each piece.
        ahead: how far along x it ends, metres. changes: of gear.
    """

    kind: str
    segments: Segments
    ahead: float
    changes: int

    @property
    def length(self) -> float:
        return math.fsum(abs(length) for _, length in self.segments)

    def depth(self, corners: np.ndarray) -> float:
        """How far along x the footprint reaches, metres; ``corners`` in the robot's frame, shape (4, 2)."""
        poses = self.poses()
        s, c = np.sin(poses[:, 2]), np.cos(poses[:, 2])
        return float((poses[:, :1] + c[:, None] * corners[:, 0] - s[:, None] * corners[:, 1]).max())

    def poses(self) -> np.ndarray:
        """Poses along it, where pieces meet among them, shape (K, 3)."""
        way = ArcPath((0.0, 0.0, 0.0), self.kind, self.segments)
        joints = np.cumsum([abs(length) for _, length in self.segments])
        even = np.linspace(0.0, way.length, max(2, math.ceil(way.length / _SAMPLES)))
        return way.sample(np.unique(np.concatenate([even, joints])))


def turns_back(shift: float, radius: float, rate: float, reverse: bool) -> Iterator[TurnBack]:
    """Every kind of turn that fits between two lines ``shift`` apart, metres.

    Args:
        radius: of the bends, metres. rate: change of curvature per metre where the robot does not stand, 1/m^2.
        reverse: whether turns with changes of gear count too.
    """
    yield _loop(shift, radius, rate)
    if reverse:
        for found in (_three_points(shift, radius, rate), _back_between(shift, radius, rate)):
            if found is not None:
                yield found
        for first in _FIVE_POINTS:
            five = _five_points(shift, radius, rate, first)
            if five is not None:
                yield five


def bend(angle: float, radius: float, rate: float, ease: tuple[bool, bool] = (True, True)) -> Segments:
    """A bend to the left whose curvature rises and falls at ``rate`` where ``ease`` says so, at its ends.

    Clothoids in short arcs (Fresnel integrals, DLMF 7.2). A bend too short to reach the radius stays wider.
    """
    ramps = sum(ease)
    peak = 1.0 / radius
    if ramps:
        peak = min(peak, math.sqrt(2.0 * rate * angle / ramps))
    ramp = peak / rate
    hold = max(angle / peak - ramps * ramp / 2, 0.0) if peak > 0.0 else 0.0
    rising = tuple((peak * (i + 0.5) / _PIECES, ramp / _PIECES) for i in range(_PIECES))
    return (rising if ease[0] else ()) + ((peak, hold),) + (rising[::-1] if ease[1] else ())


def _made(kind: str, segments: Segments) -> TurnBack:
    kept = tuple(segment for segment in segments if abs(segment[1]) > 1e-9)
    gears = [length > 0.0 for _, length in kept]
    changes = sum(before != after for before, after in zip(gears, gears[1:]))
    return TurnBack(kind, kept, ArcPath((0.0, 0.0, 0.0), kind, kept).end[0], changes)


def _across(segments: Segments) -> float:
    return ArcPath((0.0, 0.0, 0.0), "", segments).end[1]


def _right(segments: Segments) -> Segments:
    return tuple((-curvature, length) for curvature, length in segments)


def _backward(segments: Segments) -> Segments:
    """The same change of heading, driven backward."""
    return tuple((-curvature, -length) for curvature, length in segments)


def _root(excess: Callable[[float], float], low: float, high: float) -> float | None:
    """Where a function that rises between two ends passes 0, by bisection; None when it does not."""
    if excess(low) > 0.0 or excess(high) < 0.0:
        return None
    for _ in range(50):
        middle = (low + high) / 2
        low, high = (low, middle) if excess(middle) > 0.0 else (middle, high)
    return high


def _loop(shift: float, radius: float, rate: float) -> TurnBack:
    quarter = bend(_QUARTER, radius, rate)
    across = shift - 2.0 * _across(quarter)
    if across >= 0.0:
        return _made("loop", (*quarter, (0.0, across), *quarter))
    if _across(bend(math.pi, radius, rate)) <= shift:
        wider = _root(lambda r: _across(bend(math.pi, r, rate)) - shift, radius, max(shift, radius))
        return _made("loop", bend(math.pi, wider or radius, rate))

    def bulb(out: float) -> Segments:
        swing = _right(bend(out, radius, rate)) if out > 0.0 else ()
        return (*swing, *bend(math.pi + 2.0 * out, radius, rate), *swing)

    out = _root(lambda angle: shift - _across(bulb(angle)), 1e-6, math.pi)
    return _made("bulb", bulb(out if out is not None else math.pi / 3))


def _three_points(shift: float, radius: float, rate: float) -> TurnBack | None:
    def moves(angle: float) -> Segments:
        back = _backward(bend(math.pi - 2.0 * angle, radius, rate, (False, False)))
        return (*bend(angle, radius, rate, (True, False)), *back, *bend(angle, radius, rate, (False, True)))

    angle = _root(lambda each: _across(moves(each)) - shift, 0.2, _QUARTER - 0.05)
    return None if angle is None else _made("three points", moves(angle))


def _back_between(shift: float, radius: float, rate: float) -> TurnBack | None:
    into, out = bend(_QUARTER, radius, rate, (True, False)), bend(_QUARTER, radius, rate, (False, True))
    back = _across((*into, *out)) - shift
    return _made("back between", (*into, (0.0, -back), *out)) if back > 0.1 else None


def _five_points(shift: float, radius: float, rate: float, first: float) -> TurnBack | None:
    back = _backward(bend(_QUARTER - first, radius, rate, (False, False)))
    into = (*bend(first, radius, rate, (True, False)), *back)
    out = (*back, *bend(first, radius, rate, (False, True)))
    between = shift - _across((*into, *out))
    return _made("five points", (*into, (0.0, between), *out)) if between > 0.1 else None
