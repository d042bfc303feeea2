# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a planner tells people and programs: its log, ``~/status``, ``/diagnostics``, plans and markers."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Any, Optional

import attrs

from ..core import rules
from ..core.messages import Answer, Caution, Decision, State
from . import reports
from .allowance import Allowance

if TYPE_CHECKING:
    from .planner_node import PlannerNode

_BURST = 20  # answers that are logged, and reports that are sent, at once
_LOG_RATE, _REPORT_RATE = 2.0, 20.0  # a second after that
_CLOCK_NEWS = 10.0  # seconds for which a jump of the clock is warned of
_POSE_NEWS = 1.0  # seconds for which a pose that could not be used is warned of


class Reporter:
    """Tells what is news at once, and everything once a second; a flood of requests is told in part."""

    def __init__(self, node: PlannerNode) -> None:
        self._node = node
        self._to_log, self._to_report = Allowance(_BURST, _LOG_RATE), Allowance(_BURST, _REPORT_RATE)
        self._jump: Optional[tuple[float, float]] = None  # when, steady seconds, and by how much the clock jumped
        self.inactive = ""  # why the planner did not become active
        self.forget()

    def forget(self) -> None:
        """Nothing was told yet, and nothing is wrong."""
        self._tick_ms, self._trouble, self._anew = 0.0, "", ""
        self._told: tuple[Any, ...] = ()
        self._answer: Optional[Answer] = None

    def say(self, words: str) -> None:
        """Log something, if not too much is logged already."""
        if self._to_log.take():
            self._node.get_logger().info(words)

    def note(self, answer: Answer) -> Answer:
        """Log an answer and put it on ``~/status``."""
        self._answer = answer
        if answer.ok:
            self.say(answer.text)
        elif self._to_log.take():  # rclpy holds one severity for each line that logs
            self._node.get_logger().warning(answer.text)
        self._node.collect()
        self.report()
        return answer

    def trouble(self, words: str, details: str = "") -> None:
        """Something in the planner itself went wrong."""
        self._node.get_logger().error(f"{words}\n{details}".rstrip(), throttle_duration_sec=1.0)
        self._trouble = words

    def begun_anew(self, words: str) -> None:
        """Why nothing of before counts any more; told until something is begun."""
        self._anew = f"{words}; everything began anew"
        self.report()

    def clock_jumped(self, jump: float) -> None:
        """The clock of the stamps was set; seconds."""
        self._jump = (time.monotonic(), jump)

    def report(self) -> None:
        """Tell how things are. What a flood leaves out here is told by the next second's report."""
        if self._to_report.take():
            self.tell()

    def tell(self) -> None:
        """Status and diagnostics."""
        at = self._situation()
        self._node.outbox.tell(reports.status(at), reports.diagnostics(at, self._node.inbox), at.now)

    def decided(self, decision: Decision, tick_ms: float) -> None:
        """A tick is done."""
        self._tick_ms = tick_ms
        node, whole = self._node, self._with_own(decision)
        ahead = node.stamp_of(whole.time) - whole.time
        node.outbox.show(
            attrs.evolve(whole, time=whole.time + ahead, plan_times=whole.plan_times + ahead),
            node.configuration, node.graph,
        )
        codes = tuple((caution.code, caution.subject) for caution in whole.warnings)
        news = (whole.state, whole.reason, whole.manoeuvre, node.changes.newest, codes)
        if news != self._told:
            self._told = news
            self.report()
        elif whole.state.holds_fleet:
            node.outbox.tell(reports.status(self._situation()), (), node.now())

    def _situation(self) -> reports.Situation:
        node = self._node
        planner, decision = node.coordinator, node.coordinator.decision
        if self._anew and planner.state is State.IDLE and not decision.reason:
            decision = attrs.evolve(decision, reason=self._anew)
        if planner.state is State.PLANNING or (planner.state is State.MOVING and decision.state is not State.MOVING):
            # It speaks of the manoeuvre before.
            decision = attrs.evolve(decision, manoeuvre="", progress=0.0, progress_rate=0.0, completed=False)
        return reports.Situation(
            node=node.get_fully_qualified_name(), configuration=node.configuration, active=node.active,
            now=node.now(), time=node.time(), state=planner.state, decision=self._with_own(decision),
            ends=planner.ends, answer=self._answer, change=node.changes.newest, tick_ms=self._tick_ms,
            overruns=node.overruns, trouble=self._trouble, inactive=self.inactive,
        )

    def _with_own(self, decision: Decision) -> Decision:
        """A decision with the node's own cautions beside the coordinator's."""
        there = {(caution.code, caution.subject) for caution in decision.warnings}
        own = tuple(caution for caution in self._own() if (caution.code, caution.subject) not in there)
        return attrs.evolve(decision, warnings=decision.warnings + own)

    def _own(self) -> list[Caution]:
        """What only this node can see: a coordinator gets no message that cannot be used, and time that runs evenly."""
        node, settings, found = self._node, self._node.configuration.settings, []
        if self._jump is not None and time.monotonic() - self._jump[0] <= _CLOCK_NEWS:
            found.append(rules.clock_jumped(settings, self._jump[1]))
        if node.active and node.other_planner:
            found.append(rules.other_planner(settings, node.other_planner))
        for name in node.configuration.driven.names:
            last = node.inbox.tallies.of(name).last
            if last is None or node.time() - last.when > _POSE_NEWS:
                continue
            if last.why in ("not a number", "not a rotation"):
                found.append(rules.pose_invalid(settings, name))
            elif last.why == "from the future":
                found.append(rules.clock_offset(settings, name, last.figure))
        return found
