# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The cost and its slopes by turnings, means and headings: objective.py, ends.py and comparing.py as kernels."""

from __future__ import annotations

import math

import numpy as np

from .compiled import inner
from .fields import (
    ASKED,
    COST_H,
    FULL_SPEED,
    LAST_K,
    LAST_V,
    LEAVE,
    MEAN_K,
    MEAN_V,
    SHORT_PRICE,
    SPEED_UP,
    STEER,
    THETA,
    TURN_SPEED,
    TURNING,
    H,
    K,
    V,
    X,
    Y,
)
from .limits import rate


@inner
def difference(rows, means, row_numbers, roll, r):
    """Of the means of turnings that row r compares."""
    total = row_numbers[0, r]
    for i in range(means.shape[2]):
        total += means[0, r, i] * roll[TURNING, rows[0, r], i] - means[1, r, i] * roll[TURNING, rows[1, r], i]
    return total


@inner
def miss(which, last, robot, target, roll, missed):
    """Fill the last state less the target, shape (N, 7), in the order of STATES."""
    m = last.shape[2]
    for k in range(missed.shape[0]):
        curvature, speed = robot[LAST_K, k], robot[LAST_V, k]
        for i in range(m):
            curvature += last[0, which[0, k], i] * roll[K, k, i]
            speed += last[1, which[1, k], i] * roll[V, k, i]
        missed[k, 0] = roll[X, k, m] - target[k, 0]
        missed[k, 1] = roll[Y, k, m] - target[k, 1]
        missed[k, 2] = roll[THETA, k, m] - target[k, 2]
        missed[k, 3], missed[k, 4] = curvature - target[k, 3], speed - target[k, 4]
        missed[k, 5], missed[k, 6] = roll[K, k, m - 1] - target[k, 5], roll[V, k, m - 1] - target[k, 6]


@inner
def cost(
    span, prices, field, robot, edges, edge_price, rows, means, row_numbers, roll, end_price, missed, clear
):
    """The whole cost with exact penalties: point.cost."""
    total = 0.0
    n, m = field.shape[1], field.shape[2]
    for k in range(n):
        for i in range(m):
            turning = roll[TURNING, k, i]
            leaving = (roll[MEAN_V, k, i] - field[ASKED, k, i]) / robot[FULL_SPEED, k]
            steering, speeding = rate(span, robot, roll, K, k, i), rate(span, robot, roll, V, k, i)
            each = turning * turning + prices[LEAVE] * leaving * leaving
            each += prices[STEER] * steering * steering + prices[SPEED_UP] * speeding * speeding
            total += 0.5 * span[COST_H, i] * each
        for s in range(7):
            total += end_price[k, s] * abs(missed[k, s])
    for e in range(edges.shape[0]):
        k, j = edges[e, 0], edges[e, 1]
        for i in range(m):
            apart = roll[TURNING, k, i] - roll[TURNING, j, i]
            half = math.sin(0.5 * (roll[THETA, k, i + 1] - roll[THETA, j, i + 1])) if edge_price[1, e] > 0.0 else 0.0
            total += span[COST_H, i] * (0.5 * edge_price[0, e] * apart * apart + 2.0 * edge_price[1, e] * half * half)
    for r in range(rows.shape[1]):
        apart = difference(rows, means, row_numbers, roll, r)
        total += 0.5 * row_numbers[1, r] * apart * apart
    for p in range(clear.shape[0]):
        for i in range(m):
            total += max(-clear[p, i], 0.0) * span[SHORT_PRICE, i]
    return total


@inner
def pull_turnings(span, field, edges, edge_price, rows, means, row_numbers, roll):
    """Slope of turning, coupling and comparing by the turnings, shape (N, M)."""
    n, m = field.shape[1], field.shape[2]
    found = np.empty((n, m))
    for k in range(n):
        for i in range(m):
            found[k, i] = roll[TURNING, k, i] * span[COST_H, i]
    for e in range(edges.shape[0]):
        k, j = edges[e, 0], edges[e, 1]
        for i in range(m):
            apart = edge_price[0, e] * span[COST_H, i] * (roll[TURNING, k, i] - roll[TURNING, j, i])
            found[k, i] += apart
            found[j, i] -= apart
    for r in range(rows.shape[1]):
        apart = row_numbers[1, r] * difference(rows, means, row_numbers, roll, r)
        for i in range(m):
            found[rows[0, r], i] += apart * means[0, r, i]
            found[rows[1, r], i] -= apart * means[1, r, i]
    return found


@inner
def pull_smooth(
    span, prices, field, robot, edges, edge_price, rows, means, row_numbers, roll, by_mean, found
):
    """Add the slopes of all but the alignment by means, shape (2, N, M), and by commands, shape (N, 2M)."""
    n, m = field.shape[1], field.shape[2]
    pull = pull_turnings(span, field, edges, edge_price, rows, means, row_numbers, roll)
    for k in range(n):
        per = prices[LEAVE] / (robot[FULL_SPEED, k] * robot[FULL_SPEED, k])
        for i in range(m):
            own = pull[k, i] / field[TURN_SPEED, k, i]
            by_mean[0, k, i] += own * roll[MEAN_V, k, i]
            leaving = per * span[COST_H, i] * (roll[MEAN_V, k, i] - field[ASKED, k, i])
            by_mean[1, k, i] += own * roll[MEAN_K, k, i] + leaving
            share = span[COST_H, i] / span[H, i]
            steering = share * prices[STEER] * rate(span, robot, roll, K, k, i)
            speeding = share * prices[SPEED_UP] * rate(span, robot, roll, V, k, i)
            found[k, i] += steering
            found[k, m + i] += speeding
            if i > 0:
                found[k, i - 1] -= steering
                found[k, m + i - 1] -= speeding


@inner
def align(span, edges, edge_price, roll, wrenches):
    """Add the slope of the alignment by the headings at the nodes to the torques of wrenches, shape (3, N, M)."""
    for e in range(edges.shape[0]):
        if edge_price[1, e] == 0.0:
            continue
        k, j = edges[e, 0], edges[e, 1]
        for i in range(span.shape[1]):
            torque = edge_price[1, e] * math.sin(roll[THETA, k, i + 1] - roll[THETA, j, i + 1]) * span[COST_H, i]
            wrenches[2, k, i] += torque
            wrenches[2, j, i] -= torque


@inner
def aligning(span, edges, edge_price, roll, e, i):
    """Second derivative of an edge's alignment by the heading difference at the end of interval i (Gauss-Newton)."""
    half = math.cos(0.5 * (roll[THETA, edges[e, 0], i + 1] - roll[THETA, edges[e, 1], i + 1]))
    return edge_price[1, e] * half * half * span[COST_H, i]
