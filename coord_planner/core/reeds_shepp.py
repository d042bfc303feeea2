# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Shortest paths of a robot that drives both ways and turns with bounded curvature.

Reeds & Shepp, Pacific Journal of Mathematics 145 (1990) 367-393: a shortest path has one of 48 words of at most five
pieces. Section 8 there gives one formula for each of nine families; the other words follow by driving them backwards
(time flip), mirrored (left for right), or in reverse order. Lengths here carry the sign of the gear. Whatever a
formula gives is driven and kept only where it arrives, whichever signs it has; the shortest of a superset of the
words is the shortest. (Formulas and their numbers from memory; each is checked by driving it.)
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

from .dubins import ArcPath, Pose

Lengths = tuple[float, ...]
Formula = Callable[[float, float, float], "Lengths | None"]

_ARRIVES = 1e-9  # radii and rad
_NOTHING = 1e-12  # pieces shorter than this, in radii, are left out
_QUARTER = math.pi / 2


class ReedsSheppPath(ArcPath):
    """Up to five pieces, driven forward (positive length) or backward; ``word`` names them, e.g. L+R-S-L-."""

    @property
    def gears(self) -> tuple[int, ...]:
        """+1 forward, -1 backward, for each run of pieces in one gear: the schedule of gears."""
        signs = [1 if length > 0 else -1 for _, length in self.segments]
        return tuple(sign for k, sign in enumerate(signs) if k == 0 or sign != signs[k - 1])


def shortest(start: Pose, end: Pose, radius: float) -> ReedsSheppPath:
    """The shortest path between two poses, forward and backward, whose radius is nowhere below ``radius``.

    Of equally short ones the one that changes gear least often.

    Args:
        start, end: (x, y, heading) in m, m, rad; headings count modulo a full turn.
        radius: smallest radius, m, above 0.

    Raises:
        ValueError: a value is not finite, or the radius is not above 0.
    """
    found = paths(start, end, radius)
    least = min(path.length for path in found)
    equal = [path for path in found if path.length <= least + 1e-9 * radius]
    return min(equal, key=lambda path: (len(path.gears), len(path.segments)))


def paths(start: Pose, end: Pose, radius: float) -> list[ReedsSheppPath]:
    """Paths of all words that join the two poses, shortest first; a word may stand there with several lengths."""
    if not (math.isfinite(radius) and radius > 0):
        raise ValueError(f"radius {radius!r} m; allowed: finite, above 0")
    if len(start) != 3 or len(end) != 3 or not all(map(math.isfinite, (*start, *end))):
        raise ValueError(f"poses {tuple(start)!r} and {tuple(end)!r}; allowed: three finite numbers each")
    ahead, left = (end[0] - start[0]) / radius, (end[1] - start[1]) / radius
    c, s = math.cos(start[2]), math.sin(start[2])
    turn = math.remainder(end[2] - start[2], 2 * math.pi)
    goal = (c * ahead + s * left, c * left - s * ahead, turn)
    first = (float(start[0]), float(start[1]), float(start[2]))
    found: dict[tuple[tuple[str, float], ...], ReedsSheppPath] = {}
    for letters, lengths in _candidates(*goal):
        pieces = [(letter, length) for letter, length in zip(letters, lengths) if abs(length) > _NOTHING]
        if _apart(_drive(pieces), goal) < _ARRIVES * (1 + math.hypot(*goal[:2])):
            word = "".join(f"{letter}{'+' if length > 0 else '-'}" for letter, length in pieces)
            segments = tuple((_CURVATURE[letter] / radius, length * radius) for letter, length in pieces)
            rounded = tuple((letter, round(length, 9)) for letter, length in pieces)
            found[rounded] = ReedsSheppPath(first, word, segments)
    words = [path for path in found.values() if len(path.gears) <= 3]  # more changes of gear make no word
    return sorted(words, key=lambda path: path.length)


_CURVATURE = {"L": 1.0, "S": 0.0, "R": -1.0}
_MIRRORED = str.maketrans("LR", "RL")


def _candidates(x: float, y: float, turn: float) -> Iterator[tuple[str, Lengths]]:
    """Letters and signed lengths, for a radius of 1, of what the formulas give under all symmetries."""
    back_x = x * math.cos(turn) + y * math.sin(turn)  # the same way from its end
    back_y = x * math.sin(turn) - y * math.cos(turn)
    for letters, formula in _FORMULAS:
        for order in (1, -1):
            ahead, left = (x, y) if order == 1 else (back_x, back_y)
            for gear in (1, -1):
                for side in (1, -1):
                    lengths = formula(gear * ahead, side * left, gear * side * turn)
                    if lengths is not None:
                        named = letters if side == 1 else letters.translate(_MIRRORED)
                        yield named[::order], tuple(gear * length for length in lengths[::order])


def _angle(angle: float) -> float:
    return math.remainder(angle, 2 * math.pi)


def _left_circle(x: float, y: float, turn: float) -> tuple[float, float]:
    """From the first left circle's centre to the last left circle's, as distance and bearing."""
    across, up = x - math.sin(turn), y - 1 + math.cos(turn)
    return math.hypot(across, up), math.atan2(up, across)


def _right_circle(x: float, y: float, turn: float) -> tuple[float, float]:
    """From the first left circle's centre to the last right circle's, as distance and bearing."""
    across, up = x + math.sin(turn), y - 1 - math.cos(turn)
    return math.hypot(across, up), math.atan2(up, across)


def _lsl(x: float, y: float, turn: float) -> Lengths:
    """Equation 8.1."""
    distance, bearing = _left_circle(x, y, turn)
    first = _angle(bearing)
    return first, distance, _angle(turn - first)


def _lsr(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.2."""
    distance, bearing = _right_circle(x, y, turn)
    if distance < 2 - _NOTHING:
        return None
    straight = math.sqrt(max((distance - 2) * (distance + 2), 0.0))
    first = _angle(bearing + math.atan2(2, straight))
    return first, straight, _angle(first - turn)


def _lrl(x: float, y: float, turn: float) -> Lengths | None:
    """Equations 8.3 and 8.4."""
    distance, bearing = _left_circle(x, y, turn)
    if distance > 4 + _NOTHING:
        return None
    middle = -2 * math.asin(min(distance / 4, 1.0))
    first = _angle(bearing + middle / 2 + math.pi)
    return first, middle, _angle(turn - first + middle)


def _lrlr(first_middle: float, second_middle: float, x: float, y: float, turn: float) -> Lengths:
    """First and last arc of four, given the middle ones: equations 8.5 and 8.6."""
    across, up = x + math.sin(turn), y - 1 - math.cos(turn)
    delta = first_middle - second_middle
    a = math.sin(first_middle) - math.sin(delta)
    b = math.cos(first_middle) - math.cos(delta) - 1
    first = math.atan2(up * a - across * b, across * a + up * b)
    if 2 * (math.cos(delta) - math.cos(second_middle) - math.cos(first_middle)) + 3 < 0:
        first += math.pi
    last = first - first_middle + second_middle - turn
    return _angle(first), first_middle, second_middle, _angle(last)


def _lrlr_cusp_in_the_middle(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.7: the middle arcs are equally long, driven in opposite gears."""
    distance, _ = _right_circle(x, y, turn)
    if distance > 2 + _NOTHING:
        return None
    middle = math.acos(min((2 + distance) / 4, 1.0))
    return _lrlr(middle, -middle, x, y, turn)


def _lrlr_two_cusps(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.8: the middle arcs are equally long, driven in the same gear."""
    distance, _ = _right_circle(x, y, turn)
    cosine = (20 - distance**2) / 16
    if not -_NOTHING <= cosine <= 1 + _NOTHING:
        return None
    middle = -math.acos(min(max(cosine, 0.0), 1.0))
    return _lrlr(middle, middle, x, y, turn)


def _lrsl(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.9: a quarter turn before the straight line."""
    distance, bearing = _left_circle(x, y, turn)
    if distance < 2 - _NOTHING:
        return None
    reach = math.sqrt(max((distance - 2) * (distance + 2), 0.0))
    first = _angle(bearing + math.atan2(reach, -2))
    return first, -_QUARTER, 2 - reach, _angle(turn - _QUARTER - first)


def _lrsr(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.10: a quarter turn before the straight line."""
    distance, bearing = _right_circle(x, y, turn)
    if distance < 2 - _NOTHING:
        return None
    first = _angle(bearing + _QUARTER)
    return first, -_QUARTER, 2 - distance, _angle(first + _QUARTER - turn)


def _lrslr(x: float, y: float, turn: float) -> Lengths | None:
    """Equation 8.11: a quarter turn before and after the straight line."""
    distance, _ = _right_circle(x, y, turn)
    if distance < 2 - _NOTHING:
        return None
    straight = 4 - math.sqrt(max((distance - 2) * (distance + 2), 0.0))
    across, up = x + math.sin(turn), y - 1 - math.cos(turn)
    first = _angle(math.atan2((4 - straight) * across - 2 * up, -2 * across + (straight - 4) * up))
    return first, -_QUARTER, straight, -_QUARTER, _angle(first - turn)


_FORMULAS: tuple[tuple[str, Formula], ...] = (
    ("LSL", _lsl), ("LSR", _lsr), ("LRL", _lrl), ("LRLR", _lrlr_cusp_in_the_middle), ("LRLR", _lrlr_two_cusps),
    ("LRSL", _lrsl), ("LRSR", _lrsr), ("LRSLR", _lrslr),
)


def _drive(pieces: list[tuple[str, float]]) -> tuple[float, float, float]:
    """Where the pieces lead from the origin, radius 1."""
    place, heading = 0j, 0.0
    for letter, length in pieces:
        turn = _CURVATURE[letter] * length
        chord = 2 * math.sin(turn / 2) * _CURVATURE[letter] if turn else length
        middle = heading + turn / 2
        place += chord * complex(math.cos(middle), math.sin(middle))
        heading += turn
    return place.real, place.imag, heading


def _apart(reached: tuple[float, float, float], goal: tuple[float, float, float]) -> float:
    return math.hypot(reached[0] - goal[0], reached[1] - goal[1]) + abs(_angle(reached[2] - goal[2]))
