# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands -> poses along exact arcs, and by how much each arc moves what follows: chain.py as kernels."""

from __future__ import annotations

import math

from .compiled import inner
from .fields import (
    CHORD,
    COS,
    FROM_K,
    FROM_V,
    MEAN_K,
    MEAN_V,
    NODE_COS,
    NODE_SIN,
    SIN,
    STRETCH,
    THETA,
    THETA0,
    TURN_SPEED,
    TURNING,
    X0,
    Y0,
    H,
    K,
    V,
    X,
    Y,
)


@inner
def chord(half):
    """sin(x)/x and its slope, by their series below 0.5 (chain._series)."""
    if abs(half) >= 0.5:
        value = math.sin(half) / half
        return value, (math.cos(half) - value) / half
    square = half * half
    value = slope = 1.0
    for n in range(6, 0, -1):
        value = 1.0 - square * value / ((2 * n) * (2 * n + 1))
        slope = 1.0 - square * slope / ((2 * n) * (2 * n + 3))
    return value, -half / 3.0 * slope


@inner
def respond(mean, values, found):
    """Add what a robot reaches in the mean, shape (M,), by its commands, shape (M,). mean: (M, M), lower triangular."""
    for i in range(len(found)):
        row, total = mean[i], 0.0
        for j in range(i + 1):
            total += row[j] * values[j]
        found[i] += total


@inner
def respond_back(mean, values, found):
    """The transpose of ``respond``, added to ``found``."""
    for i in range(len(values)):
        row, value = mean[i], values[i]
        for j in range(i + 1):
            found[j] += row[j] * value


@inner
def drive(which, mean, span, field, robot, roll):
    """Fill all rows of ``roll`` from its rows K and V."""
    m = span.shape[1]
    for k in range(roll.shape[1]):
        for i in range(m):
            roll[MEAN_K, k, i], roll[MEAN_V, k, i] = field[FROM_K, k, i], field[FROM_V, k, i]
        respond(mean[0, which[0, k]], roll[K, k, :m], roll[MEAN_K, k, :m])
        respond(mean[1, which[1, k]], roll[V, k, :m], roll[MEAN_V, k, :m])
        x, y, theta = robot[X0, k], robot[Y0, k], robot[THETA0, k]
        roll[X, k, 0], roll[Y, k, 0], roll[THETA, k, 0] = x, y, theta
        for i in range(m):
            kappa, speed = roll[MEAN_K, k, i], roll[MEAN_V, k, i]
            distance = span[H, i] * speed
            half = 0.5 * distance * kappa
            ratio, stretch = chord(half)
            cos, sin = math.cos(theta + half), math.sin(theta + half)
            x += distance * ratio * cos
            y += distance * ratio * sin
            theta += 2.0 * half
            roll[TURNING, k, i] = speed * kappa / field[TURN_SPEED, k, i]
            roll[COS, k, i], roll[SIN, k, i], roll[CHORD, k, i], roll[STRETCH, k, i] = cos, sin, ratio, stretch
            roll[NODE_COS, k, i], roll[NODE_SIN, k, i] = math.cos(theta), math.sin(theta)
            roll[X, k, i + 1], roll[Y, k, i + 1], roll[THETA, k, i + 1] = x, y, theta


@inner
def lever(span, robot, roll, found):
    """Fill the twist about each robot's first place by mean curvature, and by mean speed, of intervals, (6, N, M).

    Rows: x, y, heading by mean curvature; the same by mean speed. A node's x moves by x - y' * heading, where y' is the
    node's place as seen from the robot's first one.
    """
    m = span.shape[1]
    for k in range(roll.shape[1]):
        x0, y0 = robot[X0, k], robot[Y0, k]
        for i in range(m):
            h, kappa = span[H, i], roll[MEAN_K, k, i]
            distance = h * roll[MEAN_V, k, i]
            half, stretch = 0.5 * distance * roll[CHORD, k, i], 0.5 * distance * roll[STRETCH, k, i]
            cos, sin = roll[COS, k, i], roll[SIN, k, i]
            turn_x = stretch * cos - half * sin + (roll[Y, k, i + 1] - y0)
            turn_y = stretch * sin + half * cos - (roll[X, k, i + 1] - x0)
            found[0, k, i], found[1, k, i], found[2, k, i] = distance * turn_x, distance * turn_y, distance
            found[3, k, i] = h * (roll[CHORD, k, i] * cos + kappa * turn_x)
            found[4, k, i] = h * (roll[CHORD, k, i] * sin + kappa * turn_y)
            found[5, k, i] = h * kappa
