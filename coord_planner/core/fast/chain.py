# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands -> poses along exact arcs, and the way back: forces on the poses -> slopes by the commands."""

from __future__ import annotations

import attrs
import numpy as np

from .numbers import Numbers

_TERMS = 7  # of the series for |half turn| below 0.5: the first one left out is below 1e-16
_SERIES_BELOW = 0.5


@attrs.frozen(eq=False)
class Rollout:
    """Where commands lead. N robots, M intervals.

    Attributes:
        curvature, speed: commands at nodes 1 .. M, shape (N, M).
        mean_curvature, mean_speed: means over each interval of what is reached, shape (N, M).
        distance, turn: along each arc, metres and radians, shape (N, M).
        theta: headings at nodes 0 .. M, shape (N, M + 1). x, y: the same.
        cos, sin: of the heading in the middle of each arc, shape (N, M).
        chord: length of each arc's chord over its length, sin(t/2)/(t/2), shape (N, M). chord_slope: its slope by t/2.
        turning: u, shape (N, M), 1/m.
    """

    curvature: np.ndarray
    speed: np.ndarray
    mean_curvature: np.ndarray
    mean_speed: np.ndarray
    distance: np.ndarray
    turn: np.ndarray
    theta: np.ndarray
    x: np.ndarray
    y: np.ndarray
    cos: np.ndarray
    sin: np.ndarray
    chord: np.ndarray
    chord_slope: np.ndarray
    turning: np.ndarray


def roll_out(numbers: Numbers, curvature: np.ndarray, speed: np.ndarray) -> Rollout:
    """Drive the fleet from its initial state with commands at nodes 1 .. M, each of shape (N, M)."""
    mean_curvature = numbers.curvature.forward(numbers.curvature.mean, curvature) + numbers.begins.mean_curvature
    mean_speed = numbers.speed.forward(numbers.speed.mean, speed) + numbers.begins.mean_speed
    distance = numbers.h * mean_speed
    turn = distance * mean_curvature
    n, m = turn.shape
    theta, x, y = np.empty((3, n, m + 1))
    x[:, 0], y[:, 0], theta[:, 0] = numbers.begins.initial[:, :3].T
    np.cumsum(turn, axis=1, out=theta[:, 1:])
    theta[:, 1:] += theta[:, :1]
    half = 0.5 * turn
    chord, slope = _chord(half)
    middle = theta[:, :-1] + half
    cos, sin = np.cos(middle), np.sin(middle)
    length = distance * chord
    np.cumsum(length * cos, axis=1, out=x[:, 1:])
    np.cumsum(length * sin, axis=1, out=y[:, 1:])
    x[:, 1:] += x[:, :1]
    y[:, 1:] += y[:, :1]
    return Rollout(
        curvature, speed, mean_curvature, mean_speed, distance, turn, theta, x, y, cos, sin, chord, slope,
        mean_speed * mean_curvature / numbers.turn_speed,
    )


def pulls(
    r: Rollout, force_x: np.ndarray, force_y: np.ndarray, torque: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """What later nodes pull at the pose of each node 1 .. M: forces, and the torque about that node, each (N, M).

    A turn of one arc swings all that follows about the arc's end: dp_m = dt * J (p_m - p_end).
    """
    x, y = r.x[:, 1:], r.y[:, 1:]
    later_x, later_y = _from_the_end(force_x), _from_the_end(force_y)
    return later_x, later_y, _from_the_end(torque + force_y * x - force_x * y) - later_y * x + later_x * y


def arc_slopes(
    r: Rollout, force_x: np.ndarray, force_y: np.ndarray, torque: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Slopes of sum(force . position + torque * heading) by each arc's distance and turn, each of shape (N, M).

    Args:
        force_x, force_y, torque: at nodes 1 .. M, shape (N, M).

    """
    later_x, later_y, swing = pulls(r, force_x, force_y, torque)
    along = later_x * r.cos + later_y * r.sin
    across = later_y * r.cos - later_x * r.sin
    return along * r.chord, swing + 0.5 * r.distance * (along * r.chord_slope + across * r.chord)


def command_slopes(
    numbers: Numbers, r: Rollout, by_distance: np.ndarray, by_turn: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Slopes by mean curvature and mean speed of each interval from those by distance and turn, each (N, M)."""
    return by_turn * r.distance, numbers.h * (by_distance + by_turn * r.mean_curvature)


def end_slopes(r: Rollout) -> tuple[np.ndarray, np.ndarray]:
    """Slopes of the last pose's x, y and heading by each arc's distance and turn, each of shape (3, N, M)."""
    by_distance = np.zeros((3,) + r.turn.shape)
    by_turn = np.ones_like(by_distance)
    half_length, half_stretch = 0.5 * r.distance * r.chord, 0.5 * r.distance * r.chord_slope
    by_distance[0], by_distance[1] = r.chord * r.cos, r.chord * r.sin
    by_turn[0] = half_stretch * r.cos - half_length * r.sin - (r.y[:, -1:] - r.y[:, 1:])
    by_turn[1] = half_stretch * r.sin + half_length * r.cos + (r.x[:, -1:] - r.x[:, 1:])
    return by_distance, by_turn


def node_slopes(
    r: Rollout, robots: np.ndarray, force_x: np.ndarray, force_y: np.ndarray, torque: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Slopes of force . position + torque * heading at each node by each arc's distance and turn, each (K, M, M).

    Args:
        robots: shape (K,). force_x, force_y, torque: at nodes 1 .. M, shape (K, M).
    """
    m = r.turn.shape[1]
    before = np.tril(np.ones((m, m)))
    force_x, force_y = force_x[:, :, None], force_y[:, :, None]
    chord, cos, sin = r.chord[robots], r.cos[robots], r.sin[robots]
    half, stretch = 0.5 * r.distance[robots] * chord, 0.5 * r.distance[robots] * r.chord_slope[robots]
    x, y = r.x[robots, 1:], r.y[robots, 1:]
    by_distance = force_x * (chord * cos)[:, None] + force_y * (chord * sin)[:, None]
    # Of the turn: how the chord swings and stretches, and the lever from the arc's end to the node.
    by_turn = force_x * (stretch * cos - half * sin + y)[:, None] + force_y * (stretch * sin + half * cos - x)[:, None]
    by_turn += (torque + force_y[:, :, 0] * x - force_x[:, :, 0] * y)[:, :, None]
    return by_distance * before, by_turn * before


def _from_the_end(values: np.ndarray) -> np.ndarray:
    """Sum over a node and all later ones, shape (N, M)."""
    return np.cumsum(values[:, ::-1], axis=1)[:, ::-1]


def _chord(half: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """sin(x)/x and its slope, smooth through 0."""
    square = half * half
    if square.max(initial=0.0) < _SERIES_BELOW**2:
        return _series(half, square)
    small = square < _SERIES_BELOW**2
    safe = np.where(small, 1.0, half)
    value = np.sin(safe) / safe
    series, series_slope = _series(half, np.where(small, square, 0.0))
    return np.where(small, series, value), np.where(small, series_slope, (np.cos(safe) - value) / safe)


def _series(x: np.ndarray, square: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """sum (-x^2)^n / (2n + 1)! and its slope -x/3 (1 - x^2/10 (1 - x^2/28 ...)), by Horner's rule."""
    value = slope = np.ones_like(x)
    for n in range(_TERMS - 1, 0, -1):
        value = 1.0 - square * value / ((2 * n) * (2 * n + 1))
        slope = 1.0 - square * slope / ((2 * n) * (2 * n + 3))
    return value, -x / 3.0 * slope
