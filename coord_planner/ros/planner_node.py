"""The planner as a ROS 2 lifecycle node: ROS at the rim, every decision in ``core.coordinator``."""

from __future__ import annotations

import contextlib
import functools
import sys
import time
from collections import deque
from collections.abc import Callable, Sequence
from typing import Any, Optional

import attrs
from rclpy.callback_groups import ReentrantCallbackGroup
from rclpy.clock import Clock
from rclpy.clock_type import ClockType
from rclpy.exceptions import InvalidHandle
from rclpy.executors import SingleThreadedExecutor
from rclpy.lifecycle import LifecycleNode, LifecycleState, TransitionCallbackReturn
from rclpy.task import Future
from std_srvs.srv import Trigger

from .. import config
from ..core.coordinator import Coordinator
from ..core.fast.ticks import TickSolve
from ..core.graph import NeighbourGraph
from ..core.messages import Answer, Decision, Snapshot, State
from ..core.reference import Reference
from . import messages, parameters, reports
from .ending import Ending
from .inbox import Inbox
from .outbox import Outbox
from .spinning import Signals, run, spin
from .transitions import answer_invalid_transitions, logged
from .worker import Worker

_MOVING = (State.PLANNING, State.MOVING, State.STOPPING)
_SLIP = 0.05  # seconds by which a clock that is being kept in step with others may go back unnoticed
_LAST_WORD = 0.3  # seconds that a last command may take to arrive
_SILENCE = 2.0  # seconds without a decision in motion after which the fleet is halted
Answered = Callable[[Answer], None]


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
        self._leaving = ""
        self._active = False
        self._mail: deque[Callable[[], None]] = deque()
        self._asking: set[Future] = set()
        self._graph = configuration.graph
        self._trouble = ""
        self._configured = False

    @property
    def configuration(self) -> config.Configuration:
        """In force now."""
        return self._live.configuration

    def now(self) -> float:
        """Seconds on the clock of the stamps; 0 while a simulated clock has not begun."""
        return float(self.get_clock().now().nanoseconds) * 1e-9

    # Lifecycle

    @logged
    def on_configure(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self._graph = self.configuration.graph
        self._outbox = Outbox(self, self.configuration)
        self._inbox = Inbox(
            self, lambda: self.configuration, self.now, neighbours=self._on_neighbours,
            halt=lambda: self._note(self._halt("told to by a message on 'halt'")),
            request=self._on_request, trouble=self._on_trouble,
        )
        self._bell = self.create_guard_condition(self._open_mail)
        self._asks = ReentrantCallbackGroup()  # a begin that waits for its answer must not hold up anything else
        self._services_of_ours = self._make_services()
        self._start_coordinator()
        self._configured = True
        steady = Clock(clock_type=ClockType.STEADY_TIME)
        self._timers_of_ours = [self.create_timer(1.0, self._report, clock=steady)]
        self._outbox.tell_neighbours(self._graph, self.now())
        self._report()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_activate(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self._renew()
        settings = self.configuration.settings
        self._running = [
            self.create_timer(1.0 / settings.horizon.rate, self._tick),
            self.create_timer(1.0 / settings.commands.rate, self._send),
        ]
        self._active = True
        self._report()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_deactivate(self, _state: LifecycleState) -> TransitionCallbackReturn:
        if self._coordinator.state in _MOVING:
            answer = self._halt("told to deactivate in motion")
            self.get_logger().error(f"not deactivated: the fleet is in motion. It is stopped instead ({answer.text}); "
                                    "deactivate again when it stands")
            return TransitionCallbackReturn.FAILURE
        self._rest()
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_cleanup(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self._configured = False
        self._worker.close()
        for timer in self._timers_of_ours:
            self.destroy_timer(timer)
        for service in self._services_of_ours:
            self.destroy_service(service)
        self.destroy_guard_condition(self._bell)
        self._inbox.close(self)
        self._outbox.close(self)
        return TransitionCallbackReturn.SUCCESS

    @logged
    def on_shutdown(self, _state: LifecycleState) -> TransitionCallbackReturn:
        self.signalled = True  # the fleet is stopped first, as after a signal
        return TransitionCallbackReturn.SUCCESS

    def _rest(self) -> None:
        """Stop ticking and sending."""
        self._active = False
        for timer in self._running:
            self.destroy_timer(timer)
        self._renew()
        self._report()

    def _renew(self) -> None:
        """A coordinator that knows of nothing yet, with a worker of its own; whoever still waits is told so."""
        self._worker.close()
        for future in list(self._asking):
            self._settle(future, Answer(False, "the planner began anew before this was decided"))
        self._start_coordinator()

    def _start_coordinator(self) -> None:
        now = self.configuration
        self._coordinator = Coordinator(
            now.driven, self._graph.relative_to(now.driven.names), now.settings, now.manoeuvres,
            solve=TickSolve(time.monotonic),
        )
        self._worker = Worker(
            self._coordinator, snapshot=self._snapshot, now=self.now,
            decided=lambda decision, ms: self._post(functools.partial(self._on_decision, decision, ms)),
            failed=lambda words, details: self._post(functools.partial(self.fail, words, details)),
        )
        self._last_time, self._tick_ms = 0.0, 0.0
        self._told: tuple[Any, ...] = ()
        self._answer: Optional[Answer] = None
        self._change: Optional[reports.Change] = None
        self._changed_from: Optional[Reference] = None
        self._trouble = ""

    # Timers

    def _tick(self) -> None:
        if self._time() > 0.0:
            self._worker.tick()

    def _time(self) -> float:
        """Now, seconds; 0 while there is no clock. A clock that was set back is a new beginning."""
        now = self.now()
        back = self._last_time - now
        if back > _SLIP:
            self.get_logger().warning(f"the clock went back by {back:.3f} s: everything begins anew, nothing is driven")
            self._inbox.forget()
            self._renew()
        self._last_time = max(now, self._last_time)
        return now

    def _send(self) -> None:
        now = self._time()
        if now <= 0.0:
            return
        silence = now - self._coordinator.decision.time
        if self._coordinator.state is State.MOVING and silence > _SILENCE:
            self._note(self._halt(f"no new plan for {silence:.1f} s"))
        commands = self._coordinator.commands(now)
        if commands is not None:
            self._outbox.send(commands, now)

    def _report(self) -> None:
        at = self._situation()
        details = reports.diagnostics(at, self._inbox.poses(), self._inbox.tallies)
        self._outbox.tell(reports.status(at), details, at.now)

    def _situation(self) -> reports.Situation:
        planner = self._coordinator
        return reports.Situation(
            node=self.get_fully_qualified_name(), configuration=self.configuration, active=self._active,
            now=self.now(), state=planner.state, decision=planner.decision, ends=planner.ends, answer=self._answer,
            change=self._change, tick_ms=self._tick_ms, overruns=self._worker.overruns, trouble=self._trouble,
        )

    # What the worker found

    def _post(self, action: Callable[[], None]) -> None:
        """Let the executor's thread do something; from any thread."""
        self._mail.append(action)
        with contextlib.suppress(InvalidHandle):  # cleaned up meanwhile
            self._bell.trigger()

    def _open_mail(self) -> None:
        while self._mail:
            self._mail.popleft()()

    def _on_decision(self, decision: Decision, tick_ms: float) -> None:
        self._tick_ms = tick_ms
        self._follow_change(decision)
        self._outbox.show(decision, self.configuration, self._graph)
        codes = tuple((caution.code, caution.subject) for caution in decision.warnings)
        news = (decision.state, decision.reason, decision.manoeuvre, self._change, codes)
        if news != self._told:
            self._told = news
            self._report()
        elif decision.state.holds_fleet:
            self._outbox.tell(reports.status(self._situation()), (), self.now())

    def fail(self, words: str, details: str = "") -> None:
        """Something in the planner itself went wrong: say so, and bring the fleet to a stand."""
        self.get_logger().error(f"{words}\n{details}".rstrip())
        self._trouble = words
        if self._active and self._coordinator.state in _MOVING:
            self._halt(words)
        for future in list(self._asking):
            self._settle(future, Answer(False, f"{words}; this is a mistake in the planner, see its log"))
        if self._active:
            self._report()

    # Requests

    def _make_services(self) -> list[Any]:
        made = [
            self.create_service(Trigger, f"~/begin/{name}", functools.partial(self._on_begin, name),
                                callback_group=self._asks)
            for name in self.configuration.manoeuvres
        ]
        made.append(self.create_service(Trigger, "~/resume", self._on_resume, callback_group=self._asks))
        made.append(self.create_service(Trigger, "~/halt", self._on_halt))
        made.append(self.create_service(Trigger, "~/abandon", self._on_abandon))
        return made

    async def _on_begin(self, name: str, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, await self._begin(messages.Request("", name)))

    async def _on_resume(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        def ask(snapshot: Snapshot, answered: Answered) -> None:
            self._coordinator.resume(snapshot, answered)

        return _filled(response, await self._ask(ask))

    def _on_halt(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, self._note(self._halt("told to by the halt service")))

    def _on_abandon(self, _request: Any, response: Trigger.Response) -> Trigger.Response:
        return _filled(response, self._note(self._coordinator.abandon(self.now())))

    def _on_request(self, request: messages.Request) -> None:
        self._begin(request)

    def _begin(self, request: messages.Request) -> Future:
        def ask(snapshot: Snapshot, answered: Answered) -> None:
            self._coordinator.begin(request.manoeuvre, snapshot, overrides=request.overrides,
                                    request_id=request.id, answered=answered)

        return self._ask(ask, request.id)

    def _ask(self, ask: Callable[[Snapshot, Answered], None], request_id: str = "") -> Future:
        """Pass a request on; the future gets its Answer."""
        future: Future = Future(executor=self.executor)
        self._time()
        self._asking.add(future)
        snapshot = self._snapshot()
        refusal = self._refusal(snapshot)
        if snapshot is None or refusal:
            self._settle(future, Answer(False, refusal, request_id))
            return future
        ask(snapshot, lambda answer: self._post(functools.partial(self._settle, future, answer)))
        self._worker.collect()
        self._report()
        return future

    def _refusal(self, snapshot: Optional[Snapshot]) -> str:
        if self._leaving:
            return "refused: the planner is ending; start it again"
        if not self._active:
            return "refused: the planner is not active; activate it first"
        if snapshot is None:
            return "refused: there is no clock yet; see that something publishes /clock, or set use_sim_time to false"
        return ""

    def _settle(self, future: Future, answer: Answer) -> None:
        if future in self._asking:
            self._asking.discard(future)
            future.set_result(answer)
            self._note(answer)

    def _note(self, answer: Answer) -> Answer:
        """Log an answer and put it on ``~/status``."""
        self._answer = answer
        if answer.ok:  # rclpy holds one severity for each line that logs
            self.get_logger().info(answer.text)
        else:
            self.get_logger().warning(answer.text)
        self._worker.collect()
        self._report()
        return answer

    def _halt(self, reason: str) -> Answer:
        answer: Answer = self._coordinator.halt(self.now(), reason)
        self._worker.collect()
        return answer

    def _snapshot(self) -> Optional[Snapshot]:
        now = self.now()
        if now <= 0.0:
            return None
        return Snapshot(now, self._inbox.poses())

    # Changes

    def _cannot_take(self, configuration: config.Configuration) -> str:
        if not self._configured or configuration.enabled == self.configuration.enabled:
            return ""
        return self._coordinator.cannot_change_members()

    def _on_parameters(self, configuration: config.Configuration, keys: tuple[str, ...]) -> None:
        words = ", ".join(f"{key} = {self.get_parameter(key).value}" for key in keys)
        self.get_logger().info(f"changed: {words}")
        if self._configured:
            self._change_to(words, settings=configuration.settings, fleet=configuration.driven, graph=self._graph)

    def _on_neighbours(self, graph: NeighbourGraph) -> None:
        if graph.edges != self._graph.edges:
            self._graph = graph
            self._change_to("neighbours", graph=graph)
            self._outbox.tell_neighbours(graph, self.now())

    def _change_to(self, words: str, **parts: Any) -> None:
        """Hand a change on. In motion it takes force when the rest of the reference, made anew, is swapped in."""
        now, moving = self.now(), self._coordinator.state is State.MOVING
        self._changed_from = self._coordinator.reference
        self._change = reports.Change(words, now, None if moving else now)
        self._coordinator.change(now, **parts)
        self._worker.collect()
        self._report()

    def _follow_change(self, decision: Decision) -> None:
        change = self._change
        if change is None or change.in_force is not None:
            return
        if decision.state is not State.MOVING or self._coordinator.reference is not self._changed_from:
            self._change = attrs.evolve(change, in_force=decision.time)
            self.get_logger().info(str(self._change))

    def _on_trouble(self, source: str, error: messages.IgnoredError) -> None:
        self.get_logger().warning(f"ignored a message of {source}: {error}")
        self._report()

    # The end

    def begin_stop(self) -> None:
        """Ramp a stop in step; nothing is begun any more."""
        self._leaving = "the planner is ending"
        if self._active and self._coordinator.state in _MOVING:
            self._note(self._halt("the planner was told to end"))

    @property
    def standing(self) -> bool:
        """Whether the fleet needs this node no longer."""
        return not self._active or self._coordinator.state not in _MOVING

    def longest_stop(self) -> float:
        """Seconds that a stop in step can take at most, with room for delays."""
        fleet = self.configuration.fleet
        return float(fleet.limit("max_speed").max() / fleet.limit("max_braking").min()) + 5.0

    def last_word(self) -> None:
        """Zeros to everyone, if this node holds the fleet, and nothing after them."""
        if self._active and self._coordinator.state.holds_fleet:
            self._outbox.send_zeros(self.now(), _LAST_WORD)
        if self._active:
            self._rest()


def _filled(response: Trigger.Response, answer: Answer) -> Trigger.Response:
    response.success, response.message = answer.ok, answer.text
    return response


def _body(arguments: Sequence[str], signals: Signals) -> int:
    node = PlannerNode(arguments)
    executor = SingleThreadedExecutor()
    executor.add_node(node)
    if node.configuration.activate_on_start:
        for change in (node.trigger_configure, node.trigger_activate):
            if change() != TransitionCallbackReturn.SUCCESS:
                return 2
    return spin(executor, node, after=Ending(node, signals), failed=node.fail)


def main(arguments: Optional[Sequence[str]] = None) -> int:
    """Run the planner until a signal ends it; returns the exit status."""
    return run(arguments, _body)


if __name__ == "__main__":
    sys.exit(main())
