# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How machines move under commands: a lag of first order, then arcs. Many robots at once."""

from __future__ import annotations

import numpy as np

from . import se2
from .fast.engine import kernels
from .fleet import Fleet


def lags(fleet: Fleet) -> np.ndarray:
    """Time constants of speed and curvature, shape (N, 2), seconds."""
    return np.stack([fleet.response("speed_lag"), fleet.response("curvature_lag")], axis=1)


def drive(
    poses: np.ndarray, reached: np.ndarray, commands: np.ndarray, h: np.ndarray, lag: np.ndarray, factor: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Follow commands that are constant over short steps.

    Args:
        poses: shape (n, 3). reached: speed (before the factor) and curvature, shape (n, 2).
        commands: speed and curvature in effect in each step, shape (n, K, 2). h: step of each robot, shape (n,), s.
        lag: shape (n, 2), seconds. factor: part of its speed that each robot really makes, shape (n,).

    Returns:
        poses after each step, the start first, shape (n, K + 1, 3); what is reached at the end, shape (n, 2).
    """
    compiled = kernels()
    if compiled is not None:
        path, ends = compiled.drive(poses, reached, commands, h, lag, factor)
        return path, ends
    return _drive(poses, reached, commands, h, lag, factor)


def _drive(
    poses: np.ndarray, reached: np.ndarray, commands: np.ndarray, h: np.ndarray, lag: np.ndarray, factor: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """The same without what is compiled."""
    decay = np.where(lag > 0, np.exp(-h[:, None] / np.maximum(lag, 1e-6)), 0.0)
    steps = commands.shape[1]
    nodes = np.empty((len(poses), steps + 1, 2))
    nodes[:, 0] = reached
    new = commands * (1.0 - decay)[:, None]
    for i in range(steps):
        nodes[:, i + 1] = new[:, i] + nodes[:, i] * decay
    middle = (nodes[:, :-1] + nodes[:, 1:]) / 2
    distances = middle[..., 0] * (h * factor)[:, None]
    return se2.rollout(poses, distances, distances * middle[..., 1]), nodes[:, -1]
