"""Everyone turns by the same angle at the same radius."""

from __future__ import annotations

import math

import numpy as np

from ...errors import RefusedError
from ..fleet import weakest
from .checks import check_bend
from .driving import COMFORT
from .kinds import EqualRadius
from .scene import Laid, Scene
from .ways import eased_turn, joined, straightened

_WIDER = 1.12  # a turn of equal radius is laid out this much wider than its tightest, to leave room for corrections


def lay(_name: str, wanted: EqualRadius, scene: Scene) -> Laid:
    """The same eased turn for each robot; RefusedError where one of them cannot turn so tightly or so fast.

    A robot that is in a bend comes out of it first; the angle counts from where it began.
    """
    fleet = scene.fleet
    for robot in fleet.robots:
        smallest = 1.0 / robot.limits.max_curvature
        if wanted.radius < smallest - 1e-9:
            raise RefusedError(
                f"a radius of {wanted.radius:g} m is {smallest - wanted.radius:.2f} m tighter than "
                f"{robot.name} can turn (smallest radius {smallest:.2f} m)",
                f"ask for a radius of at least {1.0 / weakest(fleet.limit('max_curvature')):.2f} m",
            )
    check_bend(wanted.speed, wanted.radius, fleet, scene.settings)
    rate = COMFORT * weakest(fleet.limit("max_curvature_rate")) / wanted.speed
    angle = math.radians(wanted.angle_deg)
    after, first = straightened(scene)
    ways = tuple(
        joined(out, eased_turn(angle - out.turning, _WIDER * wanted.radius, rate, pose))
        for out, pose in zip(first, after.poses)
    )
    return Laid(np.stack([way.end for way in ways]), ways, max_curvature=1.0 / wanted.radius)
