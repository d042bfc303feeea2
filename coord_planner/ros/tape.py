# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Subscriptions that also keep every message as it came, for a rosbag2 folder."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, Optional

from rclpy.node import Node
from rclpy.qos import QoSProfile
from rclpy.serialization import deserialize_message

from ..record.bag_write import BagWriter


class Tape:
    """Where messages are kept, if anywhere. Messages stand at the time of their receipt, by the system's clock."""

    def __init__(self, node: Node, bag: Optional[BagWriter] = None) -> None:
        self._node, self._bag = node, bag

    def listen(self, kind: type, topic: str, profile: QoSProfile,
               heard: Optional[Callable[[Any], None]] = None) -> None:
        """Keep the messages of a topic, and hand them to ``heard``; without a bag those that nobody hears are left."""
        if self._bag is None:
            if heard is not None:
                self._node.create_subscription(kind, topic, heard, profile)
            return
        bag, name = self._bag, self._node.resolve_topic_name(topic)
        written = f"{kind.__module__.split('.')[0]}/msg/{kind.__name__}"

        def take(packed: bytes) -> None:
            bag.add(time.time_ns(), name, written, packed)
            if heard is not None:
                heard(deserialize_message(packed, kind))

        self._node.create_subscription(kind, topic, take, profile, raw=True)


def clear(folder: Path) -> None:
    """Take away the recording that an earlier demo left; anything else stays, and is in the way."""
    if folder.is_dir() and all(file.name == "metadata.yaml" or file.suffix == ".mcap" for file in folder.iterdir()):
        for file in folder.iterdir():
            file.unlink()
        folder.rmdir()
