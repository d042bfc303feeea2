# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Exact distances between many rectangular footprints at once, as the loop asks for them on every tick.

Two disjoint convex shapes are nearest at a corner of one of them; two rectangles are disjoint where a side of one of
them separates them (Gottschalk, Lin & Manocha, *OBBTree*, SIGGRAPH 1996, from memory). Both are seen at once from the
frame of each rectangle. Shapely gives the same distances, one geometry object after another; the tests compare them.
"""

from __future__ import annotations

import numpy as np

Two = tuple[np.ndarray, np.ndarray]

_TOUCHING = 1e-9  # metres


def gaps(corners: Two, poses: Two) -> np.ndarray:
    """Shortest vectors from the first footprint of each pair to the second, 0 where they overlap, shape (C, 2), metres.

    Args:
        corners: of the first and of the second of each pair, anticlockwise from the front left one, in the robot's own
            frame, each of shape (C, 4, 2). poses: of the robots, each of shape (C, 3).
    """
    turns = [np.stack([np.cos(pose[:, 2]), np.sin(pose[:, 2])]) for pose in poses]
    first, second = (_placed(*each) for each in zip(corners, poses, turns))
    ahead, apart = _seen_from(corners[0], poses[0], turns[0], second)
    back, too = _seen_from(corners[1], poses[1], turns[1], first)
    nearer = (ahead * ahead).sum(axis=0) <= (back * back).sum(axis=0)
    return (np.where(nearer, ahead, -back) * (apart | too)).T


def distances(corners: Two, poses: Two) -> np.ndarray:
    """Lengths of ``gaps``, shape (C,), metres."""
    found: np.ndarray = np.hypot(*gaps(corners, poses).T)
    return found


def separating_normals(corners: np.ndarray, poses: np.ndarray, pairs: np.ndarray) -> np.ndarray:
    """Unit vectors along the shortest line from the first of a pair to the second, shape (P, ..., 2).

    The distance of two convex shapes equals the gap between their shadows on this line, and no other line
    shows a larger gap: with the line kept, a gap that is kept keeps the distance. Overlapping shapes get
    the line between their centres.

    Args:
        corners: shape (N, 4, 2). poses: shape (N, ..., 3). pairs: shape (P, 2).
    """
    moments = poses.shape[1:-1]
    each = int(np.prod(moments))
    of_pairs = [np.repeat(corners[robots], each, axis=0) for robots in pairs.T]
    where = [poses[robots].reshape(-1, 3) for robots in pairs.T]
    lines = gaps((of_pairs[0], of_pairs[1]), (where[0], where[1]))
    length = np.hypot(*lines.T)[:, None]
    if length.size and length.min() <= _TOUCHING:
        first, second = (_centres(*each) for each in zip(of_pairs, where))
        lines = np.where(length > _TOUCHING, lines, second - first)
        length = np.hypot(*lines.T)[:, None]
    normals = np.where(length > _TOUCHING, lines / np.maximum(length, _TOUCHING), np.array([1.0, 0.0]))
    return normals.reshape((len(pairs), *moments, 2))


def _centres(corners: np.ndarray, poses: np.ndarray) -> np.ndarray:
    """Shape (C, 2)."""
    placed = _placed(corners, poses, np.stack([np.cos(poses[:, 2]), np.sin(poses[:, 2])]))
    return np.stack([part.mean(axis=0) for part in placed], axis=1)


def _placed(corners: np.ndarray, poses: np.ndarray, turn: np.ndarray) -> Two:
    """Coordinates of the corners at poses, each of shape (4, C)."""
    x, y = corners[..., 0].T, corners[..., 1].T
    return poses[:, 0] + turn[0] * x - turn[1] * y, poses[:, 1] + turn[1] * x + turn[0] * y


def _seen_from(own: np.ndarray, pose: np.ndarray, turn: np.ndarray, other: Two) -> Two:
    """Shortest vectors from rectangles to the corners of others, shape (2, C), and whether a side separates them."""
    (cos, sin), x, y = turn, other[0] - pose[:, 0], other[1] - pose[:, 1]
    outside_x, beyond_x = _outside(cos * x + sin * y, own[:, 2, 0], own[:, 0, 0])
    outside_y, beyond_y = _outside(cos * y - sin * x, own[:, 2, 1], own[:, 0, 1])
    nearest = np.argmin(outside_x**2 + outside_y**2, axis=0), np.arange(len(pose))
    ahead, left = outside_x[nearest], outside_y[nearest]
    return np.stack([cos * ahead - sin * left, sin * ahead + cos * left]), beyond_x | beyond_y


def _outside(at: np.ndarray, low: np.ndarray, high: np.ndarray) -> Two:
    """By how much corners at (4, C) lie above ``high`` or (< 0) below ``low``; whether all lie on one side, (C,)."""
    below, above = low - at, at - high
    beyond = (below.min(axis=0) > 0.0) | (above.min(axis=0) > 0.0)
    return np.maximum(above, 0.0) - np.maximum(below, 0.0), beyond
