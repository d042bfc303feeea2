# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Neighbours compared otherwise than at equal moments: a quadratic in the turnings that stays the same in a tick."""

from __future__ import annotations

import attrs
import numpy as np

from ..problem import Problem


@attrs.frozen(eq=False)
class Comparing:
    """R rows, each the difference of two means of turnings. N robots, M intervals, E edges.

    Attributes:
        robots: the two of each row, shape (2, R). means: weights on their turnings, shape (2, R, M).
        known: what is added to the difference, shape (R,). price: of its square, shape (R,).
        own: second derivatives by each robot's turnings, shape (N, M, M). across: by those of the first robot of each
            edge, and then of the second, shape (E, M, M).
    """

    robots: np.ndarray
    means: np.ndarray
    known: np.ndarray
    price: np.ndarray
    own: np.ndarray
    across: np.ndarray

    def differences(self, turning: np.ndarray) -> np.ndarray:
        """Of each row, shape (R,), for turnings of shape (N, M)."""
        first, second = np.sum(self.means * turning[self.robots], axis=2)
        return np.asarray(first - second + self.known)

    def cost(self, turning: np.ndarray) -> float:
        """Half the priced squares."""
        return 0.5 * float(np.sum(self.price * self.differences(turning) ** 2))

    def slopes(self, turning: np.ndarray) -> np.ndarray:
        """By the turnings, shape (N, M)."""
        pull = (self.price * self.differences(turning))[:, None]
        found = np.zeros_like(turning)
        np.add.at(found, self.robots[0], pull * self.means[0])
        np.subtract.at(found, self.robots[1], pull * self.means[1])
        return found


def comparing(problem: Problem) -> Comparing | None:
    """Of a problem; None where neighbours are compared at equal moments."""
    rows = problem.compared
    if rows is None or not len(rows.edges):
        return None
    count, m = problem.turn_speed.shape
    kept = np.flatnonzero(rows.seconds > 0.0)
    edges = rows.edges[kept]
    robots = problem.edges[edges].T
    means = np.stack([
        _spread(rows.first[kept], rows.first_at[kept], m), _spread(rows.second[kept], rows.second_at[kept], m)
    ])
    price = problem.coupling * problem.weights[edges] * rows.seconds[kept]
    own, across = np.zeros((count, m, m)), np.zeros((len(problem.edges), m, m))
    for e in range(len(problem.edges)):
        here = edges == e
        first, second = means[:, here]
        priced = price[here, None]
        k, j = problem.edges[e]
        own[k] += first.T @ (priced * first)
        own[j] += second.T @ (priced * second)
        across[e] = -first.T @ (priced * second)
    return Comparing(robots, means, rows.known[kept], price, own, across)


def _spread(weights: np.ndarray, begins: np.ndarray, m: int) -> np.ndarray:
    """Weights in their places among all intervals, shape (R, M)."""
    found = np.zeros((len(weights), m))
    columns = begins[:, None] + np.arange(weights.shape[1])
    found[np.arange(len(weights))[:, None], columns] = weights
    return found
