# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Qualities of service of the design's table."""

from __future__ import annotations

from rclpy.duration import Duration
from rclpy.qos import DurabilityPolicy, HistoryPolicy, QoSProfile, ReliabilityPolicy

# Best effort accepts every publisher: a reliable subscriber would get nothing from a best-effort one.
POSES = QoSProfile(history=HistoryPolicy.KEEP_LAST, depth=1, reliability=ReliabilityPolicy.BEST_EFFORT)
# The same for what whoever likes may send: deep enough that one sender does not push out the others.
ANYBODY = QoSProfile(history=HistoryPolicy.KEEP_LAST, depth=10, reliability=ReliabilityPolicy.BEST_EFFORT)
RELIABLE = QoSProfile(history=HistoryPolicy.KEEP_LAST, depth=10, reliability=ReliabilityPolicy.RELIABLE)
NEWEST = QoSProfile(history=HistoryPolicy.KEEP_LAST, depth=1, reliability=ReliabilityPolicy.RELIABLE)
# Ten deep, so that of two answers in a row neither is lost; a late reader asks for as many as it wants.
LATCHED = QoSProfile(
    history=HistoryPolicy.KEEP_LAST, depth=10,
    reliability=ReliabilityPolicy.RELIABLE, durability=DurabilityPolicy.TRANSIENT_LOCAL,
)
NEWEST_LATCHED = QoSProfile(
    history=HistoryPolicy.KEEP_LAST, depth=1,
    reliability=ReliabilityPolicy.RELIABLE, durability=DurabilityPolicy.TRANSIENT_LOCAL,
)


def commands(timeout: float) -> QoSProfile:
    """For commands: only the newest, and none that is older than the robot's time-out (seconds)."""
    return QoSProfile(
        history=HistoryPolicy.KEEP_LAST, depth=1,
        reliability=ReliabilityPolicy.RELIABLE, lifespan=Duration(seconds=timeout),
    )
