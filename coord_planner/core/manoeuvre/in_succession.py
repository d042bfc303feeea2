# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A file turns one after the other at the same place."""

from __future__ import annotations

import math

import attrs
import numpy as np

from .. import se2
from ..dubins import ArcPath
from ..fleet import weakest
from .checks import check_bend, check_radius
from .equal_radius import WIDER
from .kinds import InSuccession
from .line import file_of
from .scene import Laid, Scene
from .task import COMFORT
from .ways import as_start, eased_turn


def lay(name: str, wanted: InSuccession, scene: Scene) -> Laid:
    """For each robot the same eased turn, as much later on its way as it is behind the first."""
    fleet, file = scene.fleet, file_of(name, scene)
    check_radius(wanted.radius, fleet)
    check_bend(wanted.speed, wanted.radius, fleet, scene.settings)
    angle = math.radians(wanted.angle_deg)
    rate = COMFORT * weakest(fleet.limit("max_curvature_rate")) / wanted.speed
    turn = eased_turn(angle, WIDER * wanted.radius, rate, np.zeros(3)).segments
    ways, ends = [], []
    for pose, place, behind in zip(scene.poses, file.places(), file.behind):
        last = float(file.behind.max() - behind) + wanted.after
        heading = float(pose[2] + se2.wrap(file.heading - pose[2]))
        segments = ((0.0, float(wanted.before + behind)), *turn, (0.0, last))
        way = ArcPath((float(place[0]), float(place[1]), heading), "in succession", segments)
        ends.append(way.end)
        ways.append(attrs.evolve(way, start=as_start(pose)))
    return Laid(np.array(ends), tuple(ways), max_curvature=1.0 / wanted.radius, behind=file.behind)
