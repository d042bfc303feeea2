# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""SE(2): one set of formulas for floats, numpy arrays and CasADi symbols.

A pose is (x, y, theta): position in metres and heading in radians, anticlockwise from the x axis.
A twist is (v_x, v_y, omega), in the robot's own frame. Headings are never wrapped unless asked:
the number of windings is part of a plan. Formulas: Murray, Li & Sastry, *A Mathematical
Introduction to Robotic Manipulation*, 1994, ch. 2 (from memory).
"""

from __future__ import annotations

from typing import Any, cast

import casadi as ca
import numpy as np

# Below this angle the series stands in for the quotient. Solvers see second derivatives, so the
# switch must be wide and the series long: 8 terms at 0.5 leave an error below 1e-17.
_SERIES_BELOW = 0.5
_TERMS = 8

Scalar = Any  # float, numpy array or CasADi expression
Pose = tuple[Scalar, Scalar, Scalar]


_SYMBOLIC = (ca.SX, ca.MX)


def _alternating_series(square: Scalar, first: int) -> Scalar:
    """Sum of (-square)^n / (2n + first)! for n = 0 .. _TERMS - 1, by Horner's rule, times first!."""
    total: Scalar = 1.0
    for n in range(_TERMS - 1, 0, -1):
        total = 1.0 - total * square / ((2 * n + first) * (2 * n + first - 1))
    return total


def _sin(x: Scalar) -> Scalar:
    return ca.sin(x) if isinstance(x, _SYMBOLIC) else np.sin(x)


def _cos(x: Scalar) -> Scalar:
    return ca.cos(x) if isinstance(x, _SYMBOLIC) else np.cos(x)


def sinc(x: Scalar) -> Scalar:
    """sin(x)/x, smooth through 0."""
    if isinstance(x, _SYMBOLIC):
        x = cast(Any, x)
        small = ca.fabs(x) < _SERIES_BELOW
        # A denominator that is never 0 in the branch that is not taken: its derivative would be NaN.
        away = ca.if_else(small, 1.0, x)
        return ca.if_else(small, _alternating_series(x * x, 1), ca.sin(x) / away)
    # Numbers are not differentiated: the quotient is good to the last digit down to the smallest of them.
    zero = x == 0.0
    safe = x + zero
    return np.sin(safe) / safe + zero * (1.0 - np.sin(1.0))


def cosc(x: Scalar) -> Scalar:
    """(1 - cos(x))/x, smooth through 0."""
    return 0.5 * x * sinc(0.5 * x) ** 2


def exp(v_x: Scalar, v_y: Scalar, omega: Scalar) -> Pose:
    """Pose reached by following the twist for unit time, from the identity."""
    s, c = sinc(omega), cosc(omega)
    return s * v_x - c * v_y, c * v_x + s * v_y, omega


def log(x: Scalar, y: Scalar, theta: Scalar) -> tuple[Scalar, Scalar, Scalar]:
    """Twist whose exponential is the pose; theta is taken as it stands and must not be a whole turn.

    Uses (t/2)/tan(t/2) instead of sin/(cos - 1), which loses all digits near 0.
    """
    half = 0.5 * theta
    scale = _cos(half) / sinc(half)
    return scale * x + half * y, scale * y - half * x, theta


def compose(a: Pose, b: Pose) -> Pose:
    """The pose b, given in the frame of a, in the frame in which a is given."""
    s, c = _sin(a[2]), _cos(a[2])
    return a[0] + c * b[0] - s * b[1], a[1] + s * b[0] + c * b[1], a[2] + b[2]


def inverse(a: Pose) -> Pose:
    """The pose that composes with a to the identity."""
    s, c = _sin(a[2]), _cos(a[2])
    return -c * a[0] - s * a[1], s * a[0] - c * a[1], -a[2]


def arc(x: Scalar, y: Scalar, theta: Scalar, distance: Scalar, turn: Scalar) -> Pose:
    """Pose after an arc: ``distance`` metres forward while turning by ``turn`` radians. Exact."""
    half = 0.5 * turn
    chord, middle = distance * sinc(half), theta + half
    return x + chord * _cos(middle), y + chord * _sin(middle), theta + turn


def wrap(angle: Scalar) -> Scalar:
    """The angle in (-pi, pi] that differs from the given one by whole turns (numbers only)."""
    wrapped = np.remainder(np.asarray(angle, dtype=float) + np.pi, 2 * np.pi) - np.pi
    return np.where(wrapped == -np.pi, np.pi, wrapped)[()]


def rollout(start: np.ndarray, distances: np.ndarray, turns: np.ndarray) -> np.ndarray:
    """Poses along chains of arcs.

    Args:
        start: shape (N, 3). distances, turns: shape (N, M), metres and radians.

    Returns:
        shape (N, M + 1, 3), headings unwrapped.
    """
    headings = start[:, 2:3] + np.concatenate([np.zeros((len(start), 1)), np.cumsum(turns, axis=1)], axis=1)
    dx, dy, _ = arc(0.0, 0.0, headings[:, :-1], distances, turns)
    steps = np.stack([dx, dy], axis=2)
    positions = start[:, None, :2] + np.concatenate([np.zeros((len(start), 1, 2)), np.cumsum(steps, axis=1)], axis=1)
    return np.concatenate([positions, headings[:, :, None]], axis=2)
