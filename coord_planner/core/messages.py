# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What goes into the coordinator and what comes out of it, without any middleware."""

from __future__ import annotations

from collections.abc import Mapping
from enum import Enum
from typing import Optional

import attrs
import numpy as np


@attrs.frozen
class PoseSample:
    """A measured pose in the fleet's frame.

    Attributes:
        stamp: seconds on the clock that stamps commands and poses.
        x, y: metres. heading: radians, anticlockwise from the x axis, wrapped or not.
    """

    stamp: float
    x: float
    y: float
    heading: float


@attrs.frozen
class HazardPoint:
    """Something to keep away from, in the fleet's frame, metres; ``heard``: seconds on the clock of the snapshots."""

    x: float
    y: float
    heard: float


@attrs.frozen
class Command:
    """What one robot is asked for: speed (m/s, forward positive) and curvature (1/m, left positive)."""

    speed: float
    curvature: float

    @property
    def turn_rate(self) -> float:
        """Turn rate, rad/s, anticlockwise positive."""
        return self.speed * self.curvature


@attrs.frozen
class Snapshot:
    """Everything one tick depends on that comes from outside.

    Attributes:
        time: now, seconds on the same clock as the stamps.
        poses: the newest pose of each robot that has sent one; others are absent.
        not_ready: robots that say that they may not be driven now (emergency stop, manual mode).
        silent: robots that must say that they are ready and have fallen silent.
        hazard: the newest point that is to be kept away from; None when there was none.
        other_planner: who else drives this fleet, as it calls itself; "" when nobody is heard.
    """

    time: float
    poses: Mapping[str, PoseSample]
    not_ready: frozenset[str] = frozenset()
    silent: frozenset[str] = frozenset()
    other_planner: str = ""
    hazard: Optional[HazardPoint] = None


class State(str, Enum):
    """What the fleet is doing as a whole."""

    IDLE = "idle"  # nothing asked, nothing sent
    PLANNING = "planning"  # a reference is being made; nothing moves yet
    MOVING = "moving"
    STOPPING = "stopping"  # a controlled stop is under way
    HELD = "held"  # standing still in the middle of a manoeuvre until a person resumes or abandons it
    ENDED = "ended"  # the manoeuvre is done; zeros are sent for a moment

    @property
    def holds_fleet(self) -> bool:
        """True while commands are published."""
        return self in (State.MOVING, State.STOPPING, State.HELD, State.ENDED)


class Level(int, Enum):
    """Severity, with the numbers of diagnostic_msgs/DiagnosticStatus."""

    OK = 0
    WARN = 1
    ERROR = 2
    STALE = 3


@attrs.frozen
class Caution:
    """One thing that is going wrong now.

    Attributes:
        code: a short fixed word pair for machines, e.g. ``robot not following``.
        subject: the robot, or two robots joined by `` and ``, or "" for the fleet.
        level: severity.
        text: the figure, its limit, what the fleet does about it and the deferral to the site's rules.
    """

    code: str
    subject: str
    level: Level
    text: str


@attrs.frozen
class Decision:
    """What one tick decided.

    Attributes:
        time: of the snapshot, seconds.
        state: what the fleet is doing.
        names: the robots, in the order of every array here.
        reason: why, in words ("" when there is nothing to say).
        manoeuvre: name of the one in hand, or "".
        progress: part of the manoeuvre done, 0 to 1.
        progress_rate: how fast the group moves along its reference, 1 = as planned.
        coupling, alignment: the values in force in the plan.
        poses: estimated poses now, shape (N, 3); NaN rows for robots never heard of.
        plan_times: times of the plan's nodes, shape (M + 1,), seconds; empty when nothing is planned.
        plan_poses: planned poses, shape (N, M + 1, 3).
        clearance: smallest exact clearance over the plan, metres (inf when there is no pair).
        clearance_pair: the two robots that come nearest.
        lag: how far each robot is behind its reference, shape (N,), metres.
        solve_time: seconds spent optimising in this tick.
        completed: the last manoeuvre was carried through to its end.
        warnings: what is going wrong now.
        outside: robots that are obstacles only: they leave, or stand and wait to join.
    """

    time: float
    state: State
    names: tuple[str, ...] = ()
    reason: str = ""
    manoeuvre: str = ""
    progress: float = 0.0
    progress_rate: float = 0.0
    coupling: float = 0.0
    alignment: float = 0.0
    poses: np.ndarray = attrs.field(factory=lambda: np.zeros((0, 3)))
    plan_times: np.ndarray = attrs.field(factory=lambda: np.zeros(0))
    plan_poses: np.ndarray = attrs.field(factory=lambda: np.zeros((0, 0, 3)))
    clearance: float = float("inf")
    clearance_pair: Optional[tuple[str, str]] = None
    lag: np.ndarray = attrs.field(factory=lambda: np.zeros(0))
    solve_time: float = 0.0
    completed: bool = False
    warnings: tuple[Caution, ...] = ()
    outside: tuple[str, ...] = ()


@attrs.frozen
class Answer:
    """Answer to a request: begun, refused, stopped, changed."""

    ok: bool
    text: str
    request_id: str = ""
