# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The heartbeat that says who drives this fleet, and the ear for those of other planners."""

from __future__ import annotations

import functools
import time
from collections.abc import Callable, Iterator
from typing import Any

from rclpy.node import Node
from std_msgs.msg import String

from . import messages, qos
from .others import OtherPlanners

RATE = 5.0  # heartbeats a second
_TOPIC = "~/heartbeat"
_ENDING, _TYPE = "/heartbeat", "std_msgs/msg/String"
_LOOK_EVERY = 0.5  # seconds between two looks for heartbeats on other topics
_MOST = 16  # other topics that are listened to


class Heartbeats:
    """Publisher of the own heartbeat, and subscriptions for everybody's.

    A second planner of the same name beats on the same topic. One that runs by another name, or in another
    namespace, beats on its own: topics that are called so are looked for and listened to as they come.

    Args:
        node: gets publisher and subscriptions. others: told of each heartbeat.
        trouble: called with what could not be used.
    """

    def __init__(self, node: Node, others: OtherPlanners,
                 trouble: Callable[[messages.IgnoredError], None]) -> None:
        self._node, self._others, self._trouble = node, others, trouble
        self._publisher = node.create_publisher(String, _TOPIC, qos.NEWEST)
        self._own_topic = self._publisher.topic_name
        self._subscriptions = {self._own_topic: node.create_subscription(String, _TOPIC, self._on_beat, qos.ANYBODY)}
        self._since = time.monotonic()
        self._looked = -_LOOK_EVERY

    def beat(self) -> None:
        """Say who drives."""
        self._publisher.publish(String(data=messages.heartbeat_text(self._others.own)))

    def look(self) -> None:
        """Listen to heartbeats on other topics too; every now and then, since planners may come at any time."""
        now = time.monotonic()
        if now - self._looked < _LOOK_EVERY:
            return
        self._looked = now
        there = set(self._topics())
        for topic in there - set(self._subscriptions):
            if len(self._subscriptions) <= _MOST:
                self._subscriptions[topic] = self._listen(topic)
        for topic in set(self._subscriptions) - there - {self._own_topic}:
            self._drop(topic)

    def listen(self, seconds: float) -> None:
        """Listen until that long after the subscriptions were made, or until somebody is heard; needs no executor.

        Two that were started apart may need more than three seconds to find each other: measured on one machine,
        where the first announcements were lost.
        """
        while time.monotonic() - self._since < seconds and not self._others.newest:
            self.look()
            for subscription in self._subscriptions.values():
                for message in _waiting(subscription):
                    self._on_beat(message)
            time.sleep(0.02)

    def close(self) -> None:
        """Take everything off the node."""
        for topic in list(self._subscriptions):
            self._drop(topic)
        self._node.destroy_publisher(self._publisher)

    def _topics(self) -> Iterator[str]:
        """Other topics on which somebody beats."""
        for topic, types in self._node.get_topic_names_and_types():
            ours = topic == self._own_topic or not topic.endswith(_ENDING)
            if not ours and _TYPE in types and self._node.count_publishers(topic):
                yield topic

    def _listen(self, topic: str) -> Any:
        try:
            return self._node.create_subscription(String, topic, self._on_beat, qos.ANYBODY)
        except Exception as error:  # RCLError, which has no public name: the security policy does not allow it
            self._node.get_logger().warning(f"heartbeats on {topic} cannot be listened to: {error}")
            return None

    def _drop(self, topic: str) -> None:
        subscription = self._subscriptions.pop(topic)
        if subscription is not None:
            self._node.destroy_subscription(subscription)

    def _on_beat(self, message: String) -> None:
        try:
            self._others.hear(messages.parse_heartbeat(message.data))
        except messages.IgnoredError as error:
            self._trouble(error)


def _waiting(subscription: Any) -> Iterator[Any]:
    """Messages that wait at a subscription."""
    if subscription is None:
        return
    take = functools.partial(subscription.handle.take_message, subscription.msg_type, subscription.raw)
    with subscription.handle:
        while (found := take()) is not None:
            yield found[0]
