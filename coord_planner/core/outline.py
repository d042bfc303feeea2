# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Exact outlines of robots and the distances between them (shapely), in metres."""

from __future__ import annotations

import numpy as np
import shapely


def outlines(corners: np.ndarray, poses: np.ndarray) -> np.ndarray:
    """Footprints at poses.

    Args:
        corners: in each robot's frame, shape (N, 4, 2). poses: shape (N, ..., 3).

    Returns:
        shapely polygons, shape (N, ...).
    """
    s, c = np.sin(poses[..., 2]), np.cos(poses[..., 2])
    shape = corners.shape[:1] + (1,) * (poses.ndim - 2) + corners.shape[1:]
    local = corners.reshape(shape)
    x = poses[..., None, 0] + c[..., None] * local[..., 0] - s[..., None] * local[..., 1]
    y = poses[..., None, 1] + s[..., None] * local[..., 0] + c[..., None] * local[..., 1]
    return shapely.polygons(np.stack([x, y], axis=-1))


def all_pairs(count: int) -> np.ndarray:
    """Every pair of ``count`` robots once, shape (P, 2)."""
    return np.stack(np.triu_indices(count, k=1), axis=1)


def clearances(polygons: np.ndarray, pairs: np.ndarray) -> np.ndarray:
    """Exact distances between the outlines of pairs, 0 where they overlap; shape (P, ...)."""
    return shapely.distance(polygons[pairs[:, 0]], polygons[pairs[:, 1]])


def closest(
    polygons: np.ndarray, pairs: np.ndarray, growth: np.ndarray | None = None
) -> tuple[float, tuple[int, int]]:
    """Smallest distance over all pairs and moments, and the pair; (inf, (-1, -1)) without pairs.

    Args:
        growth: by how much each outline grows all round, for doubt about where it is, shape (N,), metres.
    """
    if not len(pairs):
        return float("inf"), (-1, -1)
    each = clearances(polygons, pairs).reshape(len(pairs), -1).min(axis=1)
    if growth is not None:
        each = np.maximum(each - growth[pairs].sum(axis=1), 0.0)
    worst = int(np.argmin(each))
    return float(each[worst]), (int(pairs[worst, 0]), int(pairs[worst, 1]))
