# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is refused before anything is planned, with the figures."""

from __future__ import annotations

import math
from typing import Optional

import numpy as np

from ...errors import RefusedError
from .. import outline
from ..caps import caps
from ..fence import Fencing, fencing, hazards
from ..fleet import Fleet, weakest
from ..settings import Settings
from ..watch import margin


def check_speed(speed: float, end_speed: float, fleet: Fleet, settings: Settings) -> None:
    """No robot is asked for more speed than it and the site allow."""
    cap = settings.site_rules.max_speed
    for robot in fleet.robots:
        top = min(robot.limits.max_speed, cap)
        if speed > top + 1e-9:
            raise RefusedError(
                f"{speed:g} m/s is asked and {robot.name} may drive {top:g} m/s",
                f"ask for at most {min(weakest(fleet.limit('max_speed')), cap):g} m/s",
            )
    if end_speed > speed + 1e-9:
        raise RefusedError(
            f"{end_speed:g} m/s is asked at the end and only {speed:g} m/s on the way there",
            f"ask for an end speed of at most {speed:g} m/s",
        )


def check_start(fleet: Fleet, settings: Settings, poses: np.ndarray) -> None:
    """The robots stand with the site's clearance between them."""
    check_apart(fleet, settings, poses, np.arange(len(fleet)), "stand", "move them apart by hand before it begins")
    check_outside(fleet, settings, poses, "stands", "drive it away from there by hand before it begins")


def check_ends(fleet: Fleet, settings: Settings, ends: np.ndarray, speed: float) -> None:
    """Ends keep the site's clearance and the plan's margin: whatever is nearer, no plan would end on."""
    placed = np.flatnonzero(~np.isnan(ends[:, 0]))
    kept = 2 * float(margin(fleet, settings, speed).max())
    check_apart(fleet, settings, ends, placed, "would end", "move the ends apart", kept)
    check_outside(fleet, settings, ends, "would end", "move its end", kept / 2)


def check_outside(
    fleet: Fleet, settings: Settings, poses: np.ndarray, verb: str, remedy: str, kept: float = 0.0
) -> None:
    """Every pose that is there, shape (N, 3), keeps away from the site's keep-outs."""
    there = np.flatnonzero(~np.isnan(poses).any(axis=1))
    some = Fleet(tuple(fleet.robots[k] for k in there)) if len(there) else fleet
    spare, robot, name = fencing(settings).least(some, poses[there, None]) if len(there) else (np.inf, -1, "")
    if spare < kept - 1e-6:
        beyond = f", the planner's margin of {kept:.2f} m included" if kept else ""
        raise RefusedError(f"{some.names[robot]} {verb} {kept - spare:.2f} m too near to {name}{beyond}", remedy)


def check_hazard(
    fleet: Fleet, settings: Settings, poses: np.ndarray, hazard: Optional[tuple[float, float]]
) -> None:
    """Nobody is too near to a point that is known as a hazard."""
    spare, robot, _ = Fencing(hazards(settings, hazard)).least(fleet, poses[:, None])
    if hazard is not None and spare < -1e-6:
        raise RefusedError(
            f"{fleet.names[robot]} is {-spare:.2f} m too near to the hazard at ({hazard[0]:.1f}, {hazard[1]:.1f})",
            "see to it and drive the robot away by hand, or wait until the hazard has expired",
        )


def check_end_speed(fleet: Fleet, settings: Settings, ends: np.ndarray, end_speed: float) -> None:
    """Nobody is asked to end faster than an area allows in which the end lies."""
    placed = np.where(np.isnan(ends).any(axis=1)[:, None], np.nan, ends)
    capped = caps(fleet, settings, placed[:, None]).min(axis=1)
    slowest = int(np.argmin(capped))
    if end_speed > capped[slowest]:
        raise RefusedError(
            f"{end_speed:g} m/s is asked at the end, and where {fleet.names[slowest]} ends the site allows "
            f"{capped[slowest]:g} m/s", f"ask for an end speed of at most {capped[slowest]:g} m/s",
        )


def check_apart(
    fleet: Fleet, settings: Settings, poses: np.ndarray, which: np.ndarray, verb: str, remedy: str, kept: float = 0.0
) -> None:
    polygons = outline.outlines(fleet.corners()[which], poses[which])
    gap, (k, j) = outline.closest(polygons, outline.all_pairs(len(which)))
    allowed = settings.site_rules.min_clearance
    if gap < allowed + kept - 1e-6:
        first, second = fleet.names[which[k]], fleet.names[which[j]]
        beyond = f" and the planner's margin of {kept:.2f} m" if kept else ""
        raise RefusedError(
            f"{first} and {second} {verb} {gap:.2f} m apart, {allowed + kept - gap:.2f} m short of the site's "
            f"smallest clearance of {allowed:g} m{beyond}",
            remedy,
        )


def check_radius(radius: float, fleet: Fleet) -> None:
    """Everyone can turn so tightly."""
    for robot in fleet.robots:
        smallest = 1.0 / robot.limits.max_curvature
        if radius < smallest - 1e-9:
            raise RefusedError(
                f"a radius of {radius:g} m is {smallest - radius:.2f} m tighter than {robot.name} can turn (smallest "
                f"radius {smallest:.2f} m)",
                f"ask for a radius of at least {1.0 / weakest(fleet.limit('max_curvature')):.2f} m",
            )


def check_bend(speed: float, radius: float, fleet: Fleet, settings: Settings) -> None:
    """Turn rate and lateral acceleration at the asked speed and radius."""
    for robot in fleet.robots:
        lateral = min(robot.limits.max_lateral_acceleration, settings.site_rules.max_lateral_acceleration)
        fastest = min(robot.limits.max_turn_rate * radius, math.sqrt(lateral * radius))
        if speed > fastest + 1e-9:
            raise RefusedError(
                f"at {speed:g} m/s a radius of {radius:g} m asks {robot.name} for {speed / radius:.2f} rad/s and "
                f"{speed**2 / radius:.2f} m/s^2 sideways; its limits allow {robot.limits.max_turn_rate:g} rad/s and "
                f"{lateral:g} m/s^2",
                f"ask for at most {fastest:.2f} m/s or for a wider radius",
            )
