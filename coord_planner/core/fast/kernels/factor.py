# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Cholesky factor of a matrix of square blocks, sparse like a graph of robots: factor.py as kernels.

Robots are eliminated in a given order. The row of blocks of each is one panel: its own block (upper half), beside it
the blocks with those robots that come later and share one with it. Blocks are padded to a multiple of four rows.
"""

from __future__ import annotations

import math

import numpy as np

from .compiled import inner
from .rows import add_one, subtract_sixteen


@inner
def pattern(order, joins, on, later, counts, beside):
    """Fill which blocks there are, with those that fill up.

    Args:
        order: robots as they are eliminated. joins: pairs of robots in its first two columns, the one that is
            eliminated first in front. on: whether the pair's block is not empty.
        later: filled to the left with the robots that share a block with each and come later, (N, N). counts: how many,
            (N,), 0 to begin with. beside: place of a block in its panel, or -1, (N, N).
    """
    n = len(order)
    for k in range(n):
        for j in range(n):
            beside[k, j] = -1
    for q in range(len(joins)):
        if on[q]:
            beside[joins[q, 0], joins[q, 1]] = 0
    for s in range(n):
        k, count = order[s], 0
        for t in range(s + 1, n):
            if beside[k, order[t]] >= 0:
                beside[k, order[t]] = count
                later[k, count] = order[t]
                count += 1
        counts[k] = count
        for i in range(count):
            for j in range(i + 1, count):
                beside[later[k, i], later[k, j]] = 0


@inner
def most(counts):
    """The largest of them."""
    found = 0
    for k in range(len(counts)):
        found = max(found, counts[k])
    return found


def factorise(panels, begins, order, later, counts, beside, b):
    """Factorise in place; whether the matrix was positive definite."""
    rows = np.empty(4 * b * (1 + most(counts)))
    for s in range(len(order)):
        k = order[s]
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        if not _panel(w, b, rows[: 4 * width].reshape(4, width)):
            return False
        for i in range(counts[k]):
            j = later[k, i]
            wide = b * (1 + counts[j])
            target = panels[begins[j] : begins[j] + b * wide].reshape(b, wide)
            _subtract(target, 0, w, b, b * (1 + i), b * (1 + i), True)
            for t in range(i + 1, counts[k]):
                column = b * (1 + beside[j, later[k, t]])
                _subtract(target, column, w, b, b * (1 + i), b * (1 + t), False)
    return True


@inner
def _panel(w, b, rows):
    """Root of the block in front, and what is beside it divided by that, four rows at a time."""
    for i in range(0, b, 4):
        width = w.shape[1] - i
        y0, y1, y2, y3 = rows[0, :width], rows[1, :width], rows[2, :width], rows[3, :width]
        z0, z1, z2, z3 = w[i, i:], w[i + 1, i:], w[i + 2, i:], w[i + 3, i:]
        for c in range(width):
            y0[c], y1[c], y2[c], y3[c] = z0[c], z1[c], z2[c], z3[c]
        for p in range(0, i, 4):
            subtract_sixteen(
                y0, y1, y2, y3, w[p : p + 4, i : i + 4], w[p, i:], w[p + 1, i:], w[p + 2, i:], w[p + 3, i:]
            )
        d0 = y0[0]
        if not d0 > 0.0:
            return False
        s0 = 1.0 / math.sqrt(d0)
        b01, b02, b03 = y0[1] * s0, y0[2] * s0, y0[3] * s0
        d1 = y1[1] - b01 * b01
        if not d1 > 0.0:
            return False
        s1 = 1.0 / math.sqrt(d1)
        b12, b13 = (y1[2] - b01 * b02) * s1, (y1[3] - b01 * b03) * s1
        d2 = y2[2] - b02 * b02 - b12 * b12
        if not d2 > 0.0:
            return False
        s2 = 1.0 / math.sqrt(d2)
        b23 = (y2[3] - b02 * b03 - b12 * b13) * s2
        d3 = y3[3] - b03 * b03 - b13 * b13 - b23 * b23
        if not d3 > 0.0:
            return False
        s3 = 1.0 / math.sqrt(d3)
        for c in range(width):
            t0 = y0[c] * s0
            t1 = (y1[c] - b01 * t0) * s1
            t2 = (y2[c] - b02 * t0 - b12 * t1) * s2
            z0[c], z1[c], z2[c] = t0, t1, t2
            z3[c] = (y3[c] - b03 * t0 - b13 * t1 - b23 * t2) * s3
    return True


@inner
def _subtract(target, column, w, b, left, right, upper):
    """target[:, column:] -= w[:, left:]' @ w[:, right:], blocks of b rows; only about the upper half when ``upper``."""
    for r in range(0, b, 4):
        first = r if upper else 0
        begin, end = column + first, column + b
        y0, y1, y2, y3 = (
            target[r, begin:end], target[r + 1, begin:end], target[r + 2, begin:end], target[r + 3, begin:end]
        )
        at, stop = right + first, right + b
        for p in range(0, b, 4):
            subtract_sixteen(
                y0, y1, y2, y3, w[p : p + 4, left + r : left + r + 4],
                w[p, at:stop], w[p + 1, at:stop], w[p + 2, at:stop], w[p + 3, at:stop],
            )


@inner
def solve(panels, begins, order, later, counts, x):
    """Solve in place for a right side of shape (N, 2M)."""
    n, size = x.shape
    b = (size + 3) // 4 * 4
    y = np.empty(b * (1 + most(counts)))
    for s in range(n):
        k = order[s]
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        _fetch(x, k, later, counts, b, y)
        for p in range(size):
            y[p] /= w[p, p]
            add_one(y[p + 1 : width], -y[p], w[p, p + 1 :])
        for p in range(size):
            x[k, p] = y[p]
        for i in range(counts[k]):
            for p in range(size):
                x[later[k, i], p] = y[b * (1 + i) + p]
    for s in range(n - 1, -1, -1):
        k = order[s]
        width = b * (1 + counts[k])
        w = panels[begins[k] : begins[k] + b * width].reshape(b, width)
        _fetch(x, k, later, counts, b, y)
        for p in range(size - 1, -1, -1):
            row, total = w[p, p + 1 :], 0.0
            known = y[p + 1 : width]
            for c in range(len(known)):
                total += row[c] * known[c]
            y[p] = (y[p] - total) / w[p, p]
            x[k, p] = y[p]


@inner
def _fetch(x, k, later, counts, b, y):
    """A robot's right side and beside it those of the later ones."""
    size = x.shape[1]
    for i in range(counts[k] + 1):
        robot = later[k, i - 1] if i else k
        for p in range(size):
            y[b * i + p] = x[robot, p]
        for p in range(size, b):
            y[b * i + p] = 0.0
