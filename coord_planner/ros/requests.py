# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Requests of people and programs, by service and by message, each answered when it is decided."""

from __future__ import annotations

import functools
import time
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from rclpy.callback_groups import ReentrantCallbackGroup
from rclpy.task import Future
from std_srvs.srv import Trigger

from ..core.manoeuvre import Manoeuvre, TurnAway
from ..core.messages import Answer, Snapshot
from . import messages

if TYPE_CHECKING:
    from .planner_node import PlannerNode

Answered = Callable[[Answer], None]
_Ask = Callable[[Snapshot, Answered], None]

# Seconds after activation for which a request waits for fresh poses: who sends them may not be found yet, or just
# starts, and nothing was taken in while the planner listened for others.
_FINDING = 10.0
_AGAIN = 0.05  # seconds


class Requests:
    """Services of a planner, and whoever still waits for an answer."""

    def __init__(self, node: PlannerNode, manoeuvres: Mapping[str, Manoeuvre]) -> None:
        self._node = node
        self._waiting: set[Future] = set()
        self._unheard: set[Future] = set()  # wait for poses
        self._activated = time.monotonic()
        group = ReentrantCallbackGroup()  # a begin that waits for its answer must not hold up anything else
        self._services = [
            node.create_service(Trigger, f"~/begin/{name}", functools.partial(self._on_begin, name),
                                callback_group=group)
            for name in manoeuvres
        ]
        self._services += [
            node.create_service(Trigger, f"~/arm/{name}", functools.partial(self._on_arm, name))
            for name, manoeuvre in manoeuvres.items() if isinstance(manoeuvre, TurnAway)
        ]
        self._services.append(node.create_service(Trigger, "~/resume", self._on_resume, callback_group=group))
        self._services.append(node.create_service(Trigger, "~/halt", self._on_halt))
        self._services.append(node.create_service(Trigger, "~/abandon", self._on_abandon))

    def close(self) -> None:
        """Take the services off the node."""
        for service in self._services:
            self._node.destroy_service(service)

    def refuse_all(self, words: str) -> None:
        """Whoever still waits is refused."""
        for future in list(self._waiting):
            self._settle(future, Answer(False, words))

    def open(self) -> None:
        """The planner is active from now on."""
        self._activated = time.monotonic()

    def call_off(self, words: str) -> None:
        """Whoever still waits for poses is refused: the fleet was halted meanwhile."""
        for future in list(self._unheard):
            self._settle(future, Answer(False, words))

    def begin(self, request: messages.Request) -> Future:
        """Ask for a manoeuvre; the future gets its Answer."""
        def ask(snapshot: Snapshot, answered: Answered) -> None:
            coordinator = self._node.coordinator
            begin = coordinator.then if request.next else coordinator.begin
            begin(request.manoeuvre, snapshot, overrides=request.overrides, request_id=request.id, answered=answered)

        return self._ask(ask, request.id)

    async def _on_begin(self, name: str, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, await self.begin(messages.Request("", name)))

    async def _on_resume(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        def ask(snapshot: Snapshot, answered: Answered) -> None:
            self._node.coordinator.resume(snapshot, answered)

        return _filled(response, await self._ask(ask))

    def _on_arm(self, name: str, _request: Any, response: Trigger.Response) -> Trigger.Response:
        refusal = self._node.refusal()
        answer = Answer(False, refusal) if refusal else self._node.coordinator.arm(name, self._node.time())
        return _filled(response, self._node.reporter.note(answer))

    def _on_halt(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, self._node.reporter.note(self._node.halt("told to by the halt service")))

    def _on_abandon(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, self._node.reporter.note(self._node.coordinator.abandon(self._node.time())))

    def _ask(self, ask: _Ask, request_id: str = "") -> Future:
        future: Future = Future(executor=self._node.executor)
        self._waiting.add(future)
        self._put(future, ask, request_id)
        return future

    def _put(self, future: Future, ask: _Ask, request_id: str) -> None:
        if future not in self._waiting:
            return
        refusal, snapshot = self._node.refusal(), self._node.snapshot()
        if snapshot is None or refusal:
            self._settle(future, Answer(False, refusal, request_id))
        elif time.monotonic() - self._activated < _FINDING and not self._all_fresh(snapshot):
            self._unheard.add(future)
            self._later(functools.partial(self._put, future, ask, request_id))
        else:
            self._unheard.discard(future)
            ask(snapshot, lambda answer: self._node.post(functools.partial(self._settle, future, answer)))
            self._node.collect()
            self._node.reporter.report()

    def _all_fresh(self, snapshot: Snapshot) -> bool:
        oldest = snapshot.time - self._node.configuration.settings.poses.max_age
        names, poses = self._node.coordinator.fleet.names, snapshot.poses
        return all(name in poses and poses[name].stamp > oldest for name in names)

    def _later(self, again: Callable[[], None]) -> None:
        def fire() -> None:
            self._node.destroy_timer(timer)
            again()

        timer = self._node.create_timer(_AGAIN, fire, clock=self._node.steady)

    def _settle(self, future: Future, answer: Answer) -> None:
        self._unheard.discard(future)
        if future in self._waiting:
            self._waiting.discard(future)
            future.set_result(answer)
            self._node.reporter.note(answer)


def _filled(response: Trigger.Response, answer: Answer) -> Trigger.Response:
    response.success, response.message = answer.ok, answer.text
    return response
