# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How one robot is reached, and which point of it its poses mean."""

from __future__ import annotations

import math

import attrs

from ..core.parameter import parameter

Pose = tuple[float, float, float]  # x, y in metres, heading in radians


@attrs.frozen
class Connection:
    """Topics, drive and the meaning of the poses of one robot.

    Two points of a machine must be kept apart:

    * the *reported point*: what its localisation reports, and what every pose in a parameter file means
      (starts, end poses, ``footprint_offset_x`` and ``footprint_offset_y``);
    * the *turning point*: the point that moves without side-slip, and so the only one whose path has the
      curvature that is commanded. Midway between the driven wheels of a differential drive, the middle of the
      rear axle of a car-like machine. All planning is done with it.

    ``reference_point`` says where the reported point lies. ``rear_axle``: it is the turning point. ``centre``: the
    machine's centre; for a car-like machine midway between its axles, half a wheelbase ahead of the turning
    point; for a differential drive the turning point itself. A differential drive whose localisation reports
    another point than midway between its wheels has to be corrected in its localisation.

    :meth:`planned_pose` takes a pose from the reported point to the turning point, :meth:`reported_pose` back.
    """

    pose_source: str = parameter(
        "pose", "kind of message that brings the robot's pose",
        choices=("pose", "pose_with_covariance", "odometry", "tf"),
    )
    pose_topic: str = parameter(
        "{name}/pose",
        "topic of the poses; with pose_source tf the robot's frame, {name}/base_link when left out; "
        "{name} stands for the robot's name",
    )
    command_type: str = parameter(
        "twist_stamped", "kind of message that the robot obeys", choices=("twist_stamped", "twist", "steering")
    )
    command_topic: str = parameter(
        "{name}/cmd_vel", "topic of the commands; {name} stands for the robot's name"
    )
    command_timeout: float = parameter(
        0.5, "the robot stops by itself when no command has come for this long", "s", above=0.0, maximum=5.0
    )
    ready_required: bool = parameter(
        False, "true: the robot is driven only while it says on its ready topic that it may be"
    )
    ready_timeout: float = parameter(
        1.0, "with ready_required: a robot that has not said for so long that it is ready counts as silent", "s",
        above=0.0, maximum=10.0,
    )
    drive: str = parameter("differential", "how the robot turns", choices=("differential", "car_like"))
    reference_point: str = parameter(
        "centre",
        "point that the robot's poses mean: rear_axle, or centre (differential: midway between the driven "
        "wheels; car_like: midway between the axles)",
        choices=("centre", "rear_axle"),
    )
    wheelbase: float = parameter(
        0.0, "distance between the axles of a car_like robot", "m", minimum=0.0, maximum=30.0
    )
    max_steering_angle_deg: float = parameter(
        0.0, "largest steering angle of a car_like robot, to either side", "deg", minimum=0.0, maximum=80.0
    )
    max_steering_rate_deg: float = parameter(
        0.0, "fastest steering of a car_like robot", "deg/s", minimum=0.0, maximum=720.0
    )

    @property
    def max_steering_angle(self) -> float:
        """Radians."""
        return math.radians(self.max_steering_angle_deg)

    @property
    def max_steering_rate(self) -> float:
        """Radians per second."""
        return math.radians(self.max_steering_rate_deg)

    @property
    def pose_offset_x(self) -> float:
        """How far the reported point lies ahead of the turning point, metres."""
        ahead = self.drive == "car_like" and self.reference_point == "centre"
        return self.wheelbase / 2 if ahead else 0.0

    def planned_pose(self, x: float, y: float, heading: float) -> Pose:
        """A pose of the reported point as a pose of the turning point; metres, radians."""
        d = self.pose_offset_x
        return x - d * math.cos(heading), y - d * math.sin(heading), heading

    def reported_pose(self, x: float, y: float, heading: float) -> Pose:
        """A pose of the turning point as a pose of the reported point; metres, radians."""
        d = self.pose_offset_x
        return x + d * math.cos(heading), y + d * math.sin(heading), heading
