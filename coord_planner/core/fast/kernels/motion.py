# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands over time, and machines that follow them: core/schedule.py and core/motion.py, one robot after the other."""

from __future__ import annotations

import math

import numpy as np


def at(times, values, moments):
    """Values of straight pieces at moments of each robot's own: those at the first and the last time hold outside.

    Args:
        times: (K,). values: (N, K, 2). moments: (N, M); what is no number stays none.

    Returns:
        (N, M, 2).
    """
    count, wanted, last = moments.shape[0], moments.shape[1], len(times) - 1
    found = np.empty((count, wanted, 2))
    for k in range(count):
        for m in range(wanted):
            moment, low, high = moments[k, m], 0, last
            if last == 0:
                found[k, m, 0], found[k, m, 1] = values[k, 0, 0], values[k, 0, 1]
                continue
            while high - low > 1:
                middle = (low + high) // 2
                if times[middle] <= moment:
                    low = middle
                else:
                    high = middle
            part = (moment - times[low]) / max(times[high] - times[low], 1e-12)  # two moments may be one
            if part < 0.0:
                part = 0.0
            elif part > 1.0:
                part = 1.0
            for i in range(2):
                found[k, m, i] = values[k, low, i] + part * (values[k, high, i] - values[k, low, i])
    return found


def drive(poses, reached, commands, h, lag, factor):
    """See core/motion.py.

    Args:
        poses: (n, 3). reached: (n, 2). commands: (n, K, 2). h: (n,). lag: (n, 2). factor: (n,).

    Returns:
        (n, K + 1, 3), and what is reached at the end, (n, 2).
    """
    count, steps = commands.shape[0], commands.shape[1]
    path, ends = np.empty((count, steps + 1, 3)), np.empty((count, 2))
    for k in range(count):
        x, y, theta, speed, bend = poses[k, 0], poses[k, 1], poses[k, 2], reached[k, 0], reached[k, 1]
        slower = math.exp(-h[k] / max(lag[k, 0], 1e-6)) if lag[k, 0] > 0.0 else 0.0
        straighter = math.exp(-h[k] / max(lag[k, 1], 1e-6)) if lag[k, 1] > 0.0 else 0.0
        path[k, 0, 0], path[k, 0, 1], path[k, 0, 2] = x, y, theta
        for m in range(steps):
            next_speed = commands[k, m, 0] * (1.0 - slower) + speed * slower
            next_bend = commands[k, m, 1] * (1.0 - straighter) + bend * straighter
            distance = (speed + next_speed) / 2 * (h[k] * factor[k])
            turn = distance * (bend + next_bend) / 2
            half = 0.5 * turn
            chord = distance * math.sin(half) / half if half != 0.0 else distance
            x, y, theta = x + chord * math.cos(theta + half), y + chord * math.sin(theta + half), theta + turn
            path[k, m + 1, 0], path[k, m + 1, 1], path[k, m + 1, 2] = x, y, theta
            speed, bend = next_speed, next_bend
        ends[k, 0], ends[k, 1] = speed, bend
    return path, ends
