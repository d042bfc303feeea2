# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Runs a node whose system clock is off by as many seconds as stand in a file: python set_clock.py MODULE ...

The file's name is in the variable CLOCK_OFFSET_FILE. The steady clock is right, as on a machine whose clock is set.
"""

from __future__ import annotations

import importlib
import os
import sys
from pathlib import Path
from typing import Any

import rclpy.clock
from rclpy.clock_type import ClockType
from rclpy.time import Time

FILE = Path(os.environ["CLOCK_OFFSET_FILE"])
true_now = rclpy.clock.Clock.now


def now(clock: Any) -> Time:
    true = true_now(clock)
    if clock.clock_type == ClockType.STEADY_TIME:
        return true
    return Time(nanoseconds=true.nanoseconds + int(1e9 * float(FILE.read_text())), clock_type=true.clock_type)


rclpy.clock.Clock.now = now
sys.exit(importlib.import_module(f"coord_planner.ros.{sys.argv.pop(1)}").main())
