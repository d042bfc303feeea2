"""How machines move under commands: a lag of first order, then arcs. Many robots at once."""

from __future__ import annotations

import numpy as np

from . import se2
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
    decay = np.where(lag > 0, np.exp(-h[:, None] / np.maximum(lag, 1e-6)), 0.0)
    steps = commands.shape[1]
    path = np.empty((len(poses), steps + 1, 3))
    path[:, 0] = pose = poses
    for i in range(steps):
        after = commands[:, i] + (reached - commands[:, i]) * decay
        middle = (reached + after) / 2
        distance = middle[:, 0] * h * factor
        pose = np.stack(se2.arc(pose[:, 0], pose[:, 1], pose[:, 2], distance, distance * middle[:, 1]), axis=1)
        path[:, i + 1] = pose
        reached = after
    return path, reached
