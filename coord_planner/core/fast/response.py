# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What machines reach under commands that run straight from node to node, as matrices: the chain is linear."""

from __future__ import annotations

import attrs
import numpy as np

_AT_ONCE = 400  # rows that are multiplied in one call: more would wake BLAS's other threads


@attrs.frozen(eq=False)
class Response:
    """First-order answer of robots to node commands; robots with the same lag share a matrix. U lags, M intervals.

    Attributes:
        which: lag of each robot, shape (N,), indices into the matrices.
        mean: mean over each interval of what is reached, by the commands at nodes 1 .. M, shape (U, M, M).
        mean_start: the same by what is reached and commanded at node 0, shape (U, M, 2).
        reached: what is reached at nodes 1 .. M, by the commands at nodes 1 .. M, shape (U, M, M).
        reached_start: by what is reached and commanded at node 0, shape (U, M, 2).
        fading: what is reached at a node by what is reached at an earlier one, nodes 1 .. M, shape (U, M, M).
        lag, decay: of each robot in each interval, lag / h and exp(-h / lag), shape (N, M).
    """

    which: np.ndarray
    mean: np.ndarray
    mean_start: np.ndarray
    reached: np.ndarray
    reached_start: np.ndarray
    fading: np.ndarray
    lag: np.ndarray
    decay: np.ndarray

    def forward(self, matrix: np.ndarray, values: np.ndarray) -> np.ndarray:
        """matrix @ values for each robot; matrix (U, A, B), values (N, B) -> (N, A)."""
        if len(matrix) == 1:
            return values @ matrix[0].T
        return np.matmul(matrix[self.which], values[:, :, None])[:, :, 0]

    def backward(self, matrix: np.ndarray, values: np.ndarray, robots: np.ndarray | None = None) -> np.ndarray:
        """matrix' @ values for each robot, or for those named.

        Args:
            matrix: shape (U, A, B). values: shape (N, ..., A). robots: shape (N,); all in turn when left out.

        Returns:
            shape (N, ..., B).
        """
        if len(matrix) > 1:
            which = self.which if robots is None else self.which[robots]
            wide = values.reshape(len(values), -1, values.shape[-1])
            return np.matmul(wide, matrix[which]).reshape(values.shape[:-1] + matrix.shape[2:])
        if values.ndim == 2 and len(values) > _AT_ONCE:
            parts = range(0, len(values), _AT_ONCE)
            return np.concatenate([values[i : i + _AT_ONCE] @ matrix[0] for i in parts])
        return values @ matrix[0]


def response(intervals: np.ndarray, lag: np.ndarray) -> Response:
    """The matrices for intervals of given lengths, shape (M,), and the lag of each robot, shape (N,), seconds.

    Exact for lag * reached' = command - reached with a command that is linear in each interval (as in
    ocp.lag_residual): reached(h) = e reached(0) + (1 - q) command(h) + (q - e) command(0), e = exp(-h / lag),
    q = (lag / h)(1 - e); the mean over the interval is that of the command, less lag * (change of reached) / h.
    """
    lags, which = np.unique(lag, return_inverse=True)
    which = which.reshape(-1)
    m = len(intervals)
    late = lags[:, None] > 0
    # Relative to h: where there is no lag, e and q are 0 and the machine is where it was told to be.
    ratio = np.where(late, lags[:, None] / intervals, 0.0)
    e = np.where(late, np.exp(-1.0 / np.maximum(ratio, 1e-9)), 0.0)
    q = ratio * (1.0 - e)
    steps = np.arange(m)
    pulls = np.zeros((len(lags), m, m + 2))  # columns: reached at node 0, commands at nodes 0 .. M
    pulls[:, steps, steps + 1] = q - e
    pulls[:, steps, steps + 2] = 1.0 - q
    pulls[:, 0, 0] = e[:, 0]
    ends = np.cumsum(intervals)
    elapsed = ends[:, None] - ends[None, :]
    fading = np.exp(-np.maximum(elapsed, 0.0) / np.maximum(lags, 1e-9)[:, None, None]) * (elapsed >= 0.0)
    reached = np.matmul(fading, pulls)
    before = np.zeros_like(reached)
    before[:, 0, 0] = 1.0
    before[:, 1:] = reached[:, :-1]
    mean = -ratio[:, :, None] * (reached - before)
    mean[:, steps, steps + 1] += 0.5
    mean[:, steps, steps + 2] += 0.5
    return Response(
        which, np.ascontiguousarray(mean[:, :, 2:]), mean[:, :, :2],
        np.ascontiguousarray(reached[:, :, 2:]), reached[:, :, :2],
        fading, ratio[which], e[which],
    )
