# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Shortest paths of a robot that drives forward and turns with bounded curvature.

Dubins, American Journal of Mathematics 79 (1957) 497-516: a shortest path consists of at most three
pieces, arcs of the smallest radius and straight lines, in one of the orders LSL, RSR, LSR, RSL, RLR,
LRL. The classification follows Shkel & Lumelsky, Robotics and Autonomous Systems 34 (2001) 179-202;
the lengths are worked out here from the centres of the two end circles, which stays accurate where
circles nearly touch or coincide.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import attrs
import numpy as np

Pose = Sequence[float]
Turns = tuple[float, float, float]

_TURN = 2 * math.pi
_ANGLE_SLACK = 1e-12  # rounding of a difference of headings
_REACH_SLACK = 1e-12  # rounding of a distance between centres, in radii


@attrs.frozen
class ArcPath:
    """Arcs and straight lines one after the other.

    ``start`` is (x, y, heading) in m, m, rad. ``segments`` holds (curvature in 1/m, left positive,
    length in m); a negative length is driven backwards. A piece may have length 0.
    """

    start: tuple[float, float, float]
    word: str
    segments: tuple[tuple[float, float], ...]

    @property
    def length(self) -> float:
        """Length of the way, metres, backward pieces counted positive."""
        return math.fsum(abs(length) for _, length in self.segments)

    @property
    def turning(self) -> float:
        """Total signed change of the heading, rad, not wrapped: it tells the number of windings."""
        return math.fsum(curvature * length for curvature, length in self.segments)

    @property
    def end(self) -> tuple[float, float, float]:
        """The last pose, heading unwrapped from the start's heading."""
        x, y, heading = self.sample(np.array([self.length]))[0]
        return float(x), float(y), float(heading)

    def sample(self, distances: np.ndarray | Sequence[float]) -> np.ndarray:
        """Poses after the given distances along the way, shape (K, 3), headings unwrapped.

        Distances below 0 or above ``length`` are taken as 0 or ``length``.
        """
        wanted: np.ndarray = np.clip(np.asarray(distances, dtype=float), 0.0, self.length)
        pose, passed = np.array(self.start, dtype=float), 0.0
        poses = np.tile(pose, (len(wanted), 1))
        for curvature, length in self.segments:
            here = wanted >= passed
            along = np.minimum(wanted[here] - passed, abs(length)) * math.copysign(1.0, length)
            poses[here] = _drive(pose, curvature, along)
            pose = _drive(pose, curvature, np.array([length]))[0]
            passed += abs(length)
        return poses


    def curvature(self, distances: np.ndarray) -> np.ndarray:
        """Curvature after the given distances along the way, shape (K,), 1/m."""
        curvatures = np.array([curvature for curvature, _ in self.segments])
        ends = np.cumsum([abs(length) for _, length in self.segments])
        return curvatures[np.minimum(np.searchsorted(ends, distances), len(curvatures) - 1)]


class DubinsPath(ArcPath):
    """A path of three forward pieces; ``word`` is one of LSL, RSR, LSR, RSL, RLR, LRL."""


def through(pose: np.ndarray, curve: np.ndarray) -> ArcPath:
    """Arcs through poses of shape (K, 3), headings unwrapped, laid on from a pose."""
    step = np.diff(curve, axis=0)
    half, middle = step[:, 2] / 2, curve[:-1, 2] + step[:, 2] / 2
    length = (step[:, 0] * np.cos(middle) + step[:, 1] * np.sin(middle)) / np.sinc(half / np.pi)
    driven = np.abs(length) > 1e-6
    segments = tuple((float(turn / way), float(way)) for turn, way in zip(step[driven, 2], length[driven]))
    return ArcPath((float(pose[0]), float(pose[1]), float(pose[2])), "through", segments or ((0.0, 0.0),))


def shortest(start: Pose, end: Pose, radius: float) -> DubinsPath:
    """The shortest forward path between two poses whose radius is nowhere below ``radius``.

    Poses closer than 1e-7 radii may be taken as equal.

    Args:
        start, end: (x, y, heading) in m, m, rad; headings count modulo a full turn.
        radius: smallest radius, m, above 0.

    Raises:
        ValueError: a value is not finite, or the radius is not above 0.
    """
    tie = _REACH_SLACK * radius  # one arc alone is both LSL and LRL: the word with a straight line is named
    return min(paths(start, end, radius), key=lambda path: path.length + (0.0 if path.word[1] == "S" else tie))


def paths(start: Pose, end: Pose, radius: float) -> list[DubinsPath]:
    """The path of every word that joins the two poses, in no particular order; at least two."""
    if not (math.isfinite(radius) and radius > 0):
        raise ValueError(f"radius {radius!r} m; allowed: finite, above 0")
    if len(start) != 3 or len(end) != 3 or not all(map(math.isfinite, (*start, *end))):
        raise ValueError(f"poses {tuple(start)!r} and {tuple(end)!r}; allowed: three finite numbers each")
    dx, dy = (end[0] - start[0]) / radius, (end[1] - start[1]) / radius
    first = (float(start[0]), float(start[1]), float(start[2]))
    found = []
    for word, turns in _words(dx, dy, float(start[2]), float(end[2])):
        curvatures = [{"L": 1.0, "S": 0.0, "R": -1.0}[letter] / radius for letter in word]
        found.append(DubinsPath(first, word, tuple(zip(curvatures, (turn * radius for turn in turns), strict=True))))
    return found


def _words(dx: float, dy: float, start: float, end: float) -> Iterator[tuple[str, Turns]]:
    """Every word with the lengths of its pieces, for a radius of 1; headings in rad."""
    for first, last in ((1, 1), (-1, -1), (1, -1), (-1, 1)):
        across = dx - last * math.sin(end) + first * math.sin(start)
        up = dy + last * math.cos(end) - first * math.cos(start)
        distance, bearing = math.hypot(across, up), math.atan2(up, across)  # from centre to centre
        letters = {1: "L", -1: "R"}
        if first == last:
            heading = bearing if distance > _REACH_SLACK else start
            slack = _ANGLE_SLACK + 4e-15 / max(distance, _REACH_SLACK)
            turns = _straight(first, last, distance, (start, heading, end), slack)
            yield f"{letters[first]}S{letters[last]}", turns
            if distance <= 4 + _REACH_SLACK:
                word = f"{letters[first]}{letters[-first]}{letters[first]}"
                yield word, _three_arcs(first, distance, bearing, start, end)
        elif distance >= 2 - _REACH_SLACK:
            length = math.sqrt(max((distance - 2) * (distance + 2), 0.0))
            heading = bearing + math.atan2(2 * first, length)
            slack = _ANGLE_SLACK + 1e-15 / max(length, 3e-8)
            turns = _straight(first, last, length, (start, heading, end), slack)
            yield f"{letters[first]}S{letters[last]}", turns


def _straight(first: int, last: int, length: float, headings: Turns, slack: float) -> Turns:
    """Arc, straight line, arc; ``headings`` are those of the start, the line and the end.

    ``slack`` is what rounding can do to the line's heading where the line is short: an arc which
    that has turned from nothing into a full turn is dropped.
    """
    start, heading, end = headings
    if _missing(first * (heading - start)) < slack:
        heading = start
    elif _missing(last * (end - heading)) < slack:
        heading = end
    return _angle(first * (heading - start)), length, _angle(last * (end - heading))


def _three_arcs(first: int, distance: float, bearing: float, start: float, end: float) -> Turns:
    """Three touching arcs of radius 1, the middle one above half a turn."""
    opening = math.acos(min(distance / 4, 1.0))  # at the first centre, from the last to the middle one
    joint_1 = bearing + first * opening + first * math.pi / 2
    joint_2 = bearing - first * opening - first * math.pi / 2
    return _angle(first * (joint_1 - start)), _angle(-first * (joint_2 - joint_1)), _angle(first * (end - joint_2))


def _angle(angle: float) -> float:
    """The angle in [0, 2 pi), rounding just below a full turn taken as 0."""
    return 0.0 if _missing(angle) < _ANGLE_SLACK else angle % _TURN


def _missing(angle: float) -> float:
    """How much the angle lacks to full turns, in (0, 2 pi]."""
    return _TURN - angle % _TURN


def _drive(pose: np.ndarray, curvature: float, along: np.ndarray) -> np.ndarray:
    """Poses after signed distances on one arc: chord = distance * sinc(turn / 2)."""
    half = curvature * along / 2
    chord, heading = along * np.sinc(half / np.pi), pose[2] + half
    return np.stack([pose[0] + chord * np.cos(heading), pose[1] + chord * np.sin(heading), pose[2] + 2 * half], axis=-1)
