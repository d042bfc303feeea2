# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots: their limits, their footprint and how they respond to commands."""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cached_property
from typing import Any

import attrs
import numpy as np

from ..errors import SettingsError
from .parameter import parameter


@attrs.frozen
class Limits:
    """What one machine can do. Curvature is signed, left positive; limits are magnitudes."""

    max_curvature: float = parameter(
        0.5, "largest curvature, to either side", "1/m", above=0.0, maximum=50.0, live=True
    )
    max_curvature_rate: float = parameter(
        0.5, "fastest change of curvature", "1/(m s)", above=0.0, maximum=50.0, live=True
    )
    min_speed: float = parameter(
        0.0, "lowest speed while it drives; negative allows reversing", "m/s", minimum=-20.0, maximum=20.0, live=True
    )
    max_speed: float = parameter(1.5, "highest speed", "m/s", above=0.0, maximum=20.0, live=True)
    max_acceleration: float = parameter(0.5, "fastest speeding up", "m/s^2", above=0.0, maximum=20.0, live=True)
    max_braking: float = parameter(1.0, "fastest slowing down", "m/s^2", above=0.0, maximum=20.0, live=True)
    max_turn_rate: float = parameter(1.0, "fastest turning", "rad/s", above=0.0, maximum=20.0, live=True)
    max_lateral_acceleration: float = parameter(
        1.0, "largest lateral acceleration", "m/s^2", above=0.0, maximum=20.0, live=True
    )

    def __attrs_post_init__(self) -> None:
        if self.min_speed > self.max_speed:
            raise SettingsError(
                f"{self.min_speed:g} m/s is above max_speed, {self.max_speed:g} m/s",
                key="min_speed", allowed="at most max_speed",
            )


@attrs.frozen
class Footprint:
    """A rectangle; its centre lies ``offset_x`` ahead and ``offset_y`` left of the robot's pose."""

    footprint_length: float = parameter(1.2, "length of the footprint", "m", above=0.0, maximum=50.0)
    footprint_width: float = parameter(0.8, "width of the footprint", "m", above=0.0, maximum=50.0)
    footprint_offset_x: float = parameter(
        0.0, "how far the footprint's centre lies ahead of the pose", "m", minimum=-25.0, maximum=25.0
    )
    footprint_offset_y: float = parameter(
        0.0, "how far the footprint's centre lies left of the pose", "m", minimum=-25.0, maximum=25.0
    )

    def corners(self) -> np.ndarray:
        """Corners in the robot's frame, anticlockwise, shape (4, 2), metres."""
        half = np.array([self.footprint_length, self.footprint_width]) / 2
        signs = np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]])
        return np.array([self.footprint_offset_x, self.footprint_offset_y]) + signs * half


@attrs.frozen
class Response:
    """First-order answer to commands: reached' = (commanded - reached) / lag, after a delay."""

    speed_lag: float = parameter(0.0, "time constant of the speed's response", "s", minimum=0.0, maximum=5.0)
    curvature_lag: float = parameter(0.0, "time constant of the curvature's response", "s", minimum=0.0, maximum=5.0)
    command_delay: float = parameter(
        0.0, "time from sending a command to its first effect", "s", minimum=0.0, maximum=2.0
    )


@attrs.frozen
class Robot:
    """One machine; ``command_timeout`` is how long it drives on without a command before it brakes, seconds."""

    name: str
    limits: Limits = Limits()
    footprint: Footprint = Footprint()
    response: Response = Response()
    command_timeout: float = 0.5


@attrs.frozen
class Fleet:
    """The robots in the order in which every array of the planner holds them."""

    robots: tuple[Robot, ...]

    def __attrs_post_init__(self) -> None:
        names = [robot.name for robot in self.robots]
        if not names:
            raise SettingsError("no robots", key="robots.names", allowed="at least one name")
        doubled = sorted({name for name in names if names.count(name) > 1})
        if doubled:
            raise SettingsError(
                f"{', '.join(doubled)} given more than once", key="robots.names", allowed="each name once"
            )

    def __len__(self) -> int:
        return len(self.robots)

    @cached_property
    def names(self) -> tuple[str, ...]:
        return tuple(robot.name for robot in self.robots)

    def index(self, name: str) -> int:
        """Position of a robot in every array; ValueError for an unknown name."""
        return self.names.index(name)

    def limit(self, name: str) -> np.ndarray:
        """One limit for every robot, shape (N,), e.g. ``fleet.limit("max_speed")``."""
        return self._limits[name]

    def response(self, name: str) -> np.ndarray:
        """One response constant for every robot, shape (N,), seconds."""
        return self._responses[name]

    def timeouts(self) -> np.ndarray:
        """How long each robot drives on without a command, shape (N,), seconds."""
        return np.array([robot.command_timeout for robot in self.robots])

    def corners(self) -> np.ndarray:
        """Footprint corners in the robots' frames, shape (N, 4, 2), metres."""
        return self._corners

    # What the loop asks for on every tick is worked out once. Nobody may write into it.

    @cached_property
    def _limits(self) -> dict[str, np.ndarray]:
        return _columns([robot.limits for robot in self.robots])

    @cached_property
    def _responses(self) -> dict[str, np.ndarray]:
        return _columns([robot.response for robot in self.robots])

    @cached_property
    def _corners(self) -> np.ndarray:
        return _kept(np.stack([robot.footprint.corners() for robot in self.robots]))


def _columns(groups: Sequence[Any]) -> dict[str, np.ndarray]:
    """One array for each field of settings groups of one class."""
    names = [field.name for field in attrs.fields(type(groups[0]))]
    return {name: _kept(np.array([getattr(group, name) for group in groups])) for name in names}


def _kept(values: np.ndarray) -> np.ndarray:
    values.setflags(write=False)
    return values


def car_like_limits(wheelbase: float, max_angle: float, max_rate: float) -> tuple[float, float]:
    """Curvature (1/m) and the curvature rate (1/(m s)) that a steered axle can always give.

    Kinematic bicycle model (common practice): curvature = tan(angle) / wheelbase, its rate is
    sec^2(angle) * rate / wheelbase, smallest at angle 0.

    Args:
        wheelbase: metres. max_angle: largest steering angle, rad. max_rate: rad/s.
    """
    return math.tan(max_angle) / wheelbase, max_rate / wheelbase


def weakest(values: Sequence[float] | np.ndarray) -> float:
    """The smallest of the robots' values: what all of them can do."""
    return float(np.min(np.asarray(values)))
