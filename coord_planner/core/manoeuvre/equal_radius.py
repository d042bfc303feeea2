# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Everyone turns by the same angle at the same radius."""

from __future__ import annotations

import math

import numpy as np

from ..fleet import weakest
from .checks import check_bend, check_radius
from .driving import COMFORT
from .kinds import EqualRadius
from .scene import Laid, Scene
from .ways import eased_turn, joined, straightened

WIDER = 1.12  # a turn of equal radius is laid out this much wider than its tightest, to leave room for corrections


def lay(_name: str, wanted: EqualRadius, scene: Scene) -> Laid:
    """The same eased turn for each robot; RefusedError where one of them cannot turn so tightly or so fast.

    A robot that is in a bend comes out of it first; the angle counts from where it began.
    """
    fleet = scene.fleet
    check_radius(wanted.radius, fleet)
    check_bend(wanted.speed, wanted.radius, fleet, scene.settings)
    rate = COMFORT * weakest(fleet.limit("max_curvature_rate")) / wanted.speed
    angle = math.radians(wanted.angle_deg)
    after, first = straightened(scene)
    ways = tuple(
        joined(out, eased_turn(angle - out.turning, WIDER * wanted.radius, rate, pose))
        for out, pose in zip(first, after.poses)
    )
    return Laid(np.stack([way.end for way in ways]), ways, max_curvature=1.0 / wanted.radius)
