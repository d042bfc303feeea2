# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""An active-set step in three parts, as active.Held takes it.

Between them the matrix is made and factorised (matrix.py), and the new commands are driven (point.py).
"""

from __future__ import annotations

import numpy as np

from . import factor, limits, sweeps
from .chain import lever
from .compiled import inner
from .fields import SHORT_PRICE, K, V
from .matrix import pressed
from .point import slopes

_COMPLIANCE = 1e-6
_PASSED = 1e-7
_NO_ROOM = 1e-9


def stiffen(span, robot, pairs, roll, met_limits, met_ends, met_clear, levers, anew):
    """How stiffly met rows are held as equations: limits, ends and clearances, and which pairs count.

    Args:
        met_limits, met_ends, met_clear: see active.Met. anew: whether derivatives are taken at ``roll``: fill ``levers``.
    """
    n, m = met_limits.shape[1], met_limits.shape[2]
    stiff = 1.0 / _COMPLIANCE
    of_limits, of_ends, of_clear = np.empty((6, n, m)), np.empty((n, 7)), np.empty((len(pairs), m))
    for r in range(6):
        for k in range(n):
            for i in range(m):
                of_limits[r, k, i] = abs(met_limits[r, k, i]) * stiff
    for k in range(n):
        for s in range(7):
            of_ends[k, s] = stiff if met_ends[k, s] else 0.0
    for p in range(len(pairs)):
        for i in range(m):
            of_clear[p, i] = stiff if met_clear[p, i] else 0.0
    if anew:
        lever(span, robot, roll, levers)
    near = np.zeros(len(pairs), np.bool_)
    pressed(of_clear, near)
    return of_limits, of_ends, of_clear, near


def direct(
    which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, lower, upper, edges, edge_price, rows, means,
    row_numbers, pairs, order, panels, begins, later, counts, near, rows_roll, rows_levers, rows_wrench, roll, values,
    missed, clear, wrench, of_limits, of_ends, of_clear, met_limits, met_ends, met_clear,
):
    """Keep the met rows as equations and move: active.Held.step.

    Returns:
        commands (N, 2M) after the move, and multipliers of limits, ends and clearances: of met rows after it, of the
        others as they were (of limits: 0).
    """
    n, m = field.shape[1], field.shape[2]
    more_limits, more_ends, more_clear = np.empty((6, n, m)), np.zeros((n, 7)), np.zeros((len(pairs), m))
    _want(
        lower, upper, values, missed, clear, of_limits, met_limits, met_ends, met_clear, more_limits, more_ends, more_clear
    )
    levers, commands = np.empty((6, n, m)), np.zeros((n, 2 * m))
    lever(span, robot, roll, levers)
    slopes(
        which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, edges, edge_price, rows, means, row_numbers,
        pairs, roll, levers, wrench, of_limits, of_ends, of_clear, commands,
    )
    _add_rows(
        which, mean_k, mean_v, last_k, last_v, span, robot, pairs, roll, rows_roll, rows_levers, rows_wrench, more_limits,
        more_ends, more_clear, commands,
    )
    for k in range(n):
        for i in range(2 * m):
            commands[k, i] = -commands[k, i]
    factor.solve(panels, begins, order, later, counts, commands)
    moved_limits, moved_ends, moved_clear = np.empty((6, n, m)), np.empty((n, 7)), np.empty((len(pairs), m))
    limits.moved(span, roll, commands, moved_limits)
    sweeps.move(
        which, mean_k, mean_v, last_k, last_v, pairs, robot, rows_roll, rows_levers, rows_wrench, near, commands,
        moved_ends, moved_clear,
    )
    for k in range(n):
        for i in range(m):
            commands[k, i] += roll[K, k, i]
            commands[k, m + i] += roll[V, k, i]
            for r in range(6):
                pushed = of_limits[r, k, i] + more_limits[r, k, i] + moved_limits[r, k, i] / _COMPLIANCE
                more_limits[r, k, i] = pushed if met_limits[r, k, i] != 0.0 else 0.0
        for s in range(7):
            more = more_ends[k, s] + moved_ends[k, s] / _COMPLIANCE
            more_ends[k, s] = of_ends[k, s] + (more if met_ends[k, s] else 0.0)
    for p in range(len(pairs)):
        for i in range(m):
            more = more_clear[p, i] - moved_clear[p, i] / _COMPLIANCE
            more_clear[p, i] = of_clear[p, i] + (more if met_clear[p, i] else 0.0)
    return commands, more_limits, more_ends, more_clear


def settle(
    span, lower, upper, end_price, values, missed, clear, of_limits, of_ends, of_clear, met_limits, met_ends, met_clear
):
    """Which rows are met after a move that ``direct`` has found the multipliers of: active._met_after.

    Returns:
        multipliers and met rows, how many rows changed, and the cost of what met rows still miss.
    """
    n, m = values.shape[1], values.shape[2]
    limit, end, apart = np.zeros((6, n, m)), np.empty((n, 7)), np.empty((len(clear), m))
    sets, end_sets, clear_sets = np.empty((6, n, m)), np.empty((n, 7), np.bool_), np.empty((len(clear), m), np.bool_)
    changed = _settle_limits(lower, upper, values, of_limits, met_limits, limit, sets)
    changed += _settle_ends(end_price, missed, of_ends, met_ends, end, end_sets)
    changed += _settle_clear(span, clear, of_clear, met_clear, apart, clear_sets)
    left_over = _left_over(span, end_price, missed, clear, end_sets, clear_sets)
    return limit, end, apart, sets, end_sets, clear_sets, changed, left_over


@inner
def _want(
    lower, upper, values, missed, clear, of_limits, met_limits, met_ends, met_clear, limit, end, apart
):
    """Fill by how much pushes would change if nothing moved: those of met rows take what is missed, of others they go."""
    for r in range(6):
        for k in range(values.shape[1]):
            for i in range(values.shape[2]):
                met = met_limits[r, k, i]
                bound = upper[r, k, i] if met > 0.0 else lower[r, k, i]
                limit[r, k, i] = -of_limits[r, k, i] if met == 0.0 else (values[r, k, i] - bound) / _COMPLIANCE
    for k in range(len(missed)):
        for s in range(7):
            if met_ends[k, s]:
                end[k, s] = missed[k, s] / _COMPLIANCE
    for p in range(len(clear)):
        for i in range(clear.shape[1]):
            if met_clear[p, i]:
                apart[p, i] = -clear[p, i] / _COMPLIANCE


@inner
def _add_rows(
    which, mean_k, mean_v, last_k, last_v, span, robot, pairs, roll, rows_roll, levers, wrench, of_limits, of_ends,
    of_clear, found,
):
    """Add the slopes of sum(forces * rows), limits at ``roll``, all others at ``rows_roll``."""
    _, n, m = levers.shape
    by_mean, wrenches = np.zeros((2, n, m)), np.zeros((3, n, m))
    limits.pull(span, roll, of_limits, found)
    sweeps.gather(pairs, wrench, robot, rows_roll, of_clear, of_ends, wrenches)
    sweeps.gather_later(wrenches)
    sweeps.pull_means(levers, wrenches, by_mean)
    sweeps.pull_commands(which, mean_k, mean_v, last_k, last_v, of_ends, by_mean, found)


@inner
def _settle_limits(lower, upper, values, pushes, met, forces, sets):
    changed = 0
    for r in range(6):
        for k in range(values.shape[1]):
            for i in range(values.shape[2]):
                low, high, value, was = lower[r, k, i], upper[r, k, i], values[r, k, i], met[r, k, i]
                if was == 0.0:
                    now = (1.0 if value > high + _PASSED else 0.0) - (1.0 if value < low - _PASSED else 0.0)
                else:
                    now = was if was * pushes[r, k, i] > 0.0 or high - low < _NO_ROOM else 0.0
                sets[r, k, i] = now
                forces[r, k, i] = pushes[r, k, i] if now != 0.0 else 0.0
                changed += 1 if now != was else 0
    return changed


@inner
def _settle_ends(end_price, missed, pushes, met, forces, sets):
    changed = 0
    for k in range(len(missed)):
        for s in range(7):
            price, pushed = end_price[k, s], pushes[k, s]
            side = 1.0 if pushed > 0.0 else -1.0 if pushed < 0.0 else 0.0
            now = abs(pushed) <= price if met[k, s] else side * missed[k, s] < -_PASSED
            now = now and price > 0.0
            sets[k, s] = now
            forces[k, s] = min(max(pushed, -price), price)
            changed += 1 if now != met[k, s] else 0
    return changed


@inner
def _settle_clear(span, clear, pushes, met, forces, sets):
    changed = 0
    for p in range(len(clear)):
        for i in range(clear.shape[1]):
            price, pushed = span[SHORT_PRICE, i], pushes[p, i]
            if met[p, i]:
                now = pushed >= 0.0 and pushed <= price
            else:
                now = clear[p, i] > _PASSED if pushed > 0.0 else clear[p, i] < -_PASSED
            sets[p, i] = now
            forces[p, i] = min(max(pushed, 0.0), price)
            changed += 1 if now != met[p, i] else 0
    return changed


@inner
def _left_over(span, end_price, missed, clear, met_ends, met_clear):
    total = 0.0
    for k in range(len(missed)):
        for s in range(7):
            if met_ends[k, s]:
                total += end_price[k, s] * abs(missed[k, s])
    for p in range(len(clear)):
        for i in range(clear.shape[1]):
            if met_clear[p, i]:
                total += max(-clear[p, i], 0.0) * span[SHORT_PRICE, i]
    return total
