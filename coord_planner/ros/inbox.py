# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the planner hears: subscriptions whose callbacks check a message, keep the newest and return."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Optional

from geometry_msgs.msg import PointStamped, PoseStamped, PoseWithCovarianceStamped
from nav_msgs.msg import Odometry
from rclpy.node import Node
from std_msgs.msg import Bool, Empty, String

from ..config import Configuration, Connection
from ..core.graph import NeighbourGraph
from ..core.messages import HazardPoint, PoseSample
from ..errors import SettingsError
from . import messages, qos
from .readiness import Readiness

_POSE_TYPES: dict[str, type] = {
    "pose": PoseStamped, "pose_with_covariance": PoseWithCovarianceStamped, "odometry": Odometry,
}


class Inbox:
    """Newest good pose of each robot, who is ready, the neighbours in force, and counts of what was ignored.

    Args:
        node: gets the subscriptions. configuration: gives the live settings whenever it is called.
        now: seconds on the clock of the stamps, 0 while there is none. time: planner time, seconds.
        neighbours: called with each new graph. halt: called for each halt message.
        request: called with each well-formed request.
        trouble: called when a message was ignored and that is worth telling at once.

    Raises:
        SettingsError: a pose source that cannot be had on this machine.
    """

    def __init__(self, node: Node, configuration: Callable[[], Configuration], now: Callable[[], float],
                 time: Callable[[], float], *, neighbours: Callable[[NeighbourGraph], None], halt: Callable[[], object],
                 request: Callable[[messages.Request], None],
                 trouble: Callable[[str, messages.IgnoredError], None]) -> None:
        self._configuration, self._now, self._time = configuration, now, time
        self._neighbours, self._request, self._trouble = neighbours, request, trouble
        self.tallies = messages.Tallies()
        self._poses: dict[str, PoseSample] = {}
        self._stamps: dict[str, float] = {}  # of the poses, as they came
        self.hazard: Optional[HazardPoint] = None  # the newest
        self._neighbours_stamp = -math.inf
        self.readiness = Readiness({
            name: connection.ready_timeout
            for name, connection in configuration().connections.items() if connection.ready_required
        })
        self._transforms = Transforms(node, configuration().frame) if _wants_transforms(configuration()) else None
        self._subscriptions = [
            node.create_subscription(String, "neighbours", self._on_neighbours, qos.NEWEST_LATCHED),
            node.create_subscription(PointStamped, "hazard", self._on_hazard, qos.RELIABLE),
            node.create_subscription(Empty, "halt", lambda _message: halt(), qos.RELIABLE),
            node.create_subscription(String, "~/request", self._on_request, qos.RELIABLE),
        ]
        for name, connection in configuration().connections.items():
            if connection.pose_source in _POSE_TYPES:
                self._subscriptions.append(self._subscribe(node, name, connection))
        for name in self.readiness.names:
            self._subscriptions.append(self._subscribe_ready(node, name))

    def _subscribe(self, node: Node, name: str, connection: Connection) -> Any:
        def callback(message: Any) -> None:
            self._on_pose(name, connection, message)

        return node.create_subscription(_POSE_TYPES[connection.pose_source], connection.pose_topic, callback, qos.POSES)

    def _subscribe_ready(self, node: Node, name: str) -> Any:
        def callback(message: Bool) -> None:
            self.readiness.say(name, message.data)

        return node.create_subscription(Bool, f"{name}/ready", callback, qos.POSES)

    def poses(self) -> dict[str, PoseSample]:
        """Newest good pose of each robot that has sent one, of the point that is planned with, in planner time."""
        if self._transforms is not None:
            for name, connection in self._configuration().connections.items():
                if connection.pose_source == "tf":
                    self._look_up(name, connection, self._transforms)
        return dict(self._poses)

    def forget(self) -> None:
        """Drop all poses and the stamp of the neighbours: time begins anew."""
        self._poses, self._stamps, self._neighbours_stamp, self.hazard = {}, {}, -math.inf, None
        self.tallies.begin_anew()

    def clock_jumped(self, jump: float) -> None:
        """After a jump back of so many seconds later messages may bear earlier stamps."""
        back = min(jump, 0.0)
        self._stamps = {name: stamp + back for name, stamp in self._stamps.items()}
        self._neighbours_stamp += back

    def close(self, node: Node) -> None:
        """Take the subscriptions off the node."""
        for subscription in self._subscriptions:
            node.destroy_subscription(subscription)
        self._subscriptions = []

    def _on_pose(self, name: str, connection: Connection, message: Any) -> None:
        try:
            self._keep(name, connection, message, connection.pose_source)
        except messages.IgnoredError as error:
            self.ignore(name, error)

    def _look_up(self, name: str, connection: Connection, transforms: Transforms) -> None:
        message = transforms.newest(connection.pose_topic)
        if message is None or messages.seconds(message.header.stamp) == self._stamps.get(name):
            return  # nothing, or seen at the last look
        self._on_pose(name, connection, message)

    def _keep(self, name: str, connection: Connection, message: Any, source: str) -> None:
        configuration, now = self._configuration(), self._now()
        sample = messages.pose_sample(
            message, "pose" if source == "tf" else source,
            frame=configuration.frame, now=now, poses=configuration.settings.poses,
        )
        messages.check_order(sample.stamp, self._stamps.get(name))
        x, y, heading = connection.planned_pose(sample.x, sample.y, sample.heading)
        self._stamps[name] = sample.stamp
        self._poses[name] = PoseSample(self._time() - (now - sample.stamp), x, y, heading)
        self.tallies.use(name)

    def _on_neighbours(self, message: String) -> None:
        names = self._configuration().fleet.names
        try:
            graph, stamp = messages.parse_neighbours(message.data, names, self._neighbours_stamp)
        except messages.IgnoredError as error:
            self.ignore("neighbours", error)
            return
        self._neighbours_stamp = stamp
        self.tallies.use("neighbours")
        self._neighbours(graph)

    def _on_hazard(self, message: PointStamped) -> None:
        configuration = self._configuration()
        try:
            x, y = messages.hazard_point(
                message, frame=configuration.frame, now=self._now(), expires=configuration.settings.hazard.expires
            )
        except messages.IgnoredError as error:
            self.ignore("hazard", error)
            return
        self.tallies.use("hazard")
        self.hazard = HazardPoint(x, y, self._time())

    def _on_request(self, message: String) -> None:
        try:
            request = messages.parse_request(message.data)
        except messages.IgnoredError as error:
            self.ignore("request", error)
            return
        self.tallies.use("request")
        self._request(request)

    def ignore(self, source: str, error: messages.IgnoredError) -> None:
        """Count a message that is not used; told at once when that is news."""
        if self.tallies.ignore(source, error, self._time()):
            self._trouble(source, error)


def _wants_transforms(configuration: Configuration) -> bool:
    return any(connection.pose_source == "tf" for connection in configuration.connections.values())


class Transforms:
    """Poses from tf, where tf2_ros is installed.

    Raises:
        SettingsError: it is not.
    """

    def __init__(self, node: Node, frame: str) -> None:
        try:
            import tf2_ros
        except ImportError:
            raise SettingsError(
                "'tf' needs tf2_ros, which is not installed: install ros-<distro>-tf2-ros-py, or take another source",
                key="pose_source", allowed=", ".join(_POSE_TYPES),
            ) from None
        self._frame, self._failure = frame, tf2_ros.TransformException
        self._buffer = tf2_ros.Buffer()
        self._listener = tf2_ros.TransformListener(self._buffer, node)

    def newest(self, child: str) -> Optional[PoseStamped]:
        """The newest pose of a frame in the fleet's frame, or None while it is not known."""
        from rclpy.time import Time  # newest common time of the chain

        try:
            found = self._buffer.lookup_transform(self._frame, child, Time())
        except self._failure:
            return None
        message = PoseStamped(header=found.header)
        position = found.transform.translation
        message.pose.position.x, message.pose.position.y = position.x, position.y
        message.pose.orientation = found.transform.rotation
        return message
