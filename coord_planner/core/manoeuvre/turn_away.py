# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who sees a hazard takes a heading away from it; the others copy through the graph."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ...errors import RefusedError
from .kinds import TurnAway
from .scene import Laid, Scene
from .ways import ways_to_ends

_AHEAD = 1e-6  # metres to the side that are straight ahead


def lay(_name: str, wanted: TurnAway, scene: Scene) -> Laid:
    """A heading for each robot that sees the point, all to the same side; RefusedError where none does."""
    if scene.hazard is None:
        raise RefusedError("no hazard is known to turn away from", "arm it, and it begins when one arrives in motion")
    sight = scene.settings.hazard.sight
    off = np.array(scene.hazard) - scene.poses[:, :2]
    distance = np.hypot(off[:, 0], off[:, 1])
    seeing = distance <= sight
    if not seeing.any():
        nearest = int(np.argmin(distance))
        raise RefusedError(
            f"nobody sees the hazard: {scene.fleet.names[nearest]} is nearest, {distance[nearest]:.1f} m away, and "
            f"hazard.sight is {sight:g} m", "wait until one comes within sight, or raise hazard.sight",
        )
    ends = np.full((len(scene.fleet), 3), np.nan)
    ends[seeing, 2] = scene.poses[seeing, 2] + _side(scene, off, distance) * math.radians(wanted.angle_deg)
    ways, ends = ways_to_ends(scene.fleet, scene.poses, ends, scene.neighbours, keep_winding=True)
    ways = tuple(attrs.evolve(way, segments=(*way.segments, (0.0, wanted.after))) for way in ways)
    seen_by = ", ".join(name for name, sees in zip(scene.fleet.names, seeing) if sees)
    return Laid(ends, ways, note=f"seen by {seen_by}")


def _side(scene: Scene, off: np.ndarray, distance: np.ndarray) -> float:
    """1: to the left, -1: to the right: away from where the point lies to who is nearest; left where it is ahead."""
    k = int(np.argmin(distance))
    heading = scene.poses[k, 2]
    left = float(np.cos(heading) * off[k, 1] - np.sin(heading) * off[k, 0])
    return -1.0 if left > _AHEAD else 1.0
