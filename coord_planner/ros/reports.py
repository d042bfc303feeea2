# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Status and diagnostics in words and figures."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any, Optional

import attrs
import numpy as np
from diagnostic_msgs.msg import DiagnosticStatus, KeyValue

from ..config import Configuration
from ..core.messages import Answer, Decision, Level, PoseSample, State
from . import outgoing
from .inbox import Inbox
from .messages import Tallies
from .readiness import Readiness


@attrs.frozen
class Change:
    """A change that was asked for while the planner runs, and when the plan took it up.

    Attributes:
        text: what was changed. asked, in_force: seconds; ``in_force`` is None while the plan is being made anew.
    """

    text: str
    asked: float
    in_force: Optional[float] = None

    def __str__(self) -> str:
        if self.in_force is None:
            return f"{self.text}: asked for at {self.asked:.3f} s, not in force yet"
        return f"{self.text}: in force since {self.in_force:.3f} s"


@attrs.frozen
class Situation:
    """All that a report is made of.

    Attributes:
        node: fully qualified name of the node. active: whether its lifecycle state is active.
        now: seconds on the clock of the stamps; 0 while there is none. time: planner time, seconds.
        state: of the fleet. decision: the newest. answer: to the newest request. change: the newest.
        ends: asked ends of the manoeuvre in hand, shape (N, 3), NaN where nothing is asked; None without one.
        tick_ms: wall time of the last tick. overruns: ticks left out.
        trouble: what went wrong in the node itself ("" for nothing). inactive: why it did not become active.
    """

    node: str
    configuration: Configuration
    active: bool
    now: float
    time: float
    state: State
    decision: Decision
    answer: Optional[Answer] = None
    change: Optional[Change] = None
    ends: Optional[np.ndarray] = None
    tick_ms: float = 0.0
    overruns: int = 0
    trouble: str = ""
    inactive: str = ""


def status(at: Situation) -> DiagnosticStatus:
    """The message on ``~/status``."""
    decision, answer = at.decision, at.answer
    asked = at.configuration.settings.coupling
    planned = bool(decision.manoeuvre)
    coupling = decision.coupling if planned else asked.strength
    alignment = decision.alignment if planned else asked.alignment
    values = {
        "state": at.state.value, "active": at.active, "manoeuvre": decision.manoeuvre,
        "progress": f"{decision.progress:.4f}", "progress_rate": f"{decision.progress_rate:.3f}",
        "reason": decision.reason or at.trouble,
        "coupling": f"{coupling:.6g}", "alignment": f"{alignment:.6g}",
        "coupling_asked": f"{asked.strength:.6g}", "alignment_asked": f"{asked.alignment:.6g}",
        "change": "" if at.change is None else str(at.change),
        "change_in_force": at.change is None or at.change.in_force is not None,
        "request_id": "" if answer is None else answer.request_id,
        "request_ok": "" if answer is None else answer.ok,
        "request_text": "" if answer is None else answer.text,
        "clearance_m": f"{decision.clearance:.3f}",
        "clearance_pair": " and ".join(decision.clearance_pair or ()),
        "tick_ms": f"{at.tick_ms:.2f}", "ticks_left_out": at.overruns,
        "warnings": outgoing.cautions_text(decision.warnings),
        "completed": decision.completed, "ends": _ends_text(at), "outside": " ".join(decision.outside),
        "stamp": f"{at.now:.3f}",
    }
    level, words = _summary(at)
    return _message(f"{at.node}: status", at.configuration.fleet_name, level, words, values)


def _ends_text(at: Situation) -> str:
    """Asked ends as JSON: {robot: [x, y, heading]}, null where nothing is asked; {} without a manoeuvre."""
    if at.ends is None:
        return "{}"
    rows = [[float(value) if math.isfinite(value) else None for value in row] for row in at.ends]
    return json.dumps(dict(zip(at.decision.names, rows)))


def diagnostics(at: Situation, inbox: Inbox) -> list[DiagnosticStatus]:
    """Everything for ``/diagnostics``: the fleet, each warning, each robot, each kind of message."""
    level, words = _summary(at)
    values = {
        "state": at.state.value, "active": at.active, "tick_ms": f"{at.tick_ms:.2f}",
        "ticks_left_out": at.overruns, "trouble": at.trouble,
    }
    found = [_message(f"{at.node}: fleet", at.configuration.fleet_name, level, words, values), _of_coupling(at)]
    for caution in at.decision.warnings:
        found.append(_message(f"{at.node}: {caution.code}", caution.subject, caution.level, caution.text, {}))
    poses = inbox.poses()
    for name in at.configuration.fleet.names:
        found.append(_of_poses(at, name, poses.get(name), inbox.tallies))
    found += [_of_readiness(at, name, inbox.readiness) for name in inbox.readiness.names]
    for topic in ("neighbours", "hazard", "request", "heartbeat"):
        found.append(_of_messages(at, f"{topic} messages", topic, inbox.tallies))
    return found


def _of_coupling(at: Situation) -> DiagnosticStatus:
    """How strongly robots copy each other, as asked and as it is in force, and how far their headings are apart."""
    asked, decision = at.configuration.settings.coupling, at.decision
    planned = bool(decision.manoeuvre)
    coupling = decision.coupling if planned else asked.strength
    alignment = decision.alignment if planned else asked.alignment
    driven = [k for k, name in enumerate(decision.names) if name not in decision.outside and k < len(decision.poses)]
    headings = np.degrees(decision.poses[driven, 2]) if driven else np.zeros(0)
    headings = headings[np.isfinite(headings)]
    values = {
        "coupling": f"{coupling:.6g}", "coupling_asked": f"{asked.strength:.6g}", "alignment": f"{alignment:.6g}",
        "alignment_asked": f"{asked.alignment:.6g}", "change": "" if at.change is None else str(at.change),
        "heading_spread_deg": f"{np.ptp(headings):.2f}" if len(headings) else "",
    }
    waiting = at.change is not None and at.change.in_force is None
    words = f"coupling {coupling:g}" + (f", {asked.strength:g} asked for and not in force yet" if waiting else "")
    return _message(f"{at.node}: coupling", at.configuration.fleet_name, Level.OK, words, values)


def _summary(at: Situation) -> tuple[Level, str]:
    if at.now <= 0.0:
        return Level.WARN, "no clock yet: use_sim_time is set and nothing has come on /clock"
    if not at.active:
        if at.inactive:
            return Level.WARN, f"not active: {at.inactive}"
        return Level.OK, "not active: nothing is planned"
    if at.trouble:
        return Level.ERROR, at.trouble
    worst = max((caution.level for caution in at.decision.warnings), default=Level.OK)
    return worst, f"{at.state.value}: {at.decision.reason}" if at.decision.reason else at.state.value


def _of_poses(at: Situation, name: str, pose: Optional[PoseSample], tallies: Tallies) -> DiagnosticStatus:
    message = _of_messages(at, f"poses of {name}", name, tallies)
    limit = at.configuration.settings.poses.max_age
    age = math.inf if pose is None else at.time - pose.stamp
    message.values.append(KeyValue(key="age_s", value=f"{age:.3f}"))
    if message.level != DiagnosticStatus.OK:
        return message
    if pose is None:
        message.level, message.message = _level(Level.WARN), "no pose has come yet"
    elif age > limit:
        message.level = _level(Level.STALE)
        message.message = f"the newest pose is {age:.2f} s old, poses.max_age is {limit:g} s"
    return message


def _of_readiness(at: Situation, name: str, readiness: Readiness) -> DiagnosticStatus:
    level, words = Level.OK, "ready to be driven"
    if name in readiness.silent():
        level, words = Level.STALE, "does not say that it is ready to be driven"
    elif name in readiness.not_ready():
        level, words = Level.WARN, "not ready to be driven"
    values = {"age_s": f"{readiness.silence(name):.3f}"}
    return _message(f"{at.node}: readiness of {name}", name, level, words, values)


def _of_messages(at: Situation, what: str, source: str, tallies: Tallies) -> DiagnosticStatus:
    tally = tallies.of(source)
    troubled = tallies.troubled(source, at.time)
    last = tally.last.text if tally.last is not None else ""
    values: dict[str, Any] = {"used": tally.used, "ignored": tally.total_ignored, "last_ignored": last}
    values |= {f"ignored: {why}": count for why, count in sorted(tally.ignored.items())}
    words = f"a message was ignored, {last}" if troubled else "fine"
    return _message(f"{at.node}: {what}", source, Level.WARN if troubled else Level.OK, words, values)


def _message(name: str, hardware: str, level: Level, words: str, values: Mapping[str, Any]) -> DiagnosticStatus:
    pairs = [KeyValue(key=key, value=_word(value)) for key, value in values.items()]
    return DiagnosticStatus(name=name, hardware_id=hardware, level=_level(level), message=words, values=pairs)


def _word(value: Any) -> str:
    return str(value).lower() if isinstance(value, bool) else str(value)


def _level(level: Level) -> bytes:
    return bytes([int(level)])
