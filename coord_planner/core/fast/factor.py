# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Cholesky factor of a symmetric matrix of square blocks, sparse like a graph of robots.

Robots are eliminated in an order that keeps the fill small: fewest neighbours first (minimum degree: George & Liu,
*Computer Solution of Large Sparse Positive Definite Systems*, 1981, from memory). A line or a tree fills nothing.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from scipy.linalg import lapack

from ...errors import SolveError

Blocks = dict[tuple[int, int], np.ndarray]


def elimination_order(count: int, joined: Iterable[tuple[int, int]]) -> list[int]:
    """Robots 0 .. count - 1 in an order of small fill; ``joined``: pairs that share a block."""
    neighbours: list[set[int]] = [set() for _ in range(count)]
    for k, j in joined:
        neighbours[k].add(j)
        neighbours[j].add(k)
    left, order = set(range(count)), []
    while left:
        k = min(left, key=lambda robot: (len(neighbours[robot]), robot))
        order.append(k)
        left.remove(k)
        for j in neighbours[k]:
            neighbours[j] |= neighbours[k]
            neighbours[j] -= {k, j}
    return order


class Factor:
    """L L' of a matrix given by its blocks.

    Only pieces of BLAS and LAPACK are used that stay in one thread for blocks of usual size: a triangular solve for
    several right sides would wake the others for microseconds of work, which takes milliseconds where cores are busy.

    Args:
        diagonal: shape (N, b, b), symmetric; overwritten.
        beside: blocks (row k, column j) for pairs of robots where k comes before j in the order; used up.
        order: every robot once.

    Raises:
        SolveError: the matrix is not positive definite.
    """

    def __init__(self, diagonal: np.ndarray, beside: Blocks, order: list[int]) -> None:
        later: dict[int, list[int]] = {k: [] for k in order}
        for k, j in beside:
            later[k].append(j)
        place = {k: i for i, k in enumerate(order)}
        self._steps: list[tuple[int, np.ndarray, list[tuple[int, np.ndarray]]]] = []
        for k in order:
            inverse = _inverse_of_root(diagonal[k])
            column = [(j, inverse @ beside.pop((k, j))) for j in later[k]]
            self._steps.append((k, inverse, column))
            for i, (j, block) in enumerate(column):
                diagonal[j] -= block.T @ block
                for other, second in column[:i]:
                    if place[j] < place[other]:
                        _subtract(beside, later, (j, other), block.T @ second)
                    else:
                        _subtract(beside, later, (other, j), second.T @ block)

    def solve(self, right: np.ndarray) -> np.ndarray:
        """The solution for right sides of shape (N, b)."""
        x = right.copy()
        for k, inverse, column in self._steps:
            x[k] = known = inverse @ x[k]
            for j, block in column:
                x[j] -= known @ block
        for k, inverse, column in reversed(self._steps):
            known = x[k]
            for j, block in column:
                known = known - block @ x[j]
            x[k] = known @ inverse
        return x


def _inverse_of_root(matrix: np.ndarray) -> np.ndarray:
    """The inverse of the lower Cholesky factor of a symmetric matrix, which is overwritten."""
    root, failed = lapack.dpotrf(matrix.T, lower=1, clean=1, overwrite_a=1)
    if failed:
        raise SolveError("the matrix of a step is not positive definite")
    inverse: np.ndarray = lapack.dtrtri(root, lower=1, overwrite_c=1)[0]
    return inverse


def _subtract(beside: Blocks, later: dict[int, list[int]], place: tuple[int, int], block: np.ndarray) -> None:
    if place in beside:
        beside[place] -= block
    else:
        beside[place] = -block
        later[place[0]].append(place[1])
