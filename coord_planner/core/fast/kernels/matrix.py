# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The matrix of a step, made and factorised: linearised.Linearised.factor as a kernel."""

from __future__ import annotations

import numpy as np

from . import blocks, factor, limits, sweeps
from .chain import lever
from .compiled import inner
from .objective import aligning
from .rows import subtract_triangle, turn


def linearise(span, robot, pairs, roll, wrench, stiff_clear, of_ends, of_clear, bending):
    """Where derivatives are taken.

    Args:
        bending: whether what pulls on the poses bends counts, with forces on ends and clearances.

    Returns:
        levers (6, N, M); pairs that are held stiffly enough to count (P,); what bends (3, N, M), and whether it counts.
    """
    n, m = roll.shape[1], span.shape[1]
    levers, near, bends, bent = np.empty((6, n, m)), np.empty(len(pairs), np.bool_), np.empty((3, n, m)), False
    lever(span, robot, roll, levers)
    for p in range(len(pairs)):
        near[p] = False
        for i in range(m):
            near[p] = near[p] or stiff_clear[p, i] > blocks.SOFT
    if bending:
        later = np.zeros((3, n, m))
        sweeps.gather(pairs, wrench, robot, roll, of_clear, of_ends, later)
        sweeps.gather_later(later)
        bent = blocks.bend(span, roll, later, bends)
    return levers, near, bends, bent


def assemble(
    which, mean, last, span, prices, field, robot, edges, edge_price, coupled, compared_own,
    compared_across, pairs, order, joins, roll, rows_roll, levers, wrench, bent, near, stiff_limits, stiff_ends,
    stiff_clear, pressure, bending, bends,
):
    """The matrix as panels.

    Args:
        joins: pairs of robots that share a block, shape (J, 6): the robot that is eliminated first; the other; position
            of their edge, or -1; of their pair, or -1; whether the edge, and the pair, name the other one first.
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
    tensor = np.empty((9, m))
    for q in range(n + len(joins)):
        if q >= n and not on[q - n]:
            continue
        if q < n:
            k = j = q
            blocks.own(
                k, tensors, levers, span, prices, field, robot, coupled[k], compared_own, rows_roll, bending, bends,
                by_means,
            )
        else:
            k, j = joins[q - n, 0], joins[q - n, 1]
            _between(
                joins[q - n], span, field, edges, edge_price, compared_across, rows_roll, levers, wrench, near,
                stiff_clear, tensor, by_means,
            )
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        column = b * (1 + beside[k, j]) if q >= n else 0
        _by_commands(which, mean, k, j, by_means, half, turned, w, column, q < n)
        if q < n:
            limits.stiffen(span, prices, roll, k, stiff_limits, w)
            _hold_ends(last[0, which[0, k]], last[1, which[1, k]], stiff_ends, k, w)
            for i in range(size, b):
                w[i, i] = 1.0
    return panels, begins, later, counts, beside


@inner
def _between(
    join, span, field, edges, edge_price, across, roll, levers, wrench, near, stiff_clear, tensor, by_means
):
    """Fill the transpose of the block of a join, by means: rows of the robot that is eliminated later."""
    k, j, e, p = join[0], join[1], join[2], join[3]
    if p >= 0 and near[p]:
        blocks.apart(p, join[5] == 0, wrench, stiff_clear, tensor)
    else:
        for c in range(9):
            for i in range(tensor.shape[1]):
                tensor[c, i] = 0.0
    if e >= 0 and edge_price[1, e] > 0.0:
        aligned = 0.0
        for i in range(tensor.shape[1] - 1, -1, -1):
            aligned += aligning(span, edges, edge_price, roll, e, i)
            tensor[8, i] -= aligned
    blocks.between(j, k, tensor, levers, by_means)
    if e >= 0:
        blocks.couple(e, join[4] == 0, j, k, edge_price[0, e], span, field, across, roll, by_means)


@inner
def _by_commands(which, mean, k, j, by_means, half, turned, w, column, upper):
    """Add the block of robots k (rows) and j by their means, given as its transpose, as one by commands to a panel."""
    m = mean.shape[2]
    for r in range(2 * m):
        for c in range(2 * m):
            half[r, c] = 0.0
    for side in range(2):
        subtract_triangle(mean[side, which[side, j]], by_means, side * m, half, 0, False)
    turn(half, turned)
    for side in range(2):
        subtract_triangle(mean[side, which[side, k]], turned, side * m, w, column, upper)


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
