# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Decisions and commands as ROS messages; conversions only, no node."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence

import numpy as np
from builtin_interfaces.msg import Time
from geometry_msgs.msg import Point, Pose, PoseStamped, Quaternion, Twist, TwistStamped
from nav_msgs.msg import Path
from std_msgs.msg import ColorRGBA, Header
from visualization_msgs.msg import Marker, MarkerArray

from ..core.fleet import Fleet
from ..core.graph import NeighbourGraph
from ..core.messages import Caution, Command, Decision
from ..core.settings import SiteRules
from ..record.marks import Mark, marks


def time_message(seconds: float) -> Time:
    """Seconds as builtin_interfaces/Time, rounded to the nanosecond."""
    whole = math.floor(seconds)
    nanoseconds = round((seconds - whole) * 1e9)
    carried = nanoseconds >= 1_000_000_000
    return Time(sec=whole + carried, nanosec=0 if carried else nanoseconds)


def header(frame: str, seconds: float) -> Header:
    """A header in a frame at a time in seconds."""
    return Header(frame_id=frame, stamp=time_message(seconds))


def pose_message(x: float, y: float, heading: float) -> Pose:
    """A planar pose: metres, radians anticlockwise."""
    half = 0.5 * float(heading)
    return Pose(position=Point(x=float(x), y=float(y)), orientation=Quaternion(z=math.sin(half), w=math.cos(half)))


def twist(command: Command) -> Twist:
    """linear.x = speed, angular.z = speed times curvature."""
    message = Twist()
    message.linear.x, message.angular.z = float(command.speed), float(command.turn_rate)
    return message


def twist_stamped(command: Command, seconds: float) -> TwistStamped:
    """A stamped twist in the robot's own frame, which the robot knows: frame_id stays empty."""
    return TwistStamped(header=header("", seconds), twist=twist(command))


def steering_angle(curvature: float, wheelbase: float) -> float:
    """Angle of the steered wheel, radians (kinematic bicycle model, common practice)."""
    return math.atan(wheelbase * curvature)


def path_message(frame: str, times: np.ndarray, poses: np.ndarray) -> Path:
    """One robot's plan; times of shape (M,), poses of shape (M, 3)."""
    message = Path(header=header(frame, float(times[0])))
    message.poses = [
        PoseStamped(header=header(frame, float(when)), pose=pose_message(*pose)) for when, pose in zip(times, poses)
    ]
    return message


def cautions_text(cautions: Sequence[Caution]) -> str:
    """Cautions as a JSON list of objects with code, robot, level and text."""
    return json.dumps([
        {"code": caution.code, "robot": caution.subject, "level": int(caution.level), "text": caution.text}
        for caution in cautions
    ])


def fleet_markers(frame: str, fleet: Fleet, graph: NeighbourGraph, decision: Decision,
                  rules: SiteRules) -> MarkerArray:
    """Edges with what is copied along them, footprints, the smallest clearance and the warnings, for a viewer."""
    at = header(frame, decision.time)
    coupling = decision.coupling if decision.manoeuvre else None
    drawn = marks(fleet, graph, decision.poses, decision.warnings, rules, coupling)
    # first of all what was drawn before is taken away: robots may have gone, warnings ended
    markers = [Marker(header=at, action=Marker.DELETEALL)]
    return MarkerArray(markers=markers + [_marker(at, number, mark) for number, mark in enumerate(drawn, start=1)])


def _marker(at: Header, number: int, mark: Mark) -> Marker:
    kinds = {"strip": Marker.LINE_STRIP, "pieces": Marker.LINE_LIST, "words": Marker.TEXT_VIEW_FACING}
    marker = Marker(header=at, ns=mark.group, id=number, type=kinds[mark.shape], action=Marker.ADD, text=mark.words)
    marker.pose.orientation.w = 1.0
    marker.scale.x, marker.scale.y, marker.scale.z = mark.size
    red, green, blue, alpha = mark.colour
    marker.color = ColorRGBA(r=red, g=green, b=blue, a=alpha)
    if mark.shape == "words":
        marker.pose.position = Point(x=mark.points[0][0], y=mark.points[0][1], z=mark.height)
    else:
        marker.points = [Point(x=x, y=y) for x, y in mark.points]
    return marker
