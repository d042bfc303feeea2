# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Limits of each robot's commands: limits.py as kernels."""

from __future__ import annotations

from .compiled import inner
from .fields import COST_H, K0, SPEED_UP, STEER, V0, H, K, V


@inner
def rate(span, robot, roll, row, k, i):
    """Of the curvature command (row K) or the speed command (row V) over interval i."""
    before = robot[K0 if row == K else V0, k] if i == 0 else roll[row, k, i - 1]
    return (roll[row, k, i] - before) / span[H, i]


@inner
def measure(span, robot, roll, values):
    """Fill the values of the rows LIMITS, shape (6, N, M)."""
    for k in range(values.shape[1]):
        for i in range(values.shape[2]):
            kappa, speed = roll[K, k, i], roll[V, k, i]
            values[0, k, i], values[1, k, i] = kappa, speed
            values[2, k, i] = rate(span, robot, roll, K, k, i)
            values[3, k, i] = rate(span, robot, roll, V, k, i)
            values[4, k, i], values[5, k, i] = speed * kappa, speed * speed * kappa


@inner
def moved(span, roll, commands, found):
    """Fill the first-order change of the rows, (6, N, M), when commands, shape (N, 2M), move."""
    m = found.shape[2]
    for k in range(found.shape[1]):
        for i in range(m):
            kappa, speed = roll[K, k, i], roll[V, k, i]
            by_kappa, by_speed = commands[k, i], commands[k, m + i]
            found[0, k, i], found[1, k, i] = by_kappa, by_speed
            change_kappa, change_speed = by_kappa, by_speed
            if i > 0:
                change_kappa -= commands[k, i - 1]
                change_speed -= commands[k, m + i - 1]
            found[2, k, i], found[3, k, i] = change_kappa / span[H, i], change_speed / span[H, i]
            found[4, k, i] = speed * by_kappa + kappa * by_speed
            found[5, k, i] = speed * (speed * by_kappa + 2.0 * kappa * by_speed)


@inner
def pull(span, roll, forces, found):
    """Add the slopes of sum(forces * rows) by the commands to ``found``, shape (N, 2M). forces: shape (6, N, M)."""
    m = forces.shape[2]
    for k in range(forces.shape[1]):
        for i in range(m):
            kappa, speed = roll[K, k, i], roll[V, k, i]
            twisting = forces[4, k, i] + speed * forces[5, k, i]
            steering, speeding = forces[2, k, i] / span[H, i], forces[3, k, i] / span[H, i]
            found[k, i] += forces[0, k, i] + speed * twisting + steering
            found[k, m + i] += forces[1, k, i] + kappa * (twisting + speed * forces[5, k, i]) + speeding
            if i > 0:
                found[k, i - 1] -= steering
                found[k, m + i - 1] -= speeding


@inner
def stiffen(span, prices, roll, k, stiff, block):
    """Add rows' * stiffness * rows, shape (6, N, M), and the prices of rates to the upper half of a robot's block."""
    m = stiff.shape[2]
    for i in range(m):
        kappa, speed = roll[K, k, i], roll[V, k, i]
        by_turn, by_lateral = stiff[4, k, i], stiff[5, k, i] * speed * speed
        per = 1.0 / (span[H, i] * span[H, i])
        steering = (stiff[2, k, i] + prices[STEER] * span[COST_H, i]) * per
        speeding = (stiff[3, k, i] + prices[SPEED_UP] * span[COST_H, i]) * per
        block[i, i] += stiff[0, k, i] + speed * speed * (by_turn + by_lateral) + steering
        block[m + i, m + i] += stiff[1, k, i] + kappa * kappa * (by_turn + 4.0 * by_lateral) + speeding
        block[i, m + i] += speed * kappa * (by_turn + 2.0 * by_lateral)
        if i > 0:
            block[i - 1, i - 1] += steering
            block[i - 1, i] -= steering
            block[m + i - 1, m + i - 1] += speeding
            block[m + i - 1, m + i] -= speeding


@inner
def excess(lower, upper, values):
    """Largest amount by which any limit is passed, in its own unit."""
    worst = 0.0
    for r in range(values.shape[0]):
        for k in range(values.shape[1]):
            for i in range(values.shape[2]):
                worst = max(worst, values[r, k, i] - upper[r, k, i], lower[r, k, i] - values[r, k, i])
    return worst
