# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The planner as a ROS 2 lifecycle node: ROS at the rim, every decision in ``core.coordinator``."""

from __future__ import annotations

import contextlib
import functools
import math
import sys
import time
import uuid
from collections import deque
from collections.abc import Callable, Sequence
from typing import Any, Optional

from rclpy.clock import Clock
from rclpy.clock_type import ClockType
from rclpy.exceptions import InvalidHandle
from rclpy.executors import SingleThreadedExecutor
from rclpy.lifecycle import LifecycleNode, LifecycleState, TransitionCallbackReturn
from rclpy.logging import get_logger

from .. import config
from ..config.failures import kept
from ..core.coordinator import Coordinator
from ..core.fast.ticks import TickSolve
from ..core.graph import NeighbourGraph
from ..core.messages import Answer, Decision, Snapshot, State
from ..trial.kernels import load_kernels
from . import heartbeats, messages, parameters
from .changes import Changes
from .ending import Ending
from .heartbeats import Heartbeats
from .inbox import Inbox
from .others import OtherPlanners
from .outbox import Outbox
from .reporter import Reporter
from .requests import Requests
from .spinning import Signals, run, spin
from .timekeeper import Timekeeper
from .transitions import answer_invalid_transitions, logged
from .worker import Worker

_MOVING = (State.PLANNING, State.MOVING, State.STOPPING)
_LAST_WORD = 0.3  # seconds that a last command may take to arrive
_SILENCE = 2.0  # seconds without a decision in motion after which the fleet is halted


class PlannerNode(LifecycleNode):
    """Callbacks only store; a worker thread solves; timers send commands and reports.

    Args:
        arguments: the command line, to name the parameter file in error messages.

    Raises:
        SettingsError: the parameters cannot be used.
    """

    def __init__(self, arguments: Sequence[str] = ()) -> None:
        super().__init__("planner")
        flat = parameters.given(self)
        configuration = config.from_parameters(flat, parameters.files(arguments))
        parameters.declare(self, flat)
        self._live = parameters.LiveParameters(self, configuration, self._cannot_take, self._on_parameters)
        answer_invalid_transitions(self)
        self.signalled = False  # a transition to the end of the node's life: the same as a first signal
        self.run_id = uuid.uuid4().hex[:12]
        self._timekeeper = Timekeeper(self.now, bool(self.get_parameter("use_sim_time").value))
        self.steady = Clock(clock_type=ClockType.STEADY_TIME)
        self._leaving = ""
        self.active, self._configured = False, False
        self._mail: deque[Callable[[], None]] = deque()
        self.changes = Changes(self)
        self.graph = configuration.graph
        self._closing = contextlib.ExitStack()  # undoes on_configure
        self._running: list[Any] = []
        self.reporter = Reporter(self)

    @property
    def configuration(self) -> config.Configuration:
        """In force now."""
        return self._live.configuration

    @property
    def coordinator(self) -> Coordinator:
        """What decides."""
        return self._coordinator

    @property
    def other_planner(self) -> str:
        """Who else drives this fleet, in words; "" when nobody is heard."""
        return self._others.newest

    @property
    def overruns(self) -> int:
        """Ticks that were left out."""
        return self._worker.overruns

    @property
    def simulated_time(self) -> bool:
        """Whether the clock of the stamps is a simulated one."""
        return self._timekeeper.simulated

    def now(self) -> float:
        """Seconds on the clock of the stamps; 0 while a simulated clock has not begun."""
        return float(self.get_clock().now().nanoseconds) * 1e-9

    def time(self) -> float:
        """Planner time, seconds; 0 while a simulated clock has not begun."""
        return self._timekeeper.time()

    def stamp_of(self, time: float) -> float:
        """The stamp of a moment of planner time; seconds."""
        return self._timekeeper.stamp_of(time)

    # Lifecycle

    @logged
    def on_configure(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self.graph = self.configuration.graph
        with contextlib.ExitStack() as made:  # closes what is there already, should the rest not come about
            self._make(made)
            self._closing = made.pop_all()
        self._configured = True
        self.outbox.tell_neighbours(self.graph, self.now())
        self.reporter.tell()
        return TransitionCallbackReturn.SUCCESS

    def _make(self, made: contextlib.ExitStack) -> None:
        self.outbox = Outbox(self, self.configuration)
        made.callback(self.outbox.close, self)
        self.inbox = Inbox(
            self, lambda: self.configuration, self.now, self.time, neighbours=self._on_neighbours,
            halt=lambda: self.reporter.note(self.halt("told to by a message on 'halt'")),
            request=lambda request: self._requests.begin(request), trouble=self._on_trouble,
        )
        made.callback(self.inbox.close, self)
        topics = self.outbox.command_topics if self.configuration.settings.commands.publish else ()
        name = self.get_fully_qualified_name()
        self._others = OtherPlanners(
            messages.Beat(self.configuration.fleet_name, self.run_id, name, frozenset(topics))
        )
        self._heartbeats = Heartbeats(self, self._others, functools.partial(self.inbox.ignore, "heartbeat"))
        made.callback(self._heartbeats.close)
        self._requests = Requests(self, self.configuration.manoeuvres)
        made.callback(self._requests.close)
        self._bell = self.create_guard_condition(self._open_mail)
        made.callback(self.destroy_guard_condition, self._bell)
        self._start_coordinator()
        made.callback(lambda: self._worker.close())
        for period, body in ((1.0, self._on_second), (1.0 / heartbeats.RATE, self._beat)):
            made.callback(self.destroy_timer, self.create_timer(period, body, clock=self.steady))

    @logged
    def on_activate(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self._heartbeats.listen(self.configuration.listen_time)
        other = self._others.newest
        self.reporter.inactive = f"{other} drives this fleet; deactivate it first" if other else ""
        if other:
            self.get_logger().error(f"not activated: {self.reporter.inactive}")
            self.reporter.tell()
            return TransitionCallbackReturn.FAILURE
        self._look()
        self._renew()
        settings = self.configuration.settings
        # When the system's clock is set back, timers that go by it stand still.
        clock = None if self.simulated_time else self.steady
        self._running = [
            self.create_timer(1.0 / settings.horizon.rate, self._tick, clock=clock),
            self.create_timer(1.0 / settings.commands.rate, self._send, clock=clock),
        ]
        self.active = True
        self._requests.open()
        self._beat()
        self.reporter.tell()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_deactivate(self, _state: LifecycleState) -> TransitionCallbackReturn:
        if self._coordinator.state in _MOVING:
            answer = self.halt("told to deactivate in motion")
            self.get_logger().error(f"not deactivated: the fleet is in motion. It is stopped instead ({answer.text}); "
                                    "deactivate again when it stands")
            return TransitionCallbackReturn.FAILURE
        self._rest()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_cleanup(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self._configured = False
        self._closing.close()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_shutdown(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self.signalled = True  # the fleet is stopped first, as after a signal
        return TransitionCallbackReturn.SUCCESS

    def _rest(self) -> None:
        """Stop ticking and sending."""
        self.active = False
        for timer in self._running:
            self.destroy_timer(timer)
        self._renew()
        self.reporter.tell()

    def _renew(self) -> None:
        """A coordinator that knows of nothing yet, with a worker of its own; whoever still waits is told so."""
        self._worker.close()
        self._requests.refuse_all("the planner began anew before this was decided")
        self._start_coordinator()

    def _start_coordinator(self) -> None:
        now = self.configuration
        solve, refused = kept(
            now.failures, TickSolve(time.monotonic), now.settings.site_rules.min_clearance,
            lambda words: self.post(functools.partial(self.reporter.say, words)),
        )
        self._coordinator = Coordinator(
            now.driven, self.graph.relative_to(now.driven.names), now.settings, now.manoeuvres, solve=solve,
            refused=refused,
        )
        self._worker = Worker(
            self._coordinator, snapshot=self.snapshot, now=self.time,
            decided=lambda decision, ms: self.post(functools.partial(self._on_decision, decision, ms)),
            failed=lambda words, details: self.post(functools.partial(self.fail, words, details)),
        )
        self._sent_at = math.inf  # planner time of the last commands; nothing was sent yet
        self.changes.forget()
        self.reporter.forget()

    # Timers

    def _tick(self) -> None:
        self._look()
        if self.now() > 0.0:
            self._worker.tick()

    def _send(self) -> None:
        self._look()
        if self.now() <= 0.0:
            return
        now = self.time()
        self._check_silence(now)
        unplanned = now - self._coordinator.decision.time
        if self._coordinator.state is State.MOVING and unplanned > _SILENCE:
            self.reporter.note(self.halt(f"no new plan for {unplanned:.1f} s"))
        commands = self._coordinator.commands(now)
        if commands is not None:
            self.outbox.send(commands, self.stamp_of(now))
            self._sent_at = now

    def _check_silence(self, now: float) -> None:
        """A planner that was held up must not drive on robots that have stopped by themselves meanwhile."""
        silence = now - self._sent_at
        late = silence > 2.0 / self.configuration.settings.commands.rate
        if late and self._coordinator.state in (State.MOVING, State.STOPPING):
            stood = self.outbox.stand_by_themselves(silence, self.configuration.fleet)
            if stood:
                self._begin_anew(f"the planner was held up for {silence:.1f} s; {', '.join(stood)} stopped alone")

    def _beat(self) -> None:
        self._heartbeats.look()
        if self.active:
            self._heartbeats.beat()

    def _on_second(self) -> None:
        self._look()
        self.reporter.tell()

    def _look(self) -> None:
        """See whether the clock has jumped, and act on it."""
        jump = self._timekeeper.look()
        if not jump:
            return
        words = f"the clock jumped {'ahead' if jump > 0.0 else 'back'} by {abs(jump):.2f} s"
        self.reporter.clock_jumped(jump)
        if self.simulated_time:
            self.inbox.forget()
            self._begin_anew(words)
            return
        self.get_logger().error(f"{words}; see that it is synchronised, and that nobody sets it while robots move")
        self.inbox.clock_jumped(jump)
        if self.active and self._coordinator.state in _MOVING:
            self.reporter.note(self.halt(words))

    def _begin_anew(self, words: str) -> None:
        self._renew()
        self.get_logger().error(f"{words}: everything begins anew, nothing is driven")
        self.reporter.begun_anew(words)

    # What the worker found

    def post(self, action: Callable[[], None]) -> None:
        """Let the executor's thread do something; from any thread."""
        self._mail.append(action)
        with contextlib.suppress(InvalidHandle):  # cleaned up meanwhile
            self._bell.trigger()

    def _open_mail(self) -> None:
        while self._mail:
            self._mail.popleft()()

    def _on_decision(self, decision: Decision, tick_ms: float) -> None:
        self.changes.follow(decision)
        if self.configuration.settings.neighbours.source != "listed":
            self._follow_neighbours(self._coordinator.graph)
        self.reporter.decided(decision, tick_ms)

    def fail(self, words: str, details: str = "") -> None:
        """Something in the planner itself went wrong: say so, and bring the fleet to a stand."""
        self.reporter.trouble(words, details)
        if not self._configured:
            return
        if self.active and self._coordinator.state in _MOVING:
            self.halt(words)
        self._requests.refuse_all(f"{words}; this is a mistake in the planner, see its log")
        self.reporter.report()

    # What requests need

    def refusal(self) -> str:
        """Why nothing can be asked just now; "" when it can."""
        self._look()
        if self._leaving:
            return "refused: the planner is ending; start it again"
        if not self.active:
            return "refused: the planner is not active; activate it first"
        if self.now() <= 0.0:
            return "refused: there is no clock yet; see that something publishes /clock, or set use_sim_time to false"
        return ""

    def snapshot(self) -> Optional[Snapshot]:
        """What is known now; None while there is no clock. From any thread."""
        now = self.time()
        if now <= 0.0:
            return None
        readiness = self.inbox.readiness
        return Snapshot(now, self.inbox.poses(), readiness.not_ready(), readiness.silent(), self._others.newest,
                        self.inbox.hazard)

    def halt(self, reason: str) -> Answer:
        """Stop the fleet."""
        self._requests.call_off("the fleet was halted")
        answer: Answer = self._coordinator.halt(self.time(), reason)
        self.collect()
        return answer

    def collect(self) -> None:
        """Let the worker take what the coordinator wants done."""
        self._worker.collect()

    # Changes

    def _cannot_take(self, configuration: config.Configuration) -> str:
        if not self._configured or configuration.enabled == self.configuration.enabled:
            return ""
        return self._coordinator.cannot_join(configuration.driven, self.graph)

    def _on_parameters(self, configuration: config.Configuration, keys: tuple[str, ...]) -> None:
        words = ", ".join(f"{key} = {self.get_parameter(key).value}" for key in keys)
        self.reporter.say(f"changed: {words}")
        if self._configured:
            self.changes.make(
                words, settings=configuration.settings, fleet=configuration.driven, graph=self.graph
            )

    def _follow_neighbours(self, graph: NeighbourGraph) -> None:
        """The coordinator has found other neighbours from the poses."""
        if graph.edges != self.graph.edges:
            self.graph = graph
            self.outbox.tell_neighbours(graph, self.now())

    def _on_neighbours(self, graph: NeighbourGraph) -> None:
        source = self.configuration.settings.neighbours.source
        if source != "listed":
            self.get_logger().warning(f"ignored neighbours that were sent: neighbours.source is {source}")
            return
        if graph.edges != self.graph.edges:
            self.graph = graph
            self.changes.make("neighbours", graph=graph)
            self.outbox.tell_neighbours(graph, self.now())

    def _on_trouble(self, source: str, error: messages.IgnoredError) -> None:
        self.get_logger().warning(f"ignored a message of {source}: {error}")
        self.reporter.report()

    # The end

    def begin_stop(self) -> None:
        """Ramp a stop in step; nothing is begun any more."""
        self._leaving = "the planner is ending"
        if self.active and self._coordinator.state in _MOVING:
            self.reporter.note(self.halt("the planner was told to end"))

    @property
    def standing(self) -> bool:
        """Whether the fleet needs this node no longer."""
        return not self.active or self._coordinator.state not in _MOVING

    def longest_stop(self) -> float:
        """Seconds that a stop in step can take at most, with room for delays."""
        fleet = self.configuration.fleet
        return float(fleet.limit("max_speed").max() / fleet.limit("max_braking").min()) + 5.0

    def last_word(self) -> None:
        """Zeros to everyone, if this node holds the fleet, and nothing after them."""
        if self.active and self._coordinator.state.holds_fleet:
            self.outbox.send_zeros(self.now(), _LAST_WORD)
        if self.active:
            self._rest()


def _body(arguments: Sequence[str], signals: Signals) -> int:
    load_kernels(get_logger("planner").info)  # before there is a node that others wait for
    node = PlannerNode(arguments)
    executor = SingleThreadedExecutor()
    executor.add_node(node)
    if node.configuration.activate_on_start:
        begun = node.trigger_configure() == TransitionCallbackReturn.SUCCESS and node.trigger_activate()
        if begun != TransitionCallbackReturn.SUCCESS and not node.reporter.inactive:
            return 2
    return spin(executor, node, after=Ending(node, signals), failed=node.fail)


def main(arguments: Optional[Sequence[str]] = None) -> int:
    """Run the planner until a signal ends it; returns the exit status."""
    return run(arguments, _body)


if __name__ == "__main__":
    sys.exit(main())
