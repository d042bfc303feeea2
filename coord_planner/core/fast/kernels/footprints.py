# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The nearest two of many rectangles: the distances of core/rectangles.py, one after the other."""

from __future__ import annotations

import math

import numpy as np

from .compiled import inner


def nearest(corners, poses, growth):
    """Smallest distance over all pairs and moments, and the pair; (inf, -1, -1) without pairs.

    Below 0 where growth makes them meet. Exact distances are worked out only where circles round the robots' origins
    come nearer than what is found already.

    Args:
        corners: (N, 4, 2). poses: (N, K, 3). growth: of each outline all round, (N,), metres.
    """
    count, moments = poses.shape[0], poses.shape[1]
    reach, placed, turns = np.empty(count), np.empty((count, 4, 2)), np.empty((count, 2))
    for k in range(count):
        furthest = 0.0
        for c in range(4):
            furthest = max(furthest, corners[k, c, 0] ** 2 + corners[k, c, 1] ** 2)
        reach[k] = math.sqrt(furthest) + growth[k]
    least, first, second = np.inf, -1, -1
    for m in range(moments):
        for k in range(count):
            place(corners[k], poses[k, m], turns[k], placed[k])
        for k in range(count):
            for j in range(k + 1, count):
                dx, dy = poses[j, m, 0] - poses[k, m, 0], poses[j, m, 1] - poses[k, m, 1]
                most = least + reach[k] + reach[j]
                if most <= 0.0 or dx * dx + dy * dy >= most * most:
                    continue
                ahead, apart = square(corners[k], poses[k, m], turns[k], placed[j])
                back, too = square(corners[j], poses[j, m], turns[j], placed[k])
                gap = (math.sqrt(min(ahead, back)) if apart or too else 0.0) - growth[k] - growth[j]
                if gap < least:
                    least, first, second = gap, k, j
    return least, first, second


@inner
def place(corners, pose, turn, placed):
    """Corners (4, 2) at a pose (3,), into ``placed``; cosine and sine of the heading into ``turn`` (2,)."""
    turn[0], turn[1] = math.cos(pose[2]), math.sin(pose[2])
    for c in range(4):
        placed[c, 0] = pose[0] + turn[0] * corners[c, 0] - turn[1] * corners[c, 1]
        placed[c, 1] = pose[1] + turn[1] * corners[c, 0] + turn[0] * corners[c, 1]


@inner
def square(own, pose, turn, others):
    """Square of the distance from a rectangle to the corners of another, and whether a side of it separates them."""
    near, low_x, low_y, high_x, high_y = np.inf, np.inf, np.inf, -np.inf, -np.inf
    for c in range(4):
        dx, dy = others[c, 0] - pose[0], others[c, 1] - pose[1]
        x, y = turn[0] * dx + turn[1] * dy, turn[0] * dy - turn[1] * dx
        low_x, high_x, low_y, high_y = min(low_x, x), max(high_x, x), min(low_y, y), max(high_y, y)
        outside_x = max(x - own[0, 0], own[2, 0] - x, 0.0)
        outside_y = max(y - own[0, 1], own[2, 1] - y, 0.0)
        near = min(near, outside_x * outside_x + outside_y * outside_y)
    return near, low_x > own[0, 0] or high_x < own[2, 0] or low_y > own[0, 1] or high_y < own[2, 1]
