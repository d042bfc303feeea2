# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands with all that follows from them, and slopes of weighted sums of rows: point.py as kernels."""

from __future__ import annotations

import numpy as np

from . import clearance, factor, limits, sweeps
from .chain import drive
from .compiled import inner
from .fields import ROLL, K, V
from .objective import align, cost, miss, pull_smooth


def evaluate(
    which, mean, last, span, prices, field, robot, lower, upper, target, end_price, edges,
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
    drive(which, mean, span, field, robot, roll)
    values, missed = np.empty((6, n, m)), np.empty((n, 7))
    limits.measure(span, robot, roll, values)
    miss(which, last, robot, target, roll, missed)
    clear, wrench, bent = np.empty((p, m)), np.empty((2, 3, p, m)), np.empty((2, p, m))
    clearance.look(pairs, lines, foot, robot, roll, clear, wrench, bent)
    total = cost(
        span, prices, field, robot, edges, edge_price, rows, means, row_numbers, roll, end_price, missed, clear
    )
    return roll, values, missed, clear, wrench, bent, total, limits.excess(lower, upper, values)


@inner
def slopes(
    which, mean, last, span, prices, field, robot, edges, edge_price, rows, means, row_numbers,
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
    _pull_rows(which, mean, last, robot, pairs, roll, levers, wrench, of_ends, of_clear, by_mean, wrenches, found)


def respond(
    which, mean, last, span, prices, field, robot, edges, edge_price, rows, means, row_numbers, pairs, order, panels,
    begins, later, counts, near, roll, levers, wrench, of_limits, of_ends, of_clear, rows_roll, rows_levers,
    rows_wrench, more_limits, more_ends, more_clear, both,
):
    """How commands answer to forces on the rows, with a factorised matrix.

    Args:
        of_..: forces on the rows at a point. more_..: further ones, of rows as they are linearised elsewhere, where
            ``both``.

    Returns:
        changes of the commands (N, 2M), and of limits, ends, and clearances of pairs that are near, to first order.
    """
    n, m = field.shape[1], field.shape[2]
    commands = np.zeros((n, 2 * m))
    slopes(
        which, mean, last, span, prices, field, robot, edges, edge_price, rows, means, row_numbers, pairs, roll, levers,
        wrench, of_limits, of_ends, of_clear, commands,
    )
    if both:
        by_mean, wrenches = np.zeros((2, n, m)), np.zeros((3, n, m))
        limits.pull(span, roll, more_limits, commands)
        _pull_rows(
            which, mean, last, robot, pairs, rows_roll, rows_levers, rows_wrench, more_ends, more_clear, by_mean,
            wrenches, commands,
        )
    for k in range(n):
        for i in range(2 * m):
            commands[k, i] = -commands[k, i]
    factor.solve(panels, begins, order, later, counts, commands)
    moved_limits, moved_ends, moved_clear = np.empty((6, n, m)), np.empty((n, 7)), np.empty((len(pairs), m))
    limits.moved(span, roll, commands, moved_limits)
    sweeps.move(
        which, mean, last, pairs, robot, rows_roll, rows_levers, rows_wrench, near, commands, moved_ends, moved_clear
    )
    return commands, moved_limits, moved_ends, moved_clear


@inner
def _pull_rows(
    which, mean, last, robot, pairs, roll, levers, wrench, of_ends, of_clear, by_mean, wrenches, found
):
    """Add the slopes of forces on ends and clearances to those by means and wrenches so far, as slopes by commands."""
    sweeps.gather(pairs, wrench, robot, roll, of_clear, of_ends, wrenches)
    sweeps.gather_later(wrenches)
    sweeps.pull_means(levers, wrenches, by_mean)
    sweeps.pull_commands(which, mean, last, of_ends, by_mean, found)
