# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Named robots get an end; the others copy."""

from __future__ import annotations

import attrs
import numpy as np

from ...errors import RefusedError
from .. import reeds_shepp
from ..dubins import ArcPath, shortest
from ..fleet import Fleet
from ..profile import speed_profile
from .driving import drive_along
from .kinds import ToEnds
from .scene import Laid, Scene
from .ways import as_start, joined, straightened, ways_to_ends

# Where ways as tight as a machine turns cannot be kept, wider ones with more changes of gear may be.
_LEAST = (1.0, 1.5, 2.0)


def lay(name: str, wanted: ToEnds, scene: Scene) -> Laid:
    """The shortest wide way to each end; RefusedError where the given time is too short for one of them."""
    named = _named_ends(wanted, scene.fleet)
    if wanted.duration > 0.0:
        _check_duration(name, wanted, scene, named)
    laid: list[Laid] = []
    for least in _LEAST if wanted.reverse else _LEAST[:1]:
        tried = _laid(wanted, scene, named, least)
        if all(tried.ways != other.ways for other in laid):
            laid.append(tried)
    return attrs.evolve(laid[0], otherwise=tuple(laid[1:]))


def _laid(wanted: ToEnds, scene: Scene, named: np.ndarray, least: float) -> Laid:
    """Where everyone goes, with the radius of ways that may be driven backward ``least`` times the smallest or more."""
    def seconds(k: int, way: ArcPath) -> float:
        return drive_along(scene.fleet.robots[k], scene.settings, way, wanted.speed).duration

    after, first = straightened(scene)
    then, ends = ways_to_ends(
        scene.fleet, after.poses, named, scene.neighbours, seconds=seconds if wanted.reverse else None, least=least
    )
    return Laid(ends, tuple(map(joined, first, then)), duration=wanted.duration)


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
