# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Rows of numbers, several at a time: the innermost loops of products. Lengths are those of the first argument."""

from __future__ import annotations

from .compiled import inner


@inner
def add_one(y, a, x):
    """y += a * x."""
    for c in range(len(y)):
        y[c] += a * x[c]


@inner
def subtract_sixteen(y0, y1, y2, y3, a, x0, x1, x2, x3):
    """Four rows y -= a' * four rows x, with a of shape (4, 4)."""
    a00, a01, a02, a03 = a[0, 0], a[0, 1], a[0, 2], a[0, 3]
    a10, a11, a12, a13 = a[1, 0], a[1, 1], a[1, 2], a[1, 3]
    a20, a21, a22, a23 = a[2, 0], a[2, 1], a[2, 2], a[2, 3]
    a30, a31, a32, a33 = a[3, 0], a[3, 1], a[3, 2], a[3, 3]
    for c in range(len(y0)):
        z0, z1, z2, z3 = x0[c], x1[c], x2[c], x3[c]
        y0[c] -= a00 * z0 + a10 * z1 + a20 * z2 + a30 * z3
        y1[c] -= a01 * z0 + a11 * z1 + a21 * z2 + a31 * z3
        y2[c] -= a02 * z0 + a12 * z1 + a22 * z2 + a32 * z3
        y3[c] -= a03 * z0 + a13 * z1 + a23 * z2 + a33 * z3


@inner
def subtract_triangle(triangle, x, first, found, column, upper):
    """Subtract triangle' @ x[first : first + M] from rows first .. of ``found``, from a column on.

    With ``upper`` only from the upper half of a square, and from what lies next to its diagonal, which nobody reads.
    """
    m, width = len(triangle), x.shape[1]
    done = m - m % 4
    for r in range(0, done, 4):
        left = first + r if upper else 0
        at, end, row = column + left, column + width, first + r
        y0, y1, y2, y3 = found[row, at:end], found[row + 1, at:end], found[row + 2, at:end], found[row + 3, at:end]
        for j in range(r, done, 4):
            row = first + j
            subtract_sixteen(
                y0, y1, y2, y3, triangle[j : j + 4, r : r + 4], x[row, left:], x[row + 1, left:], x[row + 2, left:],
                x[row + 3, left:],
            )
        for j in range(done, m):
            for q in range(r, r + 4):
                add_one(found[first + q, at:end], -triangle[j, q], x[first + j, left:])
    for q in range(done, m):
        left = first + q if upper else 0
        for j in range(q, m):
            add_one(found[first + q, column + left : column + width], -triangle[j, q], x[first + j, left:])


@inner
def turn(a, found):
    """Fill the transpose of a square, four rows at a time."""
    n = len(a)
    for i in range(0, n, 4):
        for j in range(n):
            for r in range(i, min(i + 4, n)):
                found[j, r] = a[r, j]
