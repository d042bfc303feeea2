# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""ROS messages of the kinds that a bag of a run holds, made and packed without ROS (by ``rosbags``).

Fields as in the interface packages of ROS 2 Jazzy. Seconds and metres in, messages out.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cache
from typing import Any

import numpy as np
from rosbags.typesys import Stores, get_typestore
from rosbags.typesys.store import Typestore

from .marks import Mark

NANOSECONDS = 1_000_000_000


@cache
def store() -> Typestore:
    """All message types of ROS 2 Jazzy."""
    return get_typestore(Stores.ROS2_JAZZY)


def packed(message: Any) -> memoryview:
    """A message as it stands in a bag (CDR)."""
    return store().serialize_cdr(message, message.__msgtype__)


def _make(kind: str, **fields: Any) -> Any:
    return store().types[kind](**fields)


def time(nanoseconds: int) -> Any:
    return _make("builtin_interfaces/msg/Time", sec=nanoseconds // NANOSECONDS, nanosec=nanoseconds % NANOSECONDS)


def header(frame: str, nanoseconds: int) -> Any:
    return _make("std_msgs/msg/Header", stamp=time(nanoseconds), frame_id=frame)


def clock(nanoseconds: int) -> Any:
    return _make("rosgraph_msgs/msg/Clock", clock=time(nanoseconds))


def text(words: str) -> Any:
    return _make("std_msgs/msg/String", data=words)


def number(value: float) -> Any:
    return _make("std_msgs/msg/Float64", data=float(value))


def _vector(x: float, y: float, z: float, kind: str = "Vector3") -> Any:
    return _make(f"geometry_msgs/msg/{kind}", x=float(x), y=float(y), z=float(z))


def pose(x: float, y: float, heading: float) -> Any:
    half = 0.5 * float(heading)
    turned = _make("geometry_msgs/msg/Quaternion", x=0.0, y=0.0, z=math.sin(half), w=math.cos(half))
    return _make("geometry_msgs/msg/Pose", position=_vector(x, y, 0.0, "Point"), orientation=turned)


def twist(speed: float, curvature: float) -> Any:
    return _make("geometry_msgs/msg/Twist", linear=_vector(speed, 0.0, 0.0),
                 angular=_vector(0.0, 0.0, speed * curvature))


def twist_stamped(at: Any, speed: float, curvature: float) -> Any:
    return _make("geometry_msgs/msg/TwistStamped", header=at, twist=twist(speed, curvature))


def odometry(at: Any, child: str, where: Sequence[float], speed: float, curvature: float) -> Any:
    unknown = np.zeros(36)
    return _make(
        "nav_msgs/msg/Odometry", header=at, child_frame_id=child,
        pose=_make("geometry_msgs/msg/PoseWithCovariance", pose=pose(*where), covariance=unknown),
        twist=_make("geometry_msgs/msg/TwistWithCovariance", twist=twist(speed, curvature), covariance=unknown),
    )


def path(frame: str, due: Sequence[int], poses: np.ndarray) -> Any:
    """A plan: poses of shape (K, 3) and the nanoseconds at which they are due."""
    stamped = [_make("geometry_msgs/msg/PoseStamped", header=header(frame, when), pose=pose(*where))
               for when, where in zip(due, poses)]
    return _make("nav_msgs/msg/Path", header=header(frame, due[0]), poses=stamped)


def status(name: str, subject: str, level: int, words: str, values: dict[str, str]) -> Any:
    pairs = [_make("diagnostic_msgs/msg/KeyValue", key=key, value=value) for key, value in values.items()]
    return _make("diagnostic_msgs/msg/DiagnosticStatus", level=level, name=name, message=words, hardware_id=subject,
                 values=pairs)


def diagnostics(at: Any, statuses: list[Any]) -> Any:
    return _make("diagnostic_msgs/msg/DiagnosticArray", header=at, status=statuses)


def markers(at: Any, marks: Sequence[Mark]) -> Any:
    """Marks for a viewer; the first takes away what was drawn before."""
    kind = _marker_type()
    gone = _marker(at, "", 0, action=kind.DELETEALL)
    shown = [_marker(at, mark.group, number, action=kind.ADD, mark=mark) for number, mark in enumerate(marks, start=1)]
    return _make("visualization_msgs/msg/MarkerArray", markers=[gone, *shown])


def _marker_type() -> Any:
    return store().types["visualization_msgs/msg/Marker"]


def _marker(at: Any, group: str, number: int, *, action: int, mark: Mark | None = None) -> Any:
    kind = _marker_type()
    place = pose(0.0, 0.0, 0.0)
    shape, colour, size, points, words = kind.LINE_STRIP, (0.0, 0.0, 0.0, 0.0), (0.0, 0.0, 0.0), [], ""
    if mark is not None:
        shape = {"strip": kind.LINE_STRIP, "pieces": kind.LINE_LIST, "words": kind.TEXT_VIEW_FACING}[mark.shape]
        colour, size, words = mark.colour, mark.size, mark.words
        if mark.shape == "words":
            place.position.x, place.position.y, place.position.z = *mark.points[0], mark.height
        else:
            points = [_vector(x, y, 0.0, "Point") for x, y in mark.points]
    return _make(
        "visualization_msgs/msg/Marker", header=at, ns=group, id=number, type=shape, action=action, pose=place,
        scale=_vector(*size), color=_colour(colour), points=points, colors=[], text=words, texture_resource="",
        lifetime=_make("builtin_interfaces/msg/Duration", sec=0, nanosec=0), frame_locked=False,
        texture=_make("sensor_msgs/msg/CompressedImage", header=at, format="", data=np.zeros(0, dtype=np.uint8)),
        uv_coordinates=[], mesh_resource="", mesh_use_embedded_materials=False,
        mesh_file=_make("visualization_msgs/msg/MeshFile", filename="", data=np.zeros(0, dtype=np.uint8)),
    )


def _colour(rgba: Sequence[float]) -> Any:
    red, green, blue, alpha = rgba
    return _make("std_msgs/msg/ColorRGBA", r=red, g=green, b=blue, a=alpha)


def heading(x: float, y: float, z: float, w: float) -> float:
    """Direction of the x axis seen from above, radians; NaN for what is no rotation (its length is not 1)."""
    length = x * x + y * y + z * z + w * w
    if not abs(length - 1.0) < 0.1:
        return math.nan
    return math.atan2(2.0 * (w * z + x * y), w * w + x * x - y * y - z * z)


