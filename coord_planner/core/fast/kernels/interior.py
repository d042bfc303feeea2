# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""An interior-point step in four parts, as interior.Interior takes it, with derivatives taken anew at each.

Between them the matrix is made and factorised (matrix.py), and the new commands are driven (point.py).
"""

from __future__ import annotations

import numpy as np

from . import blocks, factor, limits, margins, sweeps
from .chain import lever
from .compiled import inner
from .fields import K, V
from .matrix import pressed
from .objective import align
from .point import slopes

_STIFFEST, _SOFTEST = 1e-9, 1e12
_FIXED = 1e-10
_SMALLEST = 1e-10


def stiffen(
    span, robot, end_price, edges, edge_price, pairs, fixed, roll, wrench, margin, push, held, bending,
):
    """How stiffly rows are held at an iterate, and where derivatives are taken.

    Args:
        fixed: limits without room, (6, N, M). margin, push: shape (L,). held: multipliers of fixed limits, (6, N, M).
        bending: whether what pulls on the poses bends counts.

    Returns:
        compliances (L,); stiffness and pushes of limits, ends and clearances; levers (6, N, M); pairs that count (P,);
        what bends (3, N, M), and whether that counts.
    """
    n, m = fixed.shape[1], fixed.shape[2]
    soft = np.empty(len(margin))
    for q in range(len(soft)):
        soft[q] = min(max(margin[q] / push[q], _STIFFEST), _SOFTEST)
    of_limits, of_ends, of_clear = np.empty((6, n, m)), np.zeros((n, 7)), np.empty((len(pairs), m))
    margins.forces(fixed, end_price, push, held, of_limits, of_ends, of_clear)
    stiff_limits, stiff_ends, stiff_clear = np.empty((6, n, m)), np.zeros((n, 7)), np.empty((len(pairs), m))
    margins.stiffness(fixed, end_price, soft, _FIXED, stiff_limits, stiff_ends, stiff_clear)
    levers, near, bends = np.empty((6, n, m)), np.zeros(len(pairs), np.bool_), np.empty((3, n, m))
    lever(span, robot, roll, levers)
    pressed(stiff_clear, near)
    bent = False
    if bending:
        later = np.zeros((3, n, m))
        align(span, edges, edge_price, roll, later)
        sweeps.gather(pairs, wrench, robot, roll, of_clear, of_ends, later)
        sweeps.gather_later(later)
        bent = blocks.bend(span, roll, later, bends)
    return soft, stiff_limits, stiff_ends, stiff_clear, of_clear, levers, near, bends, bent


def direct(
    which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, lower, upper, end_price, edges, edge_price, rows,
    means, row_numbers, pairs, order, panels, begins, later, counts, fixed, on, owners, roll, values, missed, clear,
    wrench, levers, near, margin, push, held, soft, of_clear, aims,
):
    """The move after which margins would be ``aims``, shape (L,), if pushes stayed; and the aims that correct it.

    Args:
        on, owners: of each entry of margins, whether it counts, and its two robots, shapes (L,) and (2, L).

    Returns:
        changes of commands (N, 2M), of margins and of pushes (L,); multipliers of fixed limits after it; the barrier to
        aim at next (Mehrotra), and aims for that.
    """
    n, m = field.shape[1], field.shape[2]
    by_margin, by_push, held_after = np.zeros(len(on)), np.zeros(len(on)), np.empty((6, n, m))
    of_limits, of_ends, apart = np.empty((6, n, m)), np.zeros((n, 7)), np.empty((len(pairs), m))
    margins.aim(
        fixed, end_price, push, held, soft, aims, values, missed, clear, lower, upper, _FIXED, by_push, of_limits,
        of_ends, apart,
    )
    commands = np.zeros((n, 2 * m))
    pressing = np.empty((len(pairs), m))  # pairs that do not count stay as they are
    for p in range(len(near)):
        for i in range(m):
            pressing[p, i] = apart[p, i] if near[p] else of_clear[p, i]
    slopes(
        which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, edges, edge_price, rows, means, row_numbers,
        pairs, roll, levers, wrench, of_limits, of_ends, pressing, commands,
    )
    for k in range(n):
        for i in range(2 * m):
            commands[k, i] = -commands[k, i]
    factor.solve(panels, begins, order, later, counts, commands)
    moved_limits, moved_ends, moved_clear = np.empty((6, n, m)), np.empty((n, 7)), np.empty((len(pairs), m))
    limits.moved(span, roll, commands, moved_limits)
    sweeps.move(
        which, mean_k, mean_v, last_k, last_v, pairs, robot, roll, levers, wrench, near, commands, moved_ends, moved_clear
    )
    margins.follow(
        fixed, end_price, span, margin, push, soft, aims, on, of_limits, of_ends, apart, moved_limits, moved_ends,
        moved_clear, _FIXED, by_margin, by_push, held_after,
    )
    barrier, aims_next = _correct(n, on, owners, margin, push, by_margin, by_push)
    return commands, by_margin, by_push, held_after, barrier, aims_next


@inner
def _correct(n, on, owners, margin, push, by_margin, by_push):
    a, b = np.empty(n), np.empty(n)
    margins.lengths(owners, margin, by_margin, a)
    margins.lengths(owners, push, by_push, b)
    count = 0.0
    for q in range(len(on)):
        count += on[q]
    count = max(count, 1.0)
    before = margins.product(margin, push, on) / count
    left = max(margins.product_ahead(owners, margin, push, by_margin, by_push, a, b, on) / count, 0.0)
    barrier = max((left / before) ** 3 * before, _SMALLEST)
    aims = np.empty(len(on))
    for q in range(len(aims)):
        aims[q] = (barrier - by_margin[q] * by_push[q]) / push[q]
    return barrier, aims


def advance(owners, roll, margin, push, held, commands, by_margin, by_push, held_after):
    """Go each robot's longest step that leaves its margins and pushes above 0.

    Returns:
        commands (N, 2M), margins, pushes (L,), multipliers of fixed limits; part of the step taken by whom it is least.
    """
    n, m = held.shape[1], held.shape[2]
    a, b = np.empty(n), np.empty(n)
    margins.lengths(owners, margin, by_margin, a)
    margins.lengths(owners, push, by_push, b)
    least = 1.0
    moved, next_held = np.empty((n, 2 * m)), np.empty((6, n, m))
    for k in range(n):
        least = min(least, a[k], b[k])
        for i in range(m):
            moved[k, i] = roll[K, k, i] + a[k] * commands[k, i]
            moved[k, m + i] = roll[V, k, i] + a[k] * commands[k, m + i]
            for r in range(6):
                next_held[r, k, i] = held[r, k, i] + b[k] * (held_after[r, k, i] - held[r, k, i])
    next_margin, next_push = np.empty(len(margin)), np.empty(len(push))
    for q in range(len(margin)):
        k, j = owners[0, q], owners[1, q]
        next_margin[q] = margin[q] + min(a[k], a[j]) * by_margin[q]
        next_push[q] = push[q] + min(b[k], b[j]) * by_push[q]
    return moved, next_margin, next_push, next_held, least


def settle(end_price, missed, clear, on, margin, push, barrier):
    """Fit margins to the rows that the step has led to, in place; what is open then."""
    margins.fit(end_price, missed, clear, margin, barrier)
    return margins.product(margin, push, on)
