# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The values in force for one robot, and what they must not contradict."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from typing import Any

import attrs

from ..core.fleet import Footprint, Limits, Response, Robot, car_like_limits
from ..core.parameter import describe
from .complaints import Complaints
from .connection import Connection
from .groups import Place
from .layout import ROBOT_GROUPS, Slot

Given = Mapping[str, Any]
_TOPIC = re.compile(r"[~/]?[A-Za-z_][A-Za-z0-9_]*(/[A-Za-z_][A-Za-z0-9_]*)*\Z")
_STEERING = ("wheelbase", "max_steering_angle_deg", "max_steering_rate_deg")
_TOLERANCE = 1e-9  # relative; a limit typed in with all its digits is not above what the steering gives


@attrs.frozen
class RobotValues:
    """Every per-robot value of one robot: its own, else that of ``robot_defaults``, else the default.

    Attributes:
        name: of the robot. values: by field name.
    """

    name: str
    values: Mapping[str, Any]
    _given: Given

    def key(self, field: str) -> str:
        """The key that a value came from (the robot's own key when nothing was given)."""
        shared = f"robot_defaults.{field}"
        own = f"robots.{self.name}.{field}"
        return shared if shared in self._given and own not in self._given else own

    def was_given(self, field: str) -> bool:
        return self.key(field) in self._given

    def group(self, group: type) -> Any:
        """A settings group filled with the robot's values."""
        return group(**{field: self.values[field] for field in describe(group)})


def resolve(name: str, given: Given, slots: Mapping[str, Slot]) -> RobotValues:
    """Values in force for one robot; ``given`` holds checked values by key."""
    values = {}
    for group in ROBOT_GROUPS:
        for field in describe(group):
            own, shared = f"robots.{name}.{field}", f"robot_defaults.{field}"
            values[field] = given.get(own, given.get(shared, slots[own].default))
    robot = RobotValues(name, values, given)
    if values["pose_source"] == "tf" and not robot.was_given("pose_topic"):
        values["pose_topic"] = "{name}/base_link"
    for field in ("pose_topic", "command_topic"):
        values[field] = values[field].replace("{name}", name)
    if _steers(values):
        for field, limit in zip(("max_curvature", "max_curvature_rate"), _steering_limits(values)):
            if not robot.was_given(field):
                values[field] = limit
    return robot


def _steers(values: Mapping[str, Any]) -> bool:
    return values["drive"] == "car_like" and all(values[field] > 0.0 for field in _STEERING)


def _steering_limits(values: Mapping[str, Any]) -> tuple[float, float]:
    return car_like_limits(values["wheelbase"], math.radians(values["max_steering_angle_deg"]),
                           math.radians(values["max_steering_rate_deg"]))


def build_robot(robot: RobotValues, complaints: Complaints) -> tuple[Robot, Connection, Place] | None:
    """The typed groups of one robot, or None when something was complained about.

    The footprint of a Robot lies against its turning point; in the file it lies against its poses.
    """
    before = complaints.count
    _check_drive(robot, complaints)
    _check_topics(robot, complaints)
    for pair in (("start_x", "start_y"), ("start_y", "start_x")):
        if robot.values[pair[0]] is not None and robot.values[pair[1]] is None:
            complaints.add(f"{robot.name} has a {pair[0]} but no {pair[1]}", f"robots.{robot.name}.{pair[1]}",
                           "both of them or neither")
    limits = None
    with complaints.about(robot.key("min_speed")):
        limits = robot.group(Limits)
    if complaints.count > before or limits is None:
        return None
    connection: Connection = robot.group(Connection)
    footprint: Footprint = robot.group(Footprint)
    shifted = attrs.evolve(footprint, footprint_offset_x=footprint.footprint_offset_x + connection.pose_offset_x)
    machine = Robot(robot.name, limits, shifted, robot.group(Response), connection.command_timeout)
    return machine, connection, robot.group(Place)


def _check_drive(robot: RobotValues, complaints: Complaints) -> None:
    if robot.values["drive"] == "car_like":
        missing = [field for field in _STEERING if not robot.values[field] > 0.0]
        for field in missing:
            complaints.add(f"a car_like robot needs its {field}", robot.key(field), "a number above 0")
        if not missing:
            _check_steering(robot, complaints)
        return
    for field in _STEERING:
        if robot.values[field] > 0.0 and robot.key(field).startswith("robots."):  # robot_defaults may serve others
            complaints.add(f"{robot.name} is differential, and only a car_like robot has it", robot.key(field),
                           f"drive: car_like, or no {field}")
    if robot.values["command_type"] == "steering":
        complaints.add(f"'steering' needs a car_like robot, but {robot.name} is differential",
                       robot.key("command_type"), "twist_stamped or twist for a differential drive")


def _check_steering(robot: RobotValues, complaints: Complaints) -> None:
    units = ("1/m", "1/(m s)")
    for field, unit, limit in zip(("max_curvature", "max_curvature_rate"), units, _steering_limits(robot.values)):
        value = robot.values[field]
        if value > limit * (1.0 + _TOLERANCE):
            complaints.add(f"{value:g} {unit} is more than the steering gives, {limit:.4g} {unit}",
                           robot.key(field), f"at most {math.floor(limit * 1e4) / 1e4:g}, or left out")


def _check_topics(robot: RobotValues, complaints: Complaints) -> None:
    fields = ["command_topic"] if robot.values["pose_source"] == "tf" else ["command_topic", "pose_topic"]
    for field in fields:
        topic = robot.values[field]
        if not _TOPIC.match(topic) or "__" in topic:
            complaints.add(f"{topic!r} is no topic name", robot.key(field),
                           "letters, digits and single underscores, parts joined by /, none beginning with a digit")
    if robot.values["pose_source"] == "tf" and not re.match(r"\S+\Z", robot.values["pose_topic"]):
        complaints.add(f"{robot.values['pose_topic']!r} is no frame", robot.key("pose_topic"), "a frame without spaces")


def check_shared_topics(robots: list[RobotValues], complaints: Complaints) -> None:
    """No two robots may obey one topic or be seen on one."""
    for field in ("command_topic", "pose_topic"):
        users: dict[str, RobotValues] = {}
        for robot in robots:
            first = users.setdefault(robot.values[field], robot)
            if first is not robot:
                complaints.add(f"{robot.values[field]!r} is used by {first.name} and by {robot.name}",
                               robot.key(field), "a topic of its own for each robot, e.g. with {name} in it")
