# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Values that are right by themselves and cannot be kept together."""

from __future__ import annotations

from collections.abc import Mapping

from ..core.manoeuvre import Manoeuvre
from ..core.settings import Settings
from .complaints import Complaints
from .groups import Simulation
from .robots import RobotValues


def check_together(
    robots: list[RobotValues], settings: Settings, manoeuvres: Mapping[str, Manoeuvre],
    simulation: Simulation, complaints: Complaints,
) -> None:
    """Complain about every contradiction between groups."""
    _check_times(settings, complaints)
    for robot in robots:
        _check_timeout(robot, settings, complaints)
        _check_slowest(robot, settings, manoeuvres, complaints)
    if not any(robot.values["enabled"] for robot in robots):
        complaints.add("no robot is enabled", robots[0].key("enabled"), "true for at least one robot")
    for field in ("speed_lag", "curvature_lag", "command_delay"):
        value = getattr(simulation, field)
        if -1.0 < value < 0.0:
            complaints.add(f"{value:g} s is no time", f"simulation.{field}", "-1 (each robot's own), 0 or more")


def _check_times(settings: Settings, complaints: Complaints) -> None:
    horizon = settings.horizon
    tick = 1.0 / horizon.rate
    if horizon.budget > tick:
        complaints.add(f"{horizon.budget:g} s is longer than a tick, {tick:g} s at horizon.rate {horizon.rate:g} 1/s",
                       "horizon.budget", f"at most {tick:g}, or a lower horizon.rate")
    if horizon.lead > horizon.duration:
        complaints.add(f"{horizon.lead:g} s is beyond the horizon, {horizon.duration:g} s",
                       "horizon.lead", "at most horizon.intervals times horizon.interval")


def _check_timeout(robot: RobotValues, settings: Settings, complaints: Complaints) -> None:
    timeout, period = robot.values["command_timeout"], 1.0 / settings.commands.rate
    if timeout <= period:
        complaints.add(f"{timeout:g} s is over before the next command comes, every {period:g} s",
                       robot.key("command_timeout"),
                       f"above {period:g}, better three times that; or a higher commands.rate")


def _check_slowest(
    robot: RobotValues, settings: Settings, manoeuvres: Mapping[str, Manoeuvre], complaints: Complaints
) -> None:
    """A robot that cannot drive as slowly as the group's progress may become could not keep with it."""
    lowest = robot.values["min_speed"]
    if lowest <= 0.0:
        return
    key = robot.key("min_speed")
    cap = settings.site_rules.max_speed
    if lowest > cap:
        complaints.add(f"{lowest:g} m/s is above site_rules.max_speed, {cap:g} m/s", key, f"at most {cap:g}")
    for area in settings.site_rules.speed_caps:
        if lowest > area.max_speed:
            capped = f"site_rules.speed_caps.{area.area.name}.max_speed"
            complaints.add(f"{lowest:g} m/s is above {capped}, {area.max_speed:g} m/s", key,
                           f"at most {area.max_speed:g}")
    for name, manoeuvre in manoeuvres.items():
        slowest = manoeuvre.speed * settings.progress.slowest
        if lowest > slowest:
            complaints.add(
                f"{lowest:g} m/s is above {slowest:.3g} m/s, to which manoeuvres.{name}.speed {manoeuvre.speed:g} m/s "
                f"falls at progress.slowest {settings.progress.slowest:g}",
                key, f"at most {slowest:.3g}, or a higher progress.slowest",
            )
