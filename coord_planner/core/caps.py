# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Areas with a speed cap of their own: which robot may drive how fast where it is."""

from __future__ import annotations

import numpy as np
import shapely

from . import outline
from .fleet import Fleet
from .settings import Settings
from .watch import margin

_LAGS = 3.0  # response lags after which a machine has all but the speed that it was told


def caps(fleet: Fleet, settings: Settings, poses: np.ndarray) -> np.ndarray:
    """Speed cap of each robot at poses, shape (N, K), m/s, inf outside of all capped areas.

    Args:
        poses: shape (N, K, 3).
    """
    return _caps(fleet, settings, poses, np.full(len(fleet), settings.clearance.pose_uncertainty))


def planned_caps(fleet: Fleet, settings: Settings, poses: np.ndarray, speed: float) -> np.ndarray:
    """Speed caps to plan with at nodes 1 .. M, shape (N, M), m/s: in force a node early, and with the plan's margin.

    A machine that is told to slow down is slower some lags later; it has to be told so much earlier.

    Args:
        poses: of the last plan or of a guess at nodes 0 .. M, shape (N, M + 1, 3). speed: asked, m/s.
    """
    if not settings.site_rules.speed_caps:
        return np.full((len(fleet), poses.shape[1] - 1), np.inf)
    kept = margin(fleet, settings, speed) + _LAGS * fleet.response("speed_lag") * speed
    found = _caps(fleet, settings, poses, kept)
    late = np.concatenate([found[:, 1:], found[:, -1:]], axis=1)
    return np.minimum(np.minimum(found, late)[:, 1:], found[:, :-1])


def _caps(fleet: Fleet, settings: Settings, poses: np.ndarray, kept: np.ndarray) -> np.ndarray:
    found = np.full(poses.shape[:2], np.inf)
    if not settings.site_rules.speed_caps:
        return found
    known = np.isfinite(poses).all(axis=2)
    shapes = outline.outlines(fleet.corners(), np.where(known[..., None], poses, 0.0))
    for cap in settings.site_rules.speed_caps:
        inside = known & (shapely.distance(shapes, cap.area.polygon) <= kept[:, None])
        found = np.where(inside, np.minimum(found, cap.max_speed), found)
    return found
