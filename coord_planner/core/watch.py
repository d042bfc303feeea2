# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Which pairs the optimisation watches, and the distance that it keeps between them."""

from __future__ import annotations

import numpy as np

from . import outline
from .fleet import Fleet
from .plan import near_pairs
from .problem import Watch
from .rectangles import separating_normals
from .settings import Settings


def choose_pairs(fleet: Fleet, settings: Settings, poses: np.ndarray) -> np.ndarray:
    """Pairs that come within reach along poses of shape (N, K, 3); shape (P, 2)."""
    pairs = outline.all_pairs(len(fleet))
    if not len(pairs):
        return pairs
    return near_pairs(fleet, poses, settings.site_rules.min_clearance + settings.clearance.reach)


def margin(fleet: Fleet, settings: Settings, speed: float) -> np.ndarray:
    """What is kept beyond the smallest clearance for the sake of each robot, shape (N,), metres."""
    clearance = settings.clearance
    return np.full(len(fleet), clearance.pose_uncertainty + clearance.response_uncertainty * speed)


def watch(fleet: Fleet, settings: Settings, pairs: np.ndarray, poses: np.ndarray, speed: float) -> Watch:
    """Separating lines and gaps to keep, from the poses of the last plan or of a guess.

    Args:
        poses: at nodes 0 .. M, shape (N, M + 1, 3). speed: asked speed, m/s.

    Between two nodes a pair that moves relatively by d comes nearer than at the nodes by at most
    d^2 / (8 gap) (the sagitta of the chord of a circle about the other robot).
    """
    nodes = poses.shape[1] - 1
    if not len(pairs):
        return Watch(pairs, np.zeros((0, nodes, 2)), np.zeros((0, nodes)))
    normals = separating_normals(fleet.corners(), poses[:, 1:], pairs)
    smallest = settings.site_rules.min_clearance
    kept = smallest + margin(fleet, settings, speed)[pairs].sum(axis=1)[:, None]
    apart = poses[pairs[:, 1], :, :2] - poses[pairs[:, 0], :, :2]
    moved = np.linalg.norm(np.diff(apart, axis=1), axis=2)
    return Watch(pairs, normals, kept + moved**2 / (8 * np.maximum(kept, 0.1)))
