# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Running a node until it is told to end: signals are counted, mistakes are logged and outlived."""

from __future__ import annotations

import math
import signal
import sys
import time
import traceback
from collections.abc import Callable, Sequence
from types import FrameType
from typing import Optional

import rclpy
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rclpy.node import Node
from rclpy.signals import SignalHandlerOptions

from ..errors import CoordPlannerError

_TOGETHER = 0.3  # seconds


class Signals:
    """Counts SIGINT and SIGTERM. rclpy's own handlers would close the context before a last stop can be sent.

    Those that come together count once: a terminal, `timeout` and a launch system may each pass the same wish on.
    """

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self.count, self._clock, self._last = 0, clock, -math.inf

    def install(self) -> None:
        """Take over both signals; in the main thread only."""
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, self._count)

    def ignore(self) -> None:
        """From now on neither has an effect: a late one must not change the exit status of a node that ended well."""
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, signal.SIG_IGN)

    def _count(self, _number: int, _frame: Optional[FrameType]) -> None:
        now = self._clock()
        if now - self._last > _TOGETHER:
            self.count += 1
            self._last = now


def spin(executor: SingleThreadedExecutor, node: Node, *, after: Callable[[], Optional[int]],
         failed: Callable[[str], None] = lambda _words: None) -> int:
    """Run callbacks until ``after``, called at least ten times a second, gives an exit status.

    A callback that raises is logged and reported through ``failed``; the node goes on: it may have a fleet to stop.
    """
    while True:
        try:
            executor.spin_once(timeout_sec=0.1)
        except ExternalShutdownException:
            return 1
        except Exception as error:
            node.get_logger().error(f"a callback failed: {error}\n{traceback.format_exc()}",
                                    throttle_duration_sec=1.0)
            failed(f"a callback failed: {error}")
        status = after()
        if status is not None:
            return status


def run(arguments: Optional[Sequence[str]], body: Callable[[Sequence[str], Signals], int]) -> int:
    """Set up ROS and signals, run a node's body, tidy up; returns the exit status.

    Bad input, whether ROS or this package finds it, is told in a line or two on stderr: status 2.
    """
    given = list(sys.argv if arguments is None else arguments)
    signals = Signals()
    signals.install()
    try:
        rclpy.init(args=given, signal_handler_options=SignalHandlerOptions.NO)
        return body(given, signals)
    except CoordPlannerError as error:
        sys.stderr.write(f"{error}\n")
        return 2
    except RuntimeError as error:  # rcl's parser of parameter files: RCLError and its like
        sys.stderr.write(f"{_first_line(error)}\n")
        return 2
    finally:
        signals.ignore()
        rclpy.try_shutdown()


def _first_line(error: Exception) -> str:
    lines = str(error).splitlines() or [type(error).__name__]
    return lines[0]
