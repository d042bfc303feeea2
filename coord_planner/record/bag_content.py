# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a recording says about the robots: its messages unpacked into columns of numbers.

Only what a review needs is unpacked; every message is counted. Columns grow with the window that is read, by
some 60 bytes a message, whatever the messages weigh.
"""

from __future__ import annotations

import json
import math
import struct
from array import array
from collections.abc import Callable
from typing import Any, Optional

import attrs
import numpy as np
from rosbags.serde import SerdeError
from rosbags.typesys import Stores, TypesysError, get_types_from_msg, get_typestore
from rosbags.typesys.store import Typestore

from . import bag_messages
from .bag_read import DamagedError, Recording, open_recording
from .bag_source import Topic

_PLAN_EVERY = 0.2  # seconds between two plans of a robot that are kept
_PLAN_POINTS = 13
_TELL_EVERY = 20_000  # messages
_LITTLE_ENDIAN = b"\x00\x01\x00\x00"  # how messages from ordinary machines begin (OMG CDR encapsulation)
# ackermann_msgs is in no release's store; a bag from before ROS 2 Iron does not bring its definition along.
_STEERING = "".join(f"float32 {field}\n" for field in (
    "steering_angle", "steering_angle_velocity", "speed", "acceleration", "jerk"))
_OTHERS = {
    "ackermann_msgs/msg/AckermannDrive": _STEERING,
    "ackermann_msgs/msg/AckermannDriveStamped": "std_msgs/Header header\nackermann_msgs/AckermannDrive drive\n",
}
POSE_KINDS = ("nav_msgs/msg/Odometry", "geometry_msgs/msg/PoseWithCovarianceStamped", "geometry_msgs/msg/PoseStamped")
# What bytes that are not what they should be bring about in an unpacker, or content that is not what it should be.
_UNPACKABLE = (SerdeError, struct.error, ValueError, KeyError, TypeError, AttributeError, IndexError)
Seconds = Callable[[Any], float]  # from a builtin_interfaces/Time
TRANSFORMS = "tf2_msgs/msg/TFMessage"


class Table:
    """Rows of numbers that are appended one by one."""

    def __init__(self, *columns: str) -> None:
        self.columns = columns
        self._values = array("d")

    def add(self, *row: float) -> None:
        self._values.extend(row)

    def __len__(self) -> int:
        return len(self._values) // len(self.columns)

    def array(self) -> np.ndarray:
        """Shape (rows, columns)."""
        return np.array(self._values, dtype=float).reshape(-1, len(self.columns))

    def column(self, name: str) -> np.ndarray:
        """One column, shape (rows,)."""
        return self.array()[:, self.columns.index(name)]


@attrs.define
class Poses:
    """Poses from one topic, or of one frame in a tree of transforms.

    ``table``: received, stamp (s), x, y (m), heading (rad), speed (m/s), turn rate (rad/s; both NaN where not told).
    """

    source: str
    kind: str
    frame: str = ""
    child: str = ""
    table: Table = attrs.field(factory=lambda: Table("received", "stamp", "x", "y", "heading", "speed", "turn_rate"))


@attrs.define
class Commands:
    """Commands from one topic. ``table``: received, stamp (NaN without), speed, turn rate (rad/s), curvature (NaN)."""

    source: str
    kind: str
    table: Table = attrs.field(factory=lambda: Table("received", "stamp", "speed", "turn_rate", "steering"))


@attrs.define
class Numbers:
    """A Float64 topic. ``table``: received, value."""

    source: str
    table: Table = attrs.field(factory=lambda: Table("received", "value"))


@attrs.define
class Plan:
    """One planned path: rows due (s; NaN where not told), x, y, heading; shape (K, 4)."""

    received: float
    stamp: float
    rows: np.ndarray


@attrs.frozen
class Report:
    """One diagnostic status: times of receipt and of its stamp (NaN without), and what it says."""

    received: float
    stamp: float
    topic: str
    name: str
    level: int
    text: str
    subject: str
    values: dict[str, str]


@attrs.define
class Content:
    """All that was read. Times of receipt and stamps are seconds since ``start``.

    Attributes:
        start: first time of receipt, nanoseconds. duration: from there to the last message, seconds.
        read: messages read. unpackable: messages that could not be unpacked, by topic.
        unknown: kind by topic, of what cannot be unpacked: neither the recording nor its ROS release defines it.
        topics: kind and messages by topic.
    """

    recording: Recording
    start: int = 0
    duration: float = 0.0
    read: int = 0
    topics: dict[str, tuple[str, int]] = attrs.field(factory=dict)
    unpackable: dict[str, int] = attrs.field(factory=dict)
    unknown: dict[str, str] = attrs.field(factory=dict)
    poses: dict[str, Poses] = attrs.field(factory=dict)
    transforms: dict[str, Poses] = attrs.field(factory=dict)
    commands: dict[str, Commands] = attrs.field(factory=dict)
    numbers: dict[str, Numbers] = attrs.field(factory=dict)
    plans: dict[str, list[Plan]] = attrs.field(factory=dict)
    reports: list[Report] = attrs.field(factory=list)
    neighbours: list[tuple[float, list[Any]]] = attrs.field(factory=list)
    clock: Table = attrs.field(factory=lambda: Table("received", "stamp"))


def read(path: Any, from_s: Optional[float] = None, to_s: Optional[float] = None,
         progress: Callable[[float], None] = lambda _part: None) -> Content:
    """Read a recording, or a window of it in seconds since its first message.

    Args:
        progress: called now and then with the part that is read, where the recording says how much there is.

    Raises:
        SettingsError: there is nothing that could be a recording.
    """
    try:
        with open_recording(path) as recording:
            return _Reader(recording, from_s, to_s).read(progress)
    except DamagedError as damage:
        with open_recording(path, trust_index=False) as recording:
            content = _Reader(recording, from_s, to_s).read(progress)
        content.recording.losses.insert(0, f"the index does not fit what the files hold ({damage})")
        return content


class _Reader:
    """Goes through the messages once. Stamps are counted from the first time of receipt, so that no digit is lost."""

    def __init__(self, recording: Recording, from_s: Optional[float], to_s: Optional[float]) -> None:
        self._content = Content(recording)
        self._window = from_s, to_s
        self._unpackers: dict[Topic, Optional[Callable[[bytes, float], None]]] = {}
        self._types = _Types(recording.distro)
        self._zero = 0, 0  # seconds and nanoseconds of the first time of receipt

    def read(self, progress: Callable[[float], None]) -> Content:
        content, counts = self._content, dict[Topic, int]()
        first: Optional[int] = None
        last = 0
        for topic, nanoseconds, data in content.recording.messages(*self._window):
            if first is None:
                first = content.start = nanoseconds if content.recording.start is None else content.recording.start
                self._zero = divmod(first, bag_messages.NANOSECONDS)
            if topic not in counts:
                counts[topic] = 0
                self._unpackers[topic] = self._unpacker(topic)
            counts[topic] += 1
            content.read += 1
            if content.read % _TELL_EVERY == 0 and content.recording.expected:
                progress(content.read / content.recording.expected)
            last = nanoseconds if nanoseconds > last else last
            unpack = self._unpackers[topic]
            if unpack is not None:
                try:
                    unpack(data, (nanoseconds - first) * 1e-9)
                except _UNPACKABLE:
                    content.unpackable[topic.name] = content.unpackable.get(topic.name, 0) + 1
        content.duration = (last - first) * 1e-9 if first is not None else 0.0
        content.topics = {topic.name: (topic.kind, counts.get(topic, 0)) for topic in content.recording.topics}
        return content

    def _seconds(self, stamp: Any) -> float:
        """A stamp; NaN for the zero that stands for none."""
        if not stamp.sec and not stamp.nanosec:
            return math.nan
        return float(stamp.sec - self._zero[0] + 1e-9 * (stamp.nanosec - self._zero[1]))

    def _unpacker(self, topic: Topic) -> Optional[Callable[[bytes, float], None]]:
        unpack = self._types.unpacker(topic)
        if unpack is None:
            self._content.unknown[topic.name] = topic.kind
        handler = self._handler(topic)
        if handler is None or unpack is None:
            return None

        def both(data: bytes, received: float) -> None:
            handler(received, unpack(data))

        return both

    def _handler(self, topic: Topic) -> Optional[Callable[[float, Any], None]]:
        """What is done with the messages of a topic; None when they tell a review nothing."""
        name, kind, content, seconds = topic.name, topic.kind, self._content, self._seconds
        if kind in POSE_KINDS:
            return _pose_handler(content.poses.setdefault(name, Poses(name, kind)), seconds)
        if kind == TRANSFORMS:
            return _transform_handler(content.transforms, seconds)
        if kind in _COMMAND_ROWS:
            return _command_handler(content.commands.setdefault(name, Commands(name, kind)), seconds)
        if kind == "std_msgs/msg/Float64" and name.endswith("/curvature"):
            return _number_handler(content.numbers.setdefault(name, Numbers(name)))
        if kind == "nav_msgs/msg/Path":
            return _plan_handler(content.plans.setdefault(name, []), seconds)
        if kind == "std_msgs/msg/String" and "neighbours" in name.rsplit("/", 1)[-1]:
            return _neighbours_handler(content.neighbours)
        if kind.startswith("diagnostic_msgs/msg/Diagnostic"):
            return _report_handler(name, kind, content.reports, seconds)
        if kind == "rosgraph_msgs/msg/Clock":
            return lambda received, message: content.clock.add(received, seconds(message.clock))
        return None


class _Types:
    """How messages are unpacked: by the definition that the bag brings along, else by that of its ROS release."""

    def __init__(self, distro: str) -> None:
        stores = {known.name.removeprefix("ROS2_").lower(): known for known in Stores if known.name.startswith("ROS2")}
        self._stock = get_typestore(stores[distro]) if distro in stores else bag_messages.store()
        for name, definition in _OTHERS.items():
            if name not in self._stock.types:
                self._stock.register(get_types_from_msg(definition, name))

    def unpacker(self, topic: Topic) -> Optional[Callable[[bytes], Any]]:
        """A function from bytes to a message; None when the type is not known."""
        if topic.kind not in self._stock.types and not topic.definition:
            return None
        made: list[Callable[[bytes], Any]] = []  # only made when it is needed: most topics are never unpacked

        def unpack(data: bytes) -> Any:
            if not made:
                made.append(self._made(topic))
            return made[0](data)

        return unpack

    def _made(self, topic: Topic) -> Callable[[bytes], Any]:
        store = self._own(topic) or self._stock
        known, kind = store.get_msgdef(topic.kind), topic.kind
        little, message = known.deserialize_cdr_le, known.cls

        def unpack(data: bytes) -> Any:
            # what nearly every message is goes straight to its unpacker: a quarter faster than by way of the store
            if data[:4] == _LITTLE_ENDIAN:
                return little(data[4:], 0, message, store)[0]
            return store.deserialize_cdr(data, kind)

        return unpack

    def _own(self, topic: Topic) -> Optional[Typestore]:
        """A store for a type that the bag defines otherwise than its release."""
        if not topic.definition:
            return None
        try:
            types = get_types_from_msg(topic.definition, topic.kind)
            if all(self._stock.fielddefs.get(name, (None, None))[1] == fields[1] for name, fields in types.items()):
                return None
            store = get_typestore(Stores.EMPTY)
            store.register(types)
            return store
        except (TypesysError, ValueError, KeyError):
            return None


def _pose_handler(into: Poses, seconds: Seconds) -> Callable[[float, Any], None]:
    add, kind, heading, nan = into.table.add, into.kind, bag_messages.heading, math.nan

    def odometry(received: float, message: Any) -> None:
        pose, twist = message.pose.pose, message.twist.twist
        place, turned = pose.position, pose.orientation
        add(received, seconds(message.header.stamp), place.x, place.y,
            heading(turned.x, turned.y, turned.z, turned.w), twist.linear.x, twist.angular.z)
        into.frame, into.child = message.header.frame_id, message.child_frame_id

    def bare(received: float, message: Any) -> None:
        pose = message.pose if kind == "geometry_msgs/msg/PoseStamped" else message.pose.pose
        place, turned = pose.position, pose.orientation
        add(received, seconds(message.header.stamp), place.x, place.y,
            heading(turned.x, turned.y, turned.z, turned.w), nan, nan)
        into.frame = message.header.frame_id

    return odometry if kind == "nav_msgs/msg/Odometry" else bare


def _transform_handler(into: dict[str, Poses], seconds: Seconds) -> Callable[[float, Any], None]:
    def handle(received: float, message: Any) -> None:
        for one in message.transforms:
            child = one.child_frame_id.lstrip("/")
            if child not in into:
                into[child] = Poses(f"tf: {child}", TRANSFORMS, one.header.frame_id.lstrip("/"), child)
            place, turned = one.transform.translation, one.transform.rotation
            into[child].table.add(received, seconds(one.header.stamp), place.x, place.y,
                                  bag_messages.heading(turned.x, turned.y, turned.z, turned.w), math.nan, math.nan)

    return handle


def _twist_row(received: float, stamp: float, twist: Any) -> tuple[float, ...]:
    return received, stamp, twist.linear.x, twist.angular.z, math.nan


_COMMAND_ROWS: dict[str, Callable[[float, Any, Seconds], tuple[float, ...]]] = {
    "geometry_msgs/msg/Twist": lambda received, m, _: _twist_row(received, math.nan, m),
    "geometry_msgs/msg/TwistStamped": lambda received, m, at: _twist_row(received, at(m.header.stamp), m.twist),
    "ackermann_msgs/msg/AckermannDrive": lambda received, m, _: (
        received, math.nan, m.speed, math.nan, m.steering_angle),
    "ackermann_msgs/msg/AckermannDriveStamped": lambda received, m, at: (
        received, at(m.header.stamp), m.drive.speed, math.nan, m.drive.steering_angle),
}


def _command_handler(into: Commands, seconds: Seconds) -> Callable[[float, Any], None]:
    row, add = _COMMAND_ROWS[into.kind], into.table.add
    return lambda received, message: add(*row(received, message, seconds))


def _number_handler(into: Numbers) -> Callable[[float, Any], None]:
    add = into.table.add
    return lambda received, message: add(received, message.data)


def _plan_handler(into: list[Plan], seconds: Seconds) -> Callable[[float, Any], None]:
    def handle(received: float, message: Any) -> None:
        if not message.poses or (into and 0.0 <= received - into[-1].received < _PLAN_EVERY - 1e-3):
            return
        picked = np.unique(np.linspace(0, len(message.poses) - 1, _PLAN_POINTS).astype(int))
        rows = []
        for one in (message.poses[k] for k in picked):
            due, place, turned = seconds(one.header.stamp), one.pose.position, one.pose.orientation
            rows.append((due, place.x, place.y,
                         bag_messages.heading(turned.x, turned.y, turned.z, turned.w)))
        into.append(Plan(received, seconds(message.header.stamp), np.array(rows)))

    return handle


def _neighbours_handler(into: list[tuple[float, list[Any]]]) -> Callable[[float, Any], None]:
    def handle(received: float, message: Any) -> None:
        edges = json.loads(message.data)["edges"]
        if not into or into[-1][1] != edges:
            into.append((received, edges))

    return handle


def _report_handler(topic: str, kind: str, into: list[Report], seconds: Seconds) -> Callable[[float, Any], None]:
    def keep(received: float, stamp: float, status: Any) -> None:
        values = {pair.key: pair.value for pair in status.values} if "warnings" in topic or status.values else {}
        into.append(Report(received, stamp, topic, status.name, int(status.level), status.message,
                           status.hardware_id, values))

    def array_of(received: float, message: Any) -> None:
        stamp = seconds(message.header.stamp)
        for status in message.status:
            if status.level:
                keep(received, stamp, status)

    if kind.endswith("DiagnosticArray"):
        return array_of
    return lambda received, message: keep(received, math.nan, message)
