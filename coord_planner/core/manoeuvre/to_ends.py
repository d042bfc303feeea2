"""Named robots get an end; the others copy."""

from __future__ import annotations

import numpy as np

from ...errors import RefusedError
from .. import reeds_shepp
from ..dubins import shortest
from ..fleet import Fleet
from ..profile import speed_profile
from .kinds import ToEnds
from .scene import Laid, Scene
from .ways import as_start, joined, straightened, ways_to_ends


def lay(name: str, wanted: ToEnds, scene: Scene) -> Laid:
    """The shortest wide way to each end; RefusedError where the given time is too short for one of them."""
    named = _named_ends(wanted, scene.fleet)
    after, first = straightened(scene)
    then, ends = ways_to_ends(scene.fleet, after.poses, named, scene.neighbours, reverse=wanted.reverse)
    ways = tuple(map(joined, first, then))
    if wanted.duration > 0.0:
        _check_duration(name, wanted, scene, named)
    return Laid(ends, ways, duration=wanted.duration)


def _named_ends(manoeuvre: ToEnds, fleet: Fleet) -> np.ndarray:
    ends = np.full((len(fleet), 3), np.nan)
    for name, end in manoeuvre.ends().items():
        if name not in fleet.names:
            raise RefusedError(f"{name!r} has an end but is not in the fleet", "name one of " + ", ".join(fleet.names))
        position = (end.x, end.y) if end.x is not None and end.y is not None else (np.nan, np.nan)
        ends[fleet.index(name)] = [*position, end.heading]
    if np.isnan(ends).all():
        raise RefusedError("no robot has an end", "give at least one robot an end pose or an end heading")
    return ends


def _check_duration(name: str, manoeuvre: ToEnds, scene: Scene, ends: np.ndarray) -> None:
    """No way is shorter than the Dubins path of the smallest radius, and none is driven faster than allowed.

    For who may reverse it is the path of Reeds & Shepp.
    """
    fleet, poses = scene.fleet, scene.poses
    for k in np.flatnonzero(~np.isnan(ends[:, 0])):
        limits = fleet.robots[k].limits
        back = manoeuvre.reverse and limits.min_speed < 0.0
        way = (reeds_shepp.shortest if back else shortest)(
            as_start(poses[k]), as_start(ends[k]), 1.0 / limits.max_curvature
        ).length
        top = min(max(limits.max_speed, -limits.min_speed), scene.settings.site_rules.max_speed)
        least = speed_profile(
            way, scene.speed_now, top, manoeuvre.end_speed, limits.max_acceleration, limits.max_braking
        ).duration
        if manoeuvre.duration < least - 1e-9:
            raise RefusedError(
                f"{name}: {manoeuvre.duration:g} s are given, and even the shortest way of {fleet.names[k]} to its "
                f"end, {way:.2f} m at a radius of {1.0 / limits.max_curvature:.2f} m, takes {least:.1f} s at up to "
                f"{top:g} m/s",
                f"give at least {least:.1f} s and something for corrections, or 0 to have it worked out",
            )
