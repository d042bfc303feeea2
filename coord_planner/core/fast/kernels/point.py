# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands with all that follows from them, and slopes of weighted sums of rows: point.py as kernels."""

from __future__ import annotations

import numpy as np

from . import clearance, limits, sweeps
from .chain import drive
from .compiled import inner
from .fields import ROLL, K, V
from .objective import align, cost, miss, pull_smooth


def evaluate(
    which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, lower, upper, target, end_price, edges,
    edge_price, rows, means, row_numbers, pairs, lines, foot, commands,
):
    """All rows at commands of shape (N, 2M).

    Returns:
        roll; values of the limits (6, N, M); last state less target (N, 7); clearances (P, M), their wrenches
        (2, 3, P, M) and how their shadows bend (2, P, M); cost, and the excess of limits.
    """
    n, m, p = field.shape[1], field.shape[2], len(pairs)
    roll = np.zeros((ROLL, n, m + 1))
    for k in range(n):
        for i in range(m):
            roll[K, k, i], roll[V, k, i] = commands[k, i], commands[k, m + i]
    drive(which, mean_k, mean_v, span, field, robot, roll)
    values, missed = np.empty((6, n, m)), np.empty((n, 7))
    limits.measure(span, robot, roll, values)
    miss(which, last_k, last_v, robot, target, roll, missed)
    clear, wrench, bent = np.empty((p, m)), np.empty((2, 3, p, m)), np.empty((2, p, m))
    clearance.look(pairs, lines, foot, robot, roll, clear, wrench, bent)
    total = cost(
        span, prices, field, robot, edges, edge_price, rows, means, row_numbers, roll, end_price, missed, clear
    )
    return roll, values, missed, clear, wrench, bent, total, limits.excess(lower, upper, values)


@inner
def slopes(
    which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, edges, edge_price, rows, means, row_numbers,
    pairs, roll, levers, wrench, of_limits, of_ends, of_clear, found,
):
    """Add slopes of the smooth cost and of sum(forces * rows) by the commands to ``found``, shape (N, 2M).

    Clearances count negative.
    """
    n, m = field.shape[1], field.shape[2]
    by_mean, wrenches = np.zeros((2, n, m)), np.zeros((3, n, m))
    pull_smooth(span, prices, field, robot, edges, edge_price, rows, means, row_numbers, roll, by_mean, found)
    align(span, edges, edge_price, roll, wrenches)
    limits.pull(span, roll, of_limits, found)
    sweeps.gather(pairs, wrench, robot, roll, of_clear, of_ends, wrenches)
    sweeps.gather_later(wrenches)
    sweeps.pull_means(levers, wrenches, by_mean)
    sweeps.pull_commands(which, mean_k, mean_v, last_k, last_v, of_ends, by_mean, found)
