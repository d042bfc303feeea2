# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The matrix of a step, made and factorised: linearised.Linearised.factor as a kernel."""

from __future__ import annotations

import numpy as np

from . import blocks, factor, limits
from .compiled import inner
from .objective import aligning
from .rows import subtract_triangle, turn


@inner
def pressed(stiff, near):
    """Fill whether any row of a pair is held stiffly enough to count, shape (P,)."""
    for p in range(len(stiff)):
        for i in range(stiff.shape[1]):
            near[p] = near[p] or stiff[p, i] > blocks.SOFT


def assemble(
    which, mean_k, mean_v, last_k, last_v, span, prices, field, robot, edges, edge_price, coupled, compared_own,
    compared_across, pairs, order, joins, roll, rows_roll, levers, wrench, bent, near, stiff_limits, stiff_ends,
    stiff_clear, pressure, bending, bends,
):
    """The matrix as panels.

    Args:
        joins: pairs of robots that share a block, shape (J, 6): the robot that is eliminated first; the other; position of
            their edge, or -1; of their pair, or -1; whether the edge, and the pair, name the other one first.
        roll: where the limits are taken. rows_roll: where all derivatives of poses and turnings are, with ``levers``,
            ``wrench``.

    Returns:
        panels, begins, later, counts, beside as factor.factorise takes them.
    """
    n, m = field.shape[1], field.shape[2]
    size, b = 2 * m, (2 * m + 3) // 4 * 4
    on = np.zeros(len(joins), np.bool_)
    for q in range(len(joins)):
        e, p = joins[q, 2], joins[q, 3]
        on[q] = e >= 0 and (edge_price[0, e] > 0.0 or edge_price[1, e] > 0.0 or len(compared_across) > 0)
        on[q] = on[q] or (p >= 0 and near[p])
    later, counts, beside = np.empty((n, n), np.int64), np.zeros(n, np.int64), np.empty((n, n), np.int64)
    factor.pattern(order, joins, on, later, counts, beside)
    begins = np.zeros(n, np.int64)
    total = 0
    for k in range(n):
        begins[k] = total
        total += b * b * (1 + counts[k])
    panels = np.zeros(total)
    tensors = np.zeros((6, n, m))
    blocks.sums(
        pairs, wrench, bent, near, stiff_clear, pressure, robot, rows_roll, stiff_ends, span, edges, edge_price, tensors
    )
    by_means, half, turned = np.empty((size, size)), np.empty((size, size)), np.empty((size, size))
    for k in range(n):
        blocks.own(
            k, tensors, levers, span, prices, field, robot, coupled[k], compared_own, rows_roll, bending, bends,
            by_means,
        )
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        _by_commands(mean_k[which[0, k]], mean_v[which[1, k]], mean_k[which[0, k]], mean_v[which[1, k]],
                     by_means, half, turned, w, 0, True)
        limits.stiffen(span, prices, roll, k, stiff_limits, w)
        _hold_ends(last_k[which[0, k]], last_v[which[1, k]], stiff_ends, k, w)
        for i in range(size, b):
            w[i, i] = 1.0
    tensor = np.empty((9, m))
    for q in range(len(joins)):
        if not on[q]:
            continue
        k, j, e, p = joins[q, 0], joins[q, 1], joins[q, 2], joins[q, 3]
        if p >= 0 and near[p]:
            blocks.apart(p, joins[q, 5] == 0, wrench, stiff_clear, tensor)
        else:
            for c in range(9):
                for i in range(m):
                    tensor[c, i] = 0.0
        if e >= 0 and edge_price[1, e] > 0.0:
            aligned = 0.0
            for i in range(m - 1, -1, -1):
                aligned += aligning(span, edges, edge_price, rows_roll, e, i)
                tensor[8, i] -= aligned
        blocks.between(j, k, tensor, levers, by_means)
        if e >= 0:
            blocks.couple(
                e, joins[q, 4] == 0, j, k, edge_price[0, e], span, field, compared_across, rows_roll, by_means
            )
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        _by_commands(mean_k[which[0, k]], mean_v[which[1, k]], mean_k[which[0, j]], mean_v[which[1, j]],
                     by_means, half, turned, w, b * (1 + beside[k, j]), False)
    return panels, begins, later, counts, beside


@inner
def _by_commands(left_k, left_v, right_k, right_v, by_means, half, turned, w, column, upper):
    """Add a block by means, given as its transpose, as one by commands to a panel from a column on."""
    m = len(left_k)
    for i in range(2 * m):
        for j in range(2 * m):
            half[i, j] = 0.0
    subtract_triangle(right_k, by_means, 0, half, 0, False)
    subtract_triangle(right_v, by_means, m, half, 0, False)
    turn(half, turned)
    subtract_triangle(left_k, turned, 0, w, column, upper)
    subtract_triangle(left_v, turned, m, w, column, upper)


@inner
def _hold_ends(last_k, last_v, stiff, k, w):
    """Add what the last four states of a robot are held with to the upper half of its block."""
    m = len(last_k)
    for i in range(m):
        for j in range(i, m):
            w[i, j] += stiff[k, 3] * last_k[i] * last_k[j]
            w[m + i, m + j] += stiff[k, 4] * last_v[i] * last_v[j]
    w[m - 1, m - 1] += stiff[k, 5]
    w[2 * m - 1, 2 * m - 1] += stiff[k, 6]
