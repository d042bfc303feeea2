# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A peer gone wrong: python flooding_peer.py SECONDS_OF_JUNK SECONDS_OF_EVERYTHING ROBOT ...

Sends 2,000 small messages a second and 5 of a megabyte to every input of a planner, on this machine only. The first so
many seconds without what a planner has to believe: halts, and robots that say whether they are ready.
"""

from __future__ import annotations

import itertools
import math
import os
import sys
import time
from collections.abc import Iterator
from typing import Any

import rclpy
from geometry_msgs.msg import PoseStamped
from rclpy.node import Node
from std_msgs.msg import Bool, Empty, String

from coord_planner.ros import outgoing, qos

SMALL, LARGE = 2000, 5  # messages a second
MEGABYTE = "[" * 1_000_000
TEXTS = (
    "", "{", "null", "[]", '{"version": 1}', '{"version": 1, "stamp": NaN, "edges": []}', "[" * 2000,
    '{"version": 1, "stamp": 9e99, "edges": [["left", "nobody"]]}', '{"id": 1, "manoeuvre": "nothing"}',
    '{"id": "", "manoeuvre": 7}', '{"version": 1, "fleet": "test_yard", "run": ""}', "\x00\x01", "ünïcode",
)


def poses(now: float) -> list[PoseStamped]:
    """None of them may be used."""
    nan, none = outgoing.pose_message(math.nan, math.inf, 0.0), outgoing.pose_message(0.0, 0.0, 0.0)
    none.orientation.w = 0.0
    good = outgoing.pose_message(1e300, 0.0, 0.0)
    heads = [("map", 0.0, nan), ("map", 0.0, none), ("odom", 0.0, good), ("", 0.0, good), ("map", -60.0, good),
             ("map", 60.0, good)]
    return [PoseStamped(header=outgoing.header(frame, now + off), pose=pose) for frame, off, pose in heads]


def junk(node: Node, robots: list[str]) -> Iterator[tuple[Any, Any]]:
    """Publishers and messages for ever."""
    texts = [node.create_publisher(String, name, qos.RELIABLE) for name in ("planner/request", "planner/heartbeat")]
    texts.append(node.create_publisher(String, "neighbours", qos.LATCHED))
    places = [node.create_publisher(PoseStamped, f"{name}/pose", qos.RELIABLE) for name in robots]
    for words in itertools.cycle(TEXTS):
        for text, place in itertools.zip_longest(texts, places):
            if text:
                yield text, String(data=words)
            if place:
                yield from ((place, pose) for pose in poses(float(node.get_clock().now().nanoseconds) * 1e-9))


def large(node: Node, robots: list[str]) -> Iterator[tuple[Any, Any]]:
    """Publishers and messages of a megabyte for ever."""
    names = ["planner/request", "planner/heartbeat", "neighbours"]
    texts = [node.create_publisher(String, name, qos.LATCHED) for name in names]
    places = [node.create_publisher(PoseStamped, f"{name}/pose", qos.RELIABLE) for name in robots]
    while True:
        yield from ((text, String(data=MEGABYTE)) for text in texts)
        yield from ((place, PoseStamped(header=outgoing.header(MEGABYTE, 0.0))) for place in places)


def believed(node: Node, robots: list[str]) -> Iterator[tuple[Any, Any]]:
    """What cannot be told from the truth."""
    halt = node.create_publisher(Empty, "halt", qos.RELIABLE)
    ready = [node.create_publisher(Bool, f"{name}/ready", qos.RELIABLE) for name in robots]
    for yes in itertools.cycle((True, False)):
        yield halt, Empty()
        yield from ((publisher, Bool(data=yes)) for publisher in ready)


def send(small: Iterator[tuple[Any, Any]], big: Iterator[tuple[Any, Any]], seconds: float) -> None:
    """So many a second, or fewer where this process cannot do more; bounded in count and in time."""
    begun, sent, sent_big = time.monotonic(), 0, 0
    while (passed := time.monotonic() - begun) < seconds:
        for _ in range(min(int(SMALL * passed) - sent, SMALL // 20)):
            publisher, message = next(small)
            publisher.publish(message)
            sent += 1
        if LARGE * passed > sent_big:
            publisher, message = next(big)
            publisher.publish(message)
            sent_big += 1
        time.sleep(0.002)
    sys.stdout.write(f"sent {sent} small and {sent_big} large messages\n")
    sys.stdout.flush()


def main() -> None:
    assert os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] == "LOCALHOST"
    rclpy.init()
    node, robots = Node("peer"), sys.argv[3:]
    small, big = junk(node, robots), large(node, robots)
    everything = (item for pair in zip(small, believed(node, robots)) for item in pair)
    send(small, big, float(sys.argv[1]))
    send(everything, big, float(sys.argv[2]))
    rclpy.shutdown()


main()
