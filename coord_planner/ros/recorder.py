# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Listens to a planner and its robots, and makes a Run of what it heard."""

from __future__ import annotations

import functools
import json
from typing import Any, Optional

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import PoseStamped, PoseWithCovarianceStamped, Twist, TwistStamped
from nav_msgs.msg import Odometry, Path
from rclpy.node import Node
from rclpy.qos import QoSProfile, ReliabilityPolicy
from rosgraph_msgs.msg import Clock
from std_msgs.msg import Float64, String
from visualization_msgs.msg import MarkerArray

from .. import config
from ..core.messages import Caution, Level
from ..record.bag_write import BagWriter
from ..trial.run import Run, RunFrame
from . import messages, qos
from .tape import Tape

_DEEP = QoSProfile(depth=200)
_DEEP_POSES = QoSProfile(depth=200, reliability=ReliabilityPolicy.BEST_EFFORT)
_POSES = {"pose": PoseStamped, "pose_with_covariance": PoseWithCovarianceStamped, "odometry": Odometry}
_FRAME_EVERY = 0.2  # seconds between two plans that are kept for the page
_FRAME_POINTS = 13
_GAP = 0.3  # seconds; a caution that pauses for less is one


class Recorder:
    """What was heard so far. Times are stamps, seconds; poses those of the points that are planned with.

    Args:
        node: gets the subscriptions. configuration: of the planner that is listened to.
        planner: name of its node. bag: where every message is kept as it came, if anywhere.
    """

    def __init__(self, node: Node, configuration: config.Configuration, planner: str = "planner",
                 bag: Optional[BagWriter] = None) -> None:
        self._configuration = configuration
        self._robots = {name: _Track() for name in configuration.fleet.names}
        self._cautions: dict[tuple[str, str], list[tuple[float, float, Caution]]] = {}
        self._events: list[tuple[float, str]] = []
        self._plans: dict[float, dict[str, np.ndarray]] = {}
        self._rates: dict[float, float] = {}
        self._tick_ms: list[float] = []
        self._now = 0.0
        self.status: dict[str, str] = {}
        self.ends: dict[str, list[float]] = {}
        tape = Tape(node, bag)
        for name, connection in configuration.connections.items():
            self._listen(tape, name, connection)
        tape.listen(DiagnosticStatus, f"{planner}/status", qos.LATCHED, self._on_status)
        tape.listen(String, f"{planner}/neighbours_in_force", qos.NEWEST_LATCHED)
        tape.listen(DiagnosticArray, "/diagnostics", _DEEP)
        tape.listen(MarkerArray, "fleet_markers", _DEEP)
        tape.listen(Clock, "/clock", _DEEP)

    def _listen(self, tape: Tape, name: str, connection: config.Connection) -> None:
        track = self._robots[name]
        motion = TwistStamped if connection.command_type == "twist_stamped" else Twist
        tape.listen(Odometry, f"{name}/simulated_state", _DEEP, track.on_state)
        tape.listen(Float64, f"{name}/curvature", _DEEP, track.on_curvature)
        tape.listen(motion, connection.command_topic, _DEEP, track.on_motion)
        tape.listen(Path, f"{name}/planned_path", _DEEP, functools.partial(self._on_plan, name))
        if connection.pose_source in _POSES:
            tape.listen(_POSES[connection.pose_source], connection.pose_topic, _DEEP_POSES)

    @property
    def heard_all(self) -> bool:
        """Whether every robot's state has come."""
        return all(track.states for track in self._robots.values())

    @property
    def newest_stamp(self) -> float:
        """Newest stamp of a robot's state, seconds; 0 before the first."""
        return max((track.states[-1][0] for track in self._robots.values() if track.states), default=0.0)

    def _on_status(self, message: DiagnosticStatus) -> None:
        before, self.status = self.status, {pair.key: pair.value for pair in message.values}
        self._now = float(self.status["stamp"])
        if self.status["state"] != before.get("state"):
            self.mark(message.message)
        if self.status["state"] == "moving":
            self._tick_ms.append(float(self.status["tick_ms"]))
            self._rates[self._now] = float(self.status["progress_rate"])
        self.ends = json.loads(self.status["ends"]) or self.ends
        for item in json.loads(self.status["warnings"]):
            self._note(Caution(item["code"], item["robot"], Level(item["level"]), item["text"]))

    def _note(self, caution: Caution) -> None:
        spans = self._cautions.setdefault((caution.code, caution.subject), [])
        if spans and self._now - spans[-1][1] <= _GAP:
            spans[-1] = (spans[-1][0], self._now, spans[-1][2])
        else:
            spans.append((self._now, self._now, caution))

    def mark(self, text: str) -> None:
        """Something worth a mark on the time line, now."""
        self._events.append((self._now, text))

    def _on_plan(self, name: str, message: Path) -> None:
        stamp = messages.seconds(message.header.stamp)
        last = max((when for when in self._plans if when < stamp), default=-_FRAME_EVERY)
        if stamp in self._plans or stamp - last >= _FRAME_EVERY:
            picked = np.unique(np.linspace(0, len(message.poses) - 1, _FRAME_POINTS).astype(int))
            self._plans.setdefault(stamp, {})[name] = np.array([_planar(message.poses[k].pose) for k in picked])

    def run(self, manoeuvre: str, *, began: float, wall_time: float, facts: dict[str, Any]) -> Run:
        """The record, for ``record.metrics`` and ``record.page``; its clock begins at 0 with the first state heard.

        Args:
            began: stamp of the answer to the request, seconds. wall_time: seconds that everything took.
        """
        configuration = self._configuration
        times, poses, speeds, curvatures = self._motion()
        zero = float(times[0])
        command_times, commanded = self._commands()
        spans = sorted((span for group in self._cautions.values() for span in group), key=lambda span: span[0])
        return Run(
            fleet=configuration.fleet, edges=configuration.edges, manoeuvre=manoeuvre,
            times=times - zero, poses=poses, speeds=speeds, curvatures=curvatures,
            command_times=command_times - zero, commanded=commanded, end_poses=self._end_poses(),
            min_clearance=configuration.settings.site_rules.min_clearance,
            site_rules=configuration.settings.site_rules,
            state=self.status["state"], completed=self.status["completed"] == "true",
            began=began - zero, ended=_rest(times, speeds) - zero,
            cautions=tuple((first - zero, last - zero, caution) for first, last, caution in spans),
            tick_ms=np.array(self._tick_ms), wall_time=wall_time, frames=self._frames(zero),
            events=tuple((when - zero, text) for when, text in self._events if when >= zero), facts=facts,
        )

    def _motion(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Times that every robot's state has (S,), poses (N, S, 3), speeds and curvatures (N, S)."""
        tables = [{state[0]: state for state in track.states} for track in self._robots.values()]
        times = sorted(set.intersection(*(set(table) for table in tables)))
        rows = np.array([[table[when] for when in times] for table in tables]).reshape(len(tables), len(times), 6)
        poses = rows[:, :, 1:4].copy()
        poses[:, :, 2] = np.unwrap(poses[:, :, 2], axis=1)
        return np.array(times), poses, rows[:, :, 4], rows[:, :, 5]

    def _commands(self) -> tuple[np.ndarray, np.ndarray]:
        """Times of commands that every robot has (C,), and speed and curvature (N, C, 2)."""
        tables = [{command[0]: command for command in track.commands} for track in self._robots.values()]
        times = sorted(set.intersection(*(set(table) for table in tables)))
        rows = np.array([[table[when] for when in times] for table in tables]).reshape(len(tables), len(times), 3)
        return np.array(times), rows[:, :, 1:]

    def _end_poses(self) -> np.ndarray:
        asked = [self.ends.get(name, [None] * 3) for name in self._configuration.fleet.names]
        return np.array([[np.nan if value is None else value for value in end] for end in asked], dtype=float)

    def _frames(self, zero: float) -> tuple[RunFrame, ...]:
        names = self._configuration.fleet.names
        whole = [(when, plan) for when, plan in sorted(self._plans.items()) if set(plan) == set(names)]
        return tuple(
            RunFrame(when - zero, self._rate(when), np.stack([plan[name] for name in names])) for when, plan in whole
        )

    def _rate(self, when: float) -> float:
        return self._rates[min(self._rates, key=lambda known: abs(known - when))] if self._rates else 1.0


def _rest(times: np.ndarray, speeds: np.ndarray) -> float:
    """When the fleet came to rest."""
    moving = np.flatnonzero(np.abs(speeds).max(axis=0) > 1e-3)
    return float(times[moving[-1]] if len(moving) else times[-1])


class _Track:
    """One robot's states (time, x, y, heading, speed, curvature) and commands (time, speed, curvature)."""

    def __init__(self) -> None:
        self.states: list[tuple[float, ...]] = []
        self.commands: list[tuple[float, float, float]] = []
        self._curvature, self._true_curvature = 0.0, 0.0

    def on_state(self, message: Odometry) -> None:
        speed, turn_rate = message.twist.twist.linear.x, message.twist.twist.angular.z
        if speed:  # a twist at standstill does not tell the curvature: it is what it was
            self._true_curvature = turn_rate / speed
        stamp = messages.seconds(message.header.stamp)
        self.states.append((stamp, *_planar(message.pose.pose), speed, self._true_curvature))

    def on_curvature(self, message: Float64) -> None:
        self._curvature = message.data

    def on_motion(self, message: Any) -> None:
        """The curvature was sent just before."""
        twist = message.twist
        speed = twist.linear.x
        curvature = twist.angular.z / speed if speed else self._curvature
        self.commands.append((messages.seconds(message.header.stamp), speed, curvature))


def _planar(pose: Any) -> tuple[float, float, float]:
    return pose.position.x, pose.position.y, messages.heading(pose.orientation)
