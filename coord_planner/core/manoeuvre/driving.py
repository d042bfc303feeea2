# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How fast each robot goes along its way."""

from __future__ import annotations

from typing import Optional

import numpy as np

from ...errors import RefusedError
from ..drive import AnyDrive, Drive, InStep, Stretch, along, stretches
from ..dubins import ArcPath
from ..fleet import Fleet, Robot, weakest
from ..profile import speed_profile
from ..settings import Settings

# Part of a machine's rates that a manoeuvre is laid out with; the rest is left for corrections.
COMFORT = 0.7
STAND_LAGS = 3.0  # response lags after which a machine that is told to stand does stand
_SHORTEST_LEAD = 0.1  # metres more than braking takes
_SLOWEST_PART = 0.02  # of the asked speed, tried for who has much time for a short way


def drive_along(
    robot: Robot, settings: Settings, way: ArcPath, speed: float, *, wait: float = 0.0, first: float = 0.0,
    last: float = 0.0,
) -> Drive:
    """How one robot drives a way by itself, with a standstill at each change of gear.

    Args:
        speed: asked for, forward and, as far as the robot may, backward, m/s. wait: seconds until it sets out; who
            comes along moving waits where it is to begin to turn.
        first, last: speeds at the beginning and the end, m/s.
    """
    limits, step = robot.limits, settings.horizon.interval
    parts = stretches(way.segments, standstill(robot, settings)) or [Stretch(0.0)]
    if wait > 0.0 and first > 0.0:
        straight = lead_in(way)
        parts = [Stretch(straight, wait), Stretch(parts[0].length - straight, parts[0].stand), *parts[1:]]
        wait = 0.0
    return along(
        parts, wait=wait, first=first, forward=speed, backward=min(speed, max(-limits.min_speed, 1e-3)), last=last,
        acceleration=COMFORT * limits.max_acceleration, braking=COMFORT * limits.max_braking, step=step,
    )


def lead_in(way: ArcPath) -> float:
    """Metres until the first straight piece of a way is over; 0 when it begins with a bend and never goes straight."""
    passed = 0.0
    for curvature, length in way.segments:
        if length < 0.0:
            break
        passed += length
        if curvature == 0.0 and length > 0.0:
            return passed
    return 0.0


def room_to_wait(robot: Robot, way: ArcPath, speed_now: float) -> bool:
    """Whether a robot can come to a standstill before it is to begin to turn."""
    braking = speed_now**2 / (2.0 * COMFORT * robot.limits.max_braking)
    return lead_in(way) >= braking + _SHORTEST_LEAD


def standstill(robot: Robot, settings: Settings) -> float:
    """Seconds for which a robot is told to stand where it changes gear.

    Until it does stand, in spite of its lag; until half of a turn of its steering from side to side is made, the
    other half falls into slowing down and speeding up; and for two nodes of the plan, which then hold speed 0.
    """
    limits, response = robot.limits, robot.response
    steered = limits.max_curvature / (COMFORT * limits.max_curvature_rate)
    return max(STAND_LAGS * response.speed_lag + 1.0 / settings.commands.rate, steered, 2 * settings.horizon.interval)


def arriving_together(
    fleet: Fleet, settings: Settings, ways: tuple[ArcPath, ...], marks: Optional[np.ndarray], speed: float,
    end_speed: float, speed_now: float,
) -> tuple[AnyDrive, ...]:
    """Drives that end at one moment: in proportion where all go forward, else each slow enough for it.

    Args:
        marks: metres along each way that are passed by all together, shape (N, K).
    """
    if all(length >= 0.0 for way in ways for _, length in way.segments):
        lengths = np.array([[way.length] for way in ways])
        marks = np.array([[0.0, 1.0]]) if marks is None else marks / np.maximum(marks[:, -1:], 1e-9)
        marks = marks * lengths  # a way may have been bent round something since
        # Between two marks the profile's metres are those of the robot that drives furthest.
        common = np.concatenate([[0.0], np.cumsum(np.diff(marks, axis=1).max(axis=0))])
        profile = speed_profile(
            float(common[-1]), speed_now, speed, end_speed,
            COMFORT * weakest(fleet.limit("max_acceleration")), COMFORT * weakest(fleet.limit("max_braking")),
        )
        return tuple(InStep(profile, common, metres) for metres in marks)
    quickest = [
        drive_along(robot, settings, way, speed, first=speed_now, last=end_speed)
        for robot, way in zip(fleet.robots, ways)
    ]
    until = max(drive.duration for drive in quickest)

    def slowed(robot: Robot, way: ArcPath) -> Drive:
        slow, fast = _SLOWEST_PART * speed, speed
        for _ in range(30):  # bisection on the speed
            middle = (slow + fast) / 2
            late = drive_along(robot, settings, way, middle, first=speed_now, last=end_speed).duration > until
            slow, fast = (middle, fast) if late else (slow, middle)
        return drive_along(robot, settings, way, fast, first=speed_now, last=end_speed)

    return tuple(
        drive if drive.duration > until - 1e-6 else slowed(robot, way)
        for robot, way, drive in zip(fleet.robots, ways, quickest)
    )


def check_standing(name: str, fleet: Fleet, drives: tuple[AnyDrive, ...], end_speed: float) -> None:
    """Who has to stand or to reverse on the way must be able to."""
    for robot, drive in zip(fleet.robots, drives):
        if (drive.gears == 0).any() and robot.limits.min_speed > 0.0:
            raise RefusedError(
                f"{name}: {robot.name} would have to stand on its way and cannot drive slower than "
                f"{robot.limits.min_speed:g} m/s",
                "lower its min_speed, or ask for ways without standstills",
            )
        if (drive.gears < 0).any() and robot.limits.min_speed >= 0.0:
            raise RefusedError(
                f"{name}: {robot.name} would have to reverse, and its min_speed of {robot.limits.min_speed:g} m/s "
                "does not allow it", "give it a min_speed below 0 where the machine may reverse",
            )
        if drive.gears[-1] < 0 and end_speed > 0.0:
            raise RefusedError(
                f"{name}: {robot.name} ends in reverse, and {end_speed:g} m/s is asked at the end",
                "ask for an end speed of 0",
            )
