# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Rows of poses and ends, both ways: forces -> slopes by the commands, and commands -> changes of rows, first order."""

from __future__ import annotations

import numpy as np

from .chain import respond, respond_back
from .compiled import inner
from .fields import X0, Y0, X, Y


@inner
def gather(pairs, wrench, robot, roll, push, ends, wrenches):
    """Add what clearances push apart with, (P, M), and ends pull with, (N, 7), to wrenches at the nodes, (3, N, M)."""
    m = wrenches.shape[2]
    for p in range(pairs.shape[0]):
        for side in range(2):
            k = pairs[p, side]
            for c in range(3):
                for i in range(m):
                    wrenches[c, k, i] -= push[p, i] * wrench[side, c, p, i]
    for k in range(ends.shape[0]):
        x, y = roll[X, k, m] - robot[X0, k], roll[Y, k, m] - robot[Y0, k]
        wrenches[0, k, m - 1] += ends[k, 0]
        wrenches[1, k, m - 1] += ends[k, 1]
        wrenches[2, k, m - 1] += ends[k, 2] + ends[k, 1] * x - ends[k, 0] * y


@inner
def gather_later(values):
    """Sums over each node and all later ones, in place, of values at the nodes, shape (C, N, M)."""
    for c in range(values.shape[0]):
        for k in range(values.shape[1]):
            for i in range(values.shape[2] - 2, -1, -1):
                values[c, k, i] += values[c, k, i + 1]


@inner
def pull_means(levers, later, by_mean):
    """Add slopes by the means, shape (2, N, M), of wrenches gathered from each node on."""
    for k in range(later.shape[1]):
        for i in range(later.shape[2]):
            x, y, torque = later[0, k, i], later[1, k, i], later[2, k, i]
            by_mean[0, k, i] += levers[0, k, i] * x + levers[1, k, i] * y + levers[2, k, i] * torque
            by_mean[1, k, i] += levers[3, k, i] * x + levers[4, k, i] * y + levers[5, k, i] * torque


@inner
def pull_commands(which, mean, last, ends, by_mean, found):
    """Add slopes by the commands, shape (N, 2M), of those by the means and of the last four states' ends."""
    m = by_mean.shape[2]
    for k in range(found.shape[0]):
        respond_back(mean[0, which[0, k]], by_mean[0, k], found[k, :m])
        respond_back(mean[1, which[1, k]], by_mean[1, k], found[k, m:])
        for i in range(m):
            found[k, i] += ends[k, 3] * last[0, which[0, k], i]
            found[k, m + i] += ends[k, 4] * last[1, which[1, k], i]
        found[k, m - 1] += ends[k, 5]
        found[k, 2 * m - 1] += ends[k, 6]


@inner
def move(which, mean, last, pairs, robot, roll, levers, wrench, near, commands, ends, clear):
    """Fill the changes of the ends, (N, 7), and of the clearances of near pairs, (P, M), when commands (N, 2M) move."""
    n, m = levers.shape[1], levers.shape[2]
    twists = np.zeros((3, n, m))
    by_mean = np.zeros((2, m))
    for k in range(n):
        by_mean[:] = 0.0
        respond(mean[0, which[0, k]], commands[k, :m], by_mean[0])
        respond(mean[1, which[1, k]], commands[k, m:], by_mean[1])
        for c in range(3):
            total = 0.0
            for i in range(m):
                total += levers[c, k, i] * by_mean[0, i] + levers[3 + c, k, i] * by_mean[1, i]
                twists[c, k, i] = total
        _move_end(which, last, robot, roll, twists, commands, k, ends)
    for p in range(pairs.shape[0]):
        for i in range(m):
            clear[p, i] = 0.0
        if near[p]:
            for side in range(2):
                for c in range(3):
                    for i in range(m):
                        clear[p, i] += wrench[side, c, p, i] * twists[c, pairs[p, side], i]


@inner
def _move_end(which, last, robot, roll, twists, commands, k, ends):
    m = twists.shape[2]
    turn = twists[2, k, m - 1]
    ends[k, 0] = twists[0, k, m - 1] - (roll[Y, k, m] - robot[Y0, k]) * turn
    ends[k, 1] = twists[1, k, m - 1] + (roll[X, k, m] - robot[X0, k]) * turn
    ends[k, 2] = turn
    curvature = speed = 0.0
    for i in range(m):
        curvature += last[0, which[0, k], i] * commands[k, i]
        speed += last[1, which[1, k], i] * commands[k, m + i]
    ends[k, 3], ends[k, 4] = curvature, speed
    ends[k, 5], ends[k, 6] = commands[k, m - 1], commands[k, 2 * m - 1]
