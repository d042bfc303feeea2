# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The receding-horizon loop: Snapshot in, Decision out."""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable, Mapping
from typing import Any, Optional

import attrs
import numpy as np

from ..errors import ArrivedError, CoordPlannerError, RefusedError, SettingsError, SolveError
from . import gate, ladder, manoeuvre, members, reference, rules, solver, stopping
from .caps import caps
from .case import PlannerCase
from .chain import Chain
from .fence import hazards
from .fleet import Fleet
from .graph import NeighbourGraph
from .hazard import FURTHEST, HazardWatch, Point, told
from .hazard import nearest as hazards_near
from .history import CommandHistory, Planned
from .judge import SHORT, Judge, View
from .manoeuvre import Manoeuvre, Task, TurnAway
from .membership import Membership, overlooked
from .messages import Answer, Caution, Command, Decision, PoseSample, Snapshot, State
from .motion import lags
from .neighbours import Lookout
from .observer import Estimate, Observer
from .parameter import describe
from .plan import Plan
from .problem import POSE, SPEED_COMMAND, Problem
from .pursuit import Prepared, Pursuit, Takeover
from .reference import Reference
from .settings import Settings, SiteRules
from .silence import Silence
from .silence import worst as worst_silence
from .tick import pose_problem

_STANDING = 5e-3  # m/s
_SETTLE_LAGS = 5.0  # response lags after which a machine has stopped, to a hundredth of its speed
_TAKES = 1.5  # times as long as the last one took, one that came too late is given
_ANOTHER_DAY = 10.0  # seconds between two looks at the clock in motion that are none of the planner's making
_SET_BACK = 0.2  # seconds by which the clock may go back without being set back
_SINCE = 2.0  # seconds of the schedule that are kept behind now, for the observer

Answered = Callable[[Answer], None]
Solve = Callable[[Problem, solver.Start, bool, float], Plan]
Refused = Callable[[PlannerCase], None]


@attrs.frozen(eq=False)
class Outcome:
    """What a job found: a reference, or why there is none."""

    token: int
    reference: Optional[Reference]
    reason: str
    silence: Optional[Silence] = None
    arrived: bool = False


Job = Callable[[], Outcome]  # pure, slow, may run in any thread; its outcome goes to Coordinator.deliver


@attrs.frozen(eq=False)
class _Request:
    """A reference that is being made, and what becomes of it."""

    token: int
    kind: str  # "begin", "resume", "replace", "change" or "next"
    answered: Answered
    request_id: str
    made_for: tuple[Fleet, NeighbourGraph, Settings]
    takes_over_at: float = 0.0  # second of the last manoeuvre to come, of "replace" and "change"
    again: Callable[[float], None] = lambda _now: None  # asks once more, from a later moment
    chain: Optional[Chain] = None  # the sequence that is under way once it is answered well
    supersedes_change: bool = False  # a change was on its way, to be made up for when this is refused


class Coordinator:
    """Drives one fleet through manoeuvres.

    Who calls what:
      * ``step(snapshot)`` at ``settings.horizon.rate``, in a worker thread (it solves).
      * ``commands(now)`` at ``settings.commands.rate``, from a timer; fast; passes the last gate and
        remembers what was sent. Returns None when nothing is to be published (idle, planning).
      * all requests (``begin``, ``halt``, ``resume``, ``abandon``, ``change``) from any thread; fast.
      * ``jobs()`` after every request and every step: slow work (making references). The caller
        runs each job in a thread of its choice and hands the outcome to ``deliver(outcome, now)``.

    Args:
        budget: wall time that one tick's solve may take, seconds; ``settings.horizon.budget`` when left out. A
            rehearsal gives more, so that its numbers do not depend on how busy the machine is.
        solve: solves a tick: (problem, start, warm, budget) -> Plan; fast.ticks.TickSolve wherever a clock is at hand.
        refused: is given the program of each reference that was refused, in the thread of its job.
    """

    def __init__(
        self, fleet: Fleet, graph: NeighbourGraph, settings: Settings, manoeuvres: Mapping[str, Manoeuvre],
        budget: Optional[float] = None, solve: Solve = solver.solve, refused: Refused = lambda _case: None,
    ) -> None:
        self._solve_tick, self._refused = solve, refused
        self._lock = threading.RLock()
        self._fleet, self._graph, self._settings, self._manoeuvres = fleet, graph, settings, dict(manoeuvres)
        self._members = Membership(fleet)
        self._budget = settings.horizon.budget if budget is None else budget
        self._period = 1.0 / settings.commands.rate
        self._history = CommandHistory(fleet.response("command_delay"), self._period)
        self._observer = Observer(fleet, settings.poses, self._history)
        self._state = State.IDLE
        self._reason = ""
        self._pursuit: Optional[Pursuit] = None
        self._stop: Optional[stopping.Stop] = None
        self._stop_over = 0.0
        self._completed = False
        self._request: Optional[_Request] = None
        self._jobs: list[Job] = []
        self._token = 0
        self._asked_at, self._took = 0.0, 0.0  # the last reference in motion: when it was asked for, how long one took
        self._planned_at = 0.0
        self._ended_at = 0.0
        self._refused_change = ""
        self._silence: Optional[Silence] = None
        self._watchman = Judge()
        self._seen: dict[str, float] = {}  # newest moments of ticks and of commands
        self._lookout = Lookout()
        self._hazard = HazardWatch()
        self._chain: Optional[Chain] = None
        self._caps = np.full(len(fleet), np.inf)  # speed caps of the areas in which the robots are
        self._decision = Decision(0.0, State.IDLE, fleet.names)

    @property
    def state(self) -> State:
        """What the fleet is doing."""
        return self._state

    @property
    def decision(self) -> Decision:
        """The newest decision."""
        return self._decision

    @property
    def ends(self) -> np.ndarray:
        """Ends of the manoeuvre in hand or just ended, shape (N, 3), headings unwrapped; NaN where none."""
        with self._lock:
            if self._pursuit is None:
                return np.full((len(self._fleet), 3), np.nan)
            return self._pursuit.reference.task.ends

    @property
    def graph(self) -> NeighbourGraph:
        """The neighbour graph over the robots that are driven."""
        return self._graph

    @property
    def reference(self) -> Optional[Reference]:
        """The reference in force."""
        return self._pursuit.reference if self._pursuit is not None else None

    @property
    def taken_over(self) -> int:
        """How many references have taken over since the manoeuvre in hand began or was resumed."""
        return self._pursuit.taken_over if self._pursuit is not None else 0

    def cannot_join(self, fleet: Fleet, graph: Optional[NeighbourGraph] = None) -> str:
        """Why the fleet cannot become this one just now, in words; "" when it can.

        In motion, whoever joins must stand, be ready, have been seen by the last steps, and have a neighbour.
        """
        with self._lock:
            if self._resting:
                return ""
            return self._members.cannot_join(fleet, self._fleet.names, graph or self._graph, self._settings)

    # Requests

    def begin(
        self, name: str, snapshot: Snapshot, *, overrides: Optional[Mapping[str, float]] = None, request_id: str = "",
        answered: Answered = lambda _answer: None,
    ) -> None:
        """Ask for a manoeuvre. ``answered`` is called once: when it was refused or when it begins.

        In motion it replaces the running one from a moment ahead, without a jump in any command; when it is refused
        the running one goes on.
        """
        with self._lock:
            try:
                wanted = self._manoeuvre(name, overrides or {})
                _check_time(snapshot)
                if self._state is State.MOVING:
                    self._check_replaceable(snapshot)
                    self._replace(snapshot.time, name, wanted, answered, request_id)
                    return
                self._check_free("begun")
                self._adopt()
                estimate = self._look(snapshot)
                self._look_for_neighbours(snapshot.time, estimate, at_once=True)
                self._check_fit(estimate, snapshot)
            except CoordPlannerError as error:
                answered(Answer(False, str(error), request_id))
                return
            # Nothing is known of what people sent the robots meanwhile; they must stand.
            self._history.clear()
            fleet, graph, settings, states = self._fleet, self._neighbours, self._settings, estimate.states
            states[:, 3:], hazard = 0.0, self._hazard.point

            def make() -> Reference:
                task = manoeuvre.work_out(
                    name, wanted, fleet, settings, states[:, POSE], 0.0, graph.hops(), hazard=hazard
                )
                return reference.make(task, fleet, graph, settings, states)

            self._state, self._reason, self._completed = State.PLANNING, "", False
            self._ask("begin", make, answered, request_id, chain=_chain(name, wanted))

    def then(
        self, name: str, snapshot: Snapshot, *, overrides: Optional[Mapping[str, float]] = None, request_id: str = "",
        answered: Answered = lambda _answer: None,
    ) -> None:
        """Ask for a manoeuvre after the one under way, in the place of what a sequence has next."""
        with self._lock:
            try:
                wanted = self._manoeuvre(name, overrides or {})
                if self._state is not State.MOVING or self._pursuit is None:
                    raise RefusedError(f"nothing is under way: the fleet is {self._state.value}", f"begin {name}")
                if self._request is not None and self._request.kind in ("change", "replace"):
                    raise RefusedError("the rest of the manoeuvre is just being made anew", "ask again in a moment")
            except CoordPlannerError as error:
                answered(Answer(False, str(error), request_id))
                return
            if self._request is not None:
                self._cancel(f"{name} was asked for instead")
            task = self._pursuit.last().reference.task if self._chain is None else self._pursuit.reference.task
            running = self._chain or Chain(task.name, ((task.name, self._manoeuvres.get(task.name, wanted)),))
            self._ask_next(running.with_next(name, wanted), answered, request_id)

    def halt(self, now: float, reason: str) -> Answer:
        """A controlled stop of everyone; the fleet is then held."""
        with self._lock:
            now = self._moment(now)
            if self._state is State.PLANNING:
                self._cancel("halted")
                self._state, self._reason = State.IDLE, reason
                return Answer(True, "nothing has moved")
            if self._state is State.MOVING:
                stop = self._begin_stop(now, reason, completed=False)
                return Answer(True, f"stopping {stop.manner}, {stop.duration:.1f} s")
            if self._state is State.HELD and self._request is not None:
                self._cancel("halted")
            return Answer(True, f"the fleet is {self._state.value}")

    def resume(self, snapshot: Snapshot, answered: Answered = lambda _answer: None) -> None:
        """Go on with a held manoeuvre, from where the robots stand."""
        with self._lock:
            if self._state is not State.HELD or self._pursuit is None or self._request is not None:
                answered(Answer(False, f"nothing to resume: the fleet is {self._state.value}"))
                return
            self._members.waiting.clear()
            try:
                _check_time(snapshot)
                self._check_joining()
                self._grow()
                estimate = self._look(snapshot)
                self._look_for_neighbours(snapshot.time, estimate, at_once=True)
                self._check_fit(estimate, snapshot)
            except RefusedError as error:
                answered(Answer(False, str(error)))
                return
            fleet, graph, settings, driving = self._fleet, self._neighbours, self._settings, self._driving
            old, since, states = self._pursuit.reference, self._pursuit.s(snapshot.time), estimate.states
            states[:, 4] = states[:, SPEED_COMMAND] = 0.0
            hazard = self._hazard.point
            if self._chain is not None and self._chain.more and since >= old.task.arrival - 1e-9:
                maker = self._next_maker(self._chain, states, driving)
                self._ask("resume", maker, answered, "", chain=self._chain.moved_on())
                return
            wanted = self._manoeuvres.get(old.task.name)
            self._ask(
                "resume", lambda: members.resumed(
                    old, since, fleet, graph, settings, states, driving, wanted, hazard
                ), answered, "", chain=self._chain,
            )

    def abandon(self, now: float) -> Answer:
        """Give up a held manoeuvre; the fleet is idle afterwards and people may drive."""
        with self._lock:
            if self._state not in (State.HELD, State.PLANNING):
                return Answer(False, f"the fleet is {self._state.value}; halt it first, then abandon")
            self._cancel("abandoned")
            self._state, self._reason, self._pursuit = State.IDLE, "abandoned", None
            return Answer(True, "abandoned; the robots are no longer commanded")

    def change(
        self, now: float, *, settings: Optional[Settings] = None, fleet: Optional[Fleet] = None,
        graph: Optional[NeighbourGraph] = None,
    ) -> None:
        """New settings, limits or neighbours.

        Limits bind the gate and the next tick at once. In motion the rest of the reference is made anew and
        swapped in when the group reaches the moment from which it was made; the decision then shows the
        coupling in force. Who leaves in motion comes to a stand and is let go; who joins stands until it is driven.

        Whoever cannot join (``cannot_join`` tells beforehand) is warned of, and joins when the fleet is idle.

        Args:
            fleet: everybody who is wanted. graph: neighbours among all of them.
        """
        with self._lock:
            now = self._moment(now)
            self._settings = settings or self._settings
            self._members.want(fleet or self._members.wanted)
            self._fleet = members.renewed(self._fleet, self._members.wanted)
            self._graph = (graph or self._graph).relative_to(self._members.everybody(self._fleet.names))
            if self._resting:
                self._adopt()
            self._observer.configure(self._fleet, self._settings.poses)
            if self._state is State.MOVING and not self._members.absent(self._fleet.names):
                self._remake_if_free(now)  # otherwise the next step does, when it has rows for them

    def arm(self, name: str, now: float) -> Answer:
        """Turn away from hazards by a manoeuvre, for ``hazard.armed_for`` seconds, instead of stopping."""
        with self._lock:
            wanted = self._manoeuvres.get(name)
            if not isinstance(wanted, TurnAway):
                return Answer(False, f"{name!r} is no manoeuvre that turns away; arm one of the kind turn_away")
            seconds = self._settings.hazard.armed_for
            self._hazard.armed, self._hazard.armed_until = name, self._moment(now) + seconds
            return Answer(True, f"{name} is armed for {seconds:g} s; it begins when a hazard is seen in motion")

    def hazard(self, x: float, y: float, now: float) -> Answer:
        """A hazard is at a point of the fleet's frame. In motion everyone stops or, where it is armed, turns away.

        A standing fleet is not moved by it; whoever begins or resumes keeps away from it until it has expired.
        """
        with self._lock:
            now, point, watch = self._moment(now), (float(x), float(y)), self._hazard
            if not np.abs(point).max() <= FURTHEST:
                return Answer(False, f"({x:g}, {y:g}) is no point of a site")
            watch.look(now)
            watch.hear(point, now, self._settings)
            if self._state is not State.MOVING or self._pursuit is None:
                return Answer(True, f"kept away from for {self._settings.hazard.expires:g} s; nothing is moved by it")
            self._face_hazard(now, self._observer.estimate(now, self._planned).states[:, POSE])
            return Answer(True, watch.caution.text if watch.caution is not None else "")

    # Slow work

    def jobs(self) -> list[Job]:
        """Work to be done elsewhere; each job is handed out once."""
        with self._lock:
            jobs, self._jobs = self._jobs, []
            return jobs

    def deliver(self, outcome: Outcome, now: float) -> None:
        """The outcome of a job; outcomes that nobody waits for any more are dropped."""
        with self._lock:
            request, now = self._request, self._moment(now)
            if request is None or request.token != outcome.token:
                return
            self._request = None
            if request.kind == "next":
                self._take_next(request, outcome, now)
                return
            if request.kind in ("change", "replace"):
                self._take_over(request, outcome, now)
                return
            if outcome.arrived and request.kind == "resume" and self._pursuit is not None and _goes_on(self._chain):
                self._pursuit.freeze_at_end()
                request.answered(Answer(True, "every robot is at the end of its part; resume for the next one"))
                return
            if outcome.arrived and request.kind == "resume":
                self._state, self._completed, self._ended_at, self._reason = State.ENDED, True, now, "completed"
                request.answered(Answer(True, "every robot is at its end already", request.request_id))
                return
            if outcome.reference is None:
                if request.kind == "begin":
                    self._state = State.IDLE
                self._reason = outcome.reason
                request.answered(Answer(False, outcome.reason, request.request_id))
                return
            self._start(outcome.reference, now)
            self._silence, self._chain = outcome.silence, request.chain
            text = _figures(outcome.reference)
            request.answered(Answer(True, text, request.request_id))
            self._follow_changes(request, now)

    # The loop

    def step(self, snapshot: Snapshot) -> Decision:
        """One tick: look, judge, plan, decide. Nothing is decided anew at a time that is no number."""
        if not np.isfinite(snapshot.time):
            return attrs.evolve(self._decision, state=self._state, reason=self._reason)
        with self._lock:
            cautions: list[Caution] = []
            self._follow_clock(snapshot.time, "step")
            self._hazard.take(snapshot.hazard, snapshot.time, self._settings)
            grew = self._follow_members(snapshot)
            jumped = self._observer.observe(self._believed(snapshot), self._planned)
            estimate = attrs.evolve(self._observer.estimate(snapshot.time, self._planned), jumped=jumped)
            estimate = overlooked(estimate, self._fleet, self._outside)
            self._caps = caps(self._fleet, self._settings, estimate.states[:, None, POSE])[:, 0]
            self._settle(snapshot.time)
            self._look_for_neighbours(snapshot.time, estimate, at_once=grew)
            prepared = None
            if self._state is State.MOVING and self._pursuit is not None:
                outside = [self._fleet.index(name) for name in self._outside]
                self._pursuit.advance(snapshot.time, estimate, self._fleet, self._settings, outside)
                self._face_hazard(snapshot.time, estimate.states[:, POSE])
            elif self._state in (State.STOPPING, State.HELD) and self._pursuit is not None:
                cautions += self._watchman.look_on(self._view(snapshot, estimate, self._pursuit))
            if self._state is State.MOVING and self._pursuit is not None:
                cautions += self._judge(snapshot, estimate)
                if self._state is State.MOVING:
                    self._look_after_next(cautions)
                    prepared = self._prepare(snapshot.time)
        found = None if prepared is None else self._solve(prepared, snapshot.time)
        plan = None if found is None else found.plan
        with self._lock:
            if prepared is not None and found is not None and self._state is State.MOVING:
                cautions += found.cautions
                self._drive(prepared, found, snapshot.time)
            if len(estimate.age) == len(self._fleet):  # otherwise others are wanted since
                self._decision = self._decide(snapshot.time, estimate, plan, cautions)
            return self._decision

    def commands(self, now: float) -> Optional[dict[str, Command]]:
        """What to send now; None when nothing is to be sent."""
        with self._lock:
            if not self._state.holds_fleet or self._pursuit is None or not np.isfinite(now):
                return None
            self._follow_clock(now, "commands")
            wanted = self._pursuit.schedule.at(now + self._history.effect_delay)
            last = self._history.last
            before = last[1] if last is not None else np.zeros((len(self._fleet), 2))
            elapsed = min(now - last[0], 2 * self._period) if last is not None else self._period
            rolling = self._history.rolling(now, manoeuvre.STAND_LAGS * self._fleet.response("speed_lag"))
            allowed, nonsense = gate.allow(
                wanted, before, max(elapsed, 0.0), self._fleet, self._settings.site_rules, self._caps, rolling
            )
            self._history.add(now, allowed)
            if nonsense.any() and self._state is State.MOVING:
                self._begin_stop(now, "a plan held numbers that are not finite", completed=False)
            return {
                name: Command(float(speed), float(curvature))
                for name, (speed, curvature) in zip(self._fleet.names, allowed) if name not in self._members.loose
            }

    # Requests, inside

    def _adopt(self) -> None:
        """While the fleet rests, others are taken as they are wanted: nothing that was known of the old ones counts."""
        wanted = self._members.wanted
        if wanted.names == self._members.under_command(self._fleet.names) == self._fleet.names:
            return
        self._members.start_afresh(wanted)
        self._fleet, self._graph = wanted, self._graph.relative_to(wanted.names)
        self._history = CommandHistory(self._fleet.response("command_delay"), self._period)
        self._observer = Observer(self._fleet, self._settings.poses, self._history)
        self._pursuit, self._state = None, State.IDLE
        self._caps = np.full(len(self._fleet), np.inf)
        self._decision = Decision(
            self._decision.time, State.IDLE, self._fleet.names, self._reason, completed=self._completed
        )

    @property
    def _resting(self) -> bool:
        return self._state in (State.IDLE, State.ENDED)

    @property
    def _driving(self) -> tuple[str, ...]:
        return self._members.driving(self._fleet.names)

    @property
    def _outside(self) -> tuple[str, ...]:
        """Carried only as obstacles: who leaves, and who does not drive yet."""
        driven = self._members.under_command(self._fleet.names)
        return tuple(name for name in self._fleet.names if name not in driven)

    @property
    def _neighbours(self) -> NeighbourGraph:
        """The graph as it counts for a new reference, over all rows."""
        return members.among(self._graph, self._fleet.names, self._driving)

    def _grow(self) -> None:
        """Rows for those who are wanted and not carried yet; they stand until they are driven."""
        pursuit, new = self._pursuit, self._members.absent(self._fleet.names)
        if pursuit is None or not new:
            return
        self._forget_next()
        fleet = members.grown(self._fleet, self._members.wanted, new)
        there = [self._members.bystanders.pose(name) for name in new]
        self._history.grow(fleet.response("command_delay"), self._period)
        self._observer.grow(fleet)
        pursuit.grow(fleet, self._settings, np.concatenate([np.zeros((len(self._fleet), 3)), np.array(there)]))
        self._fleet, self._caps = fleet, np.append(self._caps, np.full(len(new), np.inf))
        self._members.loose |= frozenset(new)
        self._observer.loose = self._members.loose

    def _follow_members(self, snapshot: Snapshot) -> bool:
        """Who joins gets a row, and who has left and stands is let go; returns whether there are new rows."""
        self._members.bystanders.see(snapshot)
        if self._state is State.IDLE:
            self._adopt()
        pursuit, before = self._pursuit, len(self._fleet)
        if pursuit is None or not self._state.holds_fleet:
            return False
        if self._state is State.MOVING:
            for name, reason in self._members.unfit(self._fleet.names, self._settings.poses).items():
                self._put_off((name,), reason, snapshot.time)
            self._grow()
            if len(self._fleet) > before:
                self._remake_if_free(snapshot.time)
        self._let_go(snapshot.time, pursuit)
        return len(self._fleet) > before

    def _let_go(self, now: float, pursuit: Pursuit) -> None:
        speeds, still = pursuit.schedule.moment(now)[:, 0], self._state in (State.HELD, State.ENDED)
        standing = {
            name: bool(abs(speeds[k]) < _STANDING)
            for k, name in enumerate(self._fleet.names)
            if name not in (*self._driving, *self._members.loose) and (still or k in pursuit.reference.task.stands)
        }
        rest = self._settings.commands.zeros_after_end + _SETTLE_LAGS * float(lags(self._fleet).max())
        rows = [self._fleet.index(name) for name in self._members.let_go(now, standing, rest)]
        if rows:
            self._history.forget(rows)
            pursuit.schedule = pursuit.schedule.stilled(rows)
            self._observer.loose = self._members.loose

    def _put_off(self, names: tuple[str, ...], reason: str, now: float) -> None:
        """Robots that cannot join the running manoeuvre wait until the fleet is idle; the others go on."""
        self._members.put_off(names, reason)
        self._forget_next()
        for name in set(names) & set(self._fleet.names):
            if self._pursuit is not None:
                self._pursuit.drop_drivers_of(self._fleet.index(name))
        self._remake_if_free(now)

    def _manoeuvre(self, name: str, overrides: Mapping[str, float]) -> Manoeuvre:
        if name not in self._manoeuvres:
            raise RefusedError(f"{name!r} is not a manoeuvre", "ask for one of " + ", ".join(self._manoeuvres))
        wanted = self._manoeuvres[name]
        there = [key for key in describe(type(wanted)) if not isinstance(getattr(wanted, key), (tuple, str))]
        for key, value in overrides.items():
            if key not in there:
                raise RefusedError(f"{name} has no number {key!r} to override", "override one of " + ", ".join(there))
            if isinstance(value, bool) or not isinstance(value, (int, float)):
                raise SettingsError(f"{value!r} is not a number", key=key, allowed="a number")
        numbers: dict[str, Any] = {key: float(value) for key, value in overrides.items()}
        return attrs.evolve(wanted, **numbers)

    def _check_free(self, verb: str) -> None:
        if self._state not in (State.IDLE, State.ENDED):
            raise RefusedError(f"nothing can be {verb}: the fleet is {self._state.value}", "halt and abandon it first")

    def _check_replaceable(self, snapshot: Snapshot) -> None:
        """The running manoeuvre may be left for another."""
        if snapshot.other_planner:
            raise RefusedError(f"{snapshot.other_planner} drives this fleet too", "stop one of the two planners")

    def _check_joining(self) -> None:
        for reason in self._members.unfit(self._fleet.names, self._settings.poses).values():
            raise RefusedError(reason, "see to it, or disable it")

    def _check_fit(self, estimate: Estimate, snapshot: Snapshot) -> None:
        """Every robot has a fresh pose and may be driven."""
        driving = self._driving
        stale = [
            name for name, age in zip(self._fleet.names, estimate.age)
            if name in driving and not age <= self._settings.poses.max_age
        ]
        if stale:
            raise RefusedError(
                f"no fresh pose of {', '.join(stale)} ({self._settings.poses.max_age:g} s allowed)",
                "check localisation, the topic, its frame and the clocks",
            )
        graph = self._graph.relative_to(driving)
        if len(driving) > 1 and not graph.connected and not self._settings.coupling.may_split:
            words = " | ".join(" ".join(part) for part in graph.components())
            raise RefusedError(
                f"the neighbour graph falls into parts that do not copy each other: {words}",
                "join them by an edge, or set coupling.may_split",
            )
        if snapshot.other_planner:
            raise RefusedError(f"{snapshot.other_planner} drives this fleet too", "stop one of the two planners")
        unready = sorted((snapshot.not_ready | snapshot.silent) & set(driving))
        if unready:
            raise RefusedError(f"{', '.join(unready)} not ready to be driven", "make them ready or disable them")

    def _ask(
        self, kind: str, make: Callable[[], Reference], answered: Answered, request_id: str, at: float = 0.0,
        again: Callable[[float], None] = lambda _now: None, chain: Optional[Chain] = None,
    ) -> None:
        self._token += 1
        token = self._token
        fleet, settings, rules_in_force = self._fleet, self._settings, self._settings.site_rules
        refused = self._refused

        def job() -> Outcome:
            silence: Optional[Silence] = None
            try:
                made = make()
                silence = worst_silence(made, fleet)
                _check_silence(silence, rules_in_force)
            except CoordPlannerError as error:
                if isinstance(error, RefusedError) and isinstance(error.case, PlannerCase):
                    refused(error.case)
                return Outcome(token, None, str(error), silence, isinstance(error, ArrivedError))
            except Exception as error:  # whatever it is: nobody may be left waiting for an answer
                return Outcome(token, None, f"a mistake in the planner ({error!r}); please report it")
            self._try_out(made, fleet, settings)
            return Outcome(token, made, "", silence)

        self._request = _Request(token, kind, answered, request_id, (self._fleet, self._graph, self._settings), at,
                                 again, chain)
        self._jobs = [job]

    def _try_out(self, made: Reference, fleet: Fleet, settings: Settings) -> None:
        """Solve a tick beforehand: what a solver has to build for it is built now, and not in the first tick."""
        begins = float(made.plan.times[0])
        problem, _, start = pose_problem(
            made, fleet, settings, made.plan.states[:, 0], begins, begins, 1.0, None, np.zeros(len(fleet))
        )
        with contextlib.suppress(SolveError):  # should the first tick fail as well, that is where it is told
            self._solve_tick(problem, start, True, self._budget)

    def _cancel(self, why: str) -> None:
        if self._request is not None:
            self._request.answered(Answer(False, why, self._request.request_id))
        self._request, self._jobs = None, []

    def _branch(self, now: float) -> tuple[Reference, float, float]:
        """Where a new reference can leave the one that will be followed by the time it is made.

        Returns:
            that one, the second of its own at which to leave it, and the second of the manoeuvre under way.
        """
        pursuit = self._pursuit
        assert pursuit is not None
        last = pursuit.last()
        earlier = last.at - float(last.reference.plan.times[0])
        self._asked_at, lead = now, max(self._settings.horizon.lead, _TAKES * self._took)
        at = max(pursuit.s(now + lead), last.at)
        return last.reference, at - earlier, at

    def _remake_if_free(self, now: float) -> None:
        """Make the rest anew, unless what is being made is looked at again when it is there."""
        if self._request is not None and self._request.kind == "next":
            self._cancel("something was changed meanwhile; ask again")
        if self._request is None or self._request.kind == "change":
            self._forget_next()
            self._remake(now)

    def _remake(self, now: float) -> None:
        """Make the rest of the manoeuvre anew, under what is now in force."""
        old, leaves, at = self._branch(now)
        if leaves > old.end - 2 * self._settings.horizon.interval:
            self._members.put_off(self._members.joining(self._fleet.names), "the running manoeuvre is nearly over")
            return
        fleet, graph, settings, driving = self._fleet, self._neighbours, self._settings, self._driving
        task, wanted = self._in_force(old.task), self._manoeuvres.get(old.task.name)
        self._ask(
            "change", lambda: members.rest(task, fleet, graph, settings, old, leaves, driving, wanted),
            lambda _a: None, "", at, self._remake,
        )

    def _replace(
        self, now: float, name: str, wanted: Manoeuvre, answered: Answered, request_id: str,
        hazard: Optional[Point] = None,
    ) -> None:
        """Make a reference for another manoeuvre, which leaves the running one from a moment ahead.

        What it keeps away from stays ``hazard``, however often it is made again; the one that is known when left out.
        """
        before = self._request
        if before is not None and before.kind == "replace" and before.answered is not answered:
            self._cancel(f"{name} was asked for instead")  # and not only made again from a later moment
        owed = before is not None and (before.kind == "change" or before.supersedes_change)
        self._forget_next()
        old, leaves, at = self._branch(now)
        fleet, settings, states = self._fleet, self._settings, old.state(leaves)
        driving = self._members.under_command(fleet.names)
        graph = members.among(self._graph, fleet.names, driving)
        away = hazard or self._hazard.point
        self._ask(
            "replace", lambda: members.replaced(name, wanted, fleet, graph, settings, states, driving, away),
            answered, request_id, at, lambda later: self._replace(later, name, wanted, answered, request_id, away),
            _chain(name, wanted),
        )
        if owed and self._request is not None:
            self._request = attrs.evolve(self._request, supersedes_change=True)

    def _face_hazard(self, now: float, poses: np.ndarray) -> None:
        """Stop for the hazard that is known, or turn away from it, where anybody is concerned; in motion."""
        watch, pursuit = self._hazard, self._pursuit
        if watch.point is None or pursuit is None or watch.faced(pursuit.reference.task.hazard):
            return
        near = hazards_near(watch.point, pursuit.reference, pursuit.s(now), poses, self._fleet, self._settings)
        armed = watch.is_armed(now)
        watch.caution = told(near, watch.point, self._settings, armed)
        if armed and near.sees:
            self._turn_away(now, watch.point)
        elif near.concerned and not armed:
            self._begin_stop(now, watch.caution.text, completed=False)

    def _turn_away(self, now: float, point: Point) -> None:
        """Begin what is armed; when it is refused everyone stops."""
        watch, wanted = self._hazard, self._manoeuvres[self._hazard.armed]
        watch.turned_for = point

        def answered(answer: Answer) -> None:
            if not answer.ok and self._state is State.MOVING:
                self._begin_stop(max(self._seen.values(), default=now), f"turning away was refused: {answer.text}",
                                 completed=False)

        self._replace(now, watch.armed, wanted, answered, "", point)

    def _follow_changes(self, request: _Request, now: float) -> None:
        """What was changed while a reference was being made is followed at once."""
        pursuit = self._pursuit
        if pursuit is None:
            return
        stands = {self._fleet.names[k] for k in pursuit.last().reference.task.stands}
        others = stands != set(self._fleet.names) - set(self._driving)
        if others or request.made_for != (self._fleet, self._graph, self._settings):
            self._remake(now)

    def _in_force(self, task: Task) -> Task:
        """The task with the coupling that the settings ask for, where the manoeuvre has none of its own."""
        own = self._manoeuvres.get(task.name)
        coupling, alignment = self._settings.coupling.strength, self._settings.coupling.alignment
        if own is not None and own.coupling is not None:
            coupling = own.coupling
        if own is not None and own.alignment is not None:
            alignment = own.alignment
        return attrs.evolve(task, coupling=coupling if task.alike else 0.0, alignment=alignment)

    def _take_over(self, request: _Request, outcome: Outcome, now: float) -> None:
        """A reference for the rest, or for another manoeuvre, is there or was refused."""
        pursuit, replaces = self._pursuit, request.kind == "replace"
        if self._state is not State.MOVING or pursuit is None:
            reason = f"{self._state.value} before it could take over; begin it again when the fleet is idle"
            request.answered(Answer(False, f"the fleet was {reason}", request.request_id))
        elif outcome.reference is None and not replaces and self._members.joining(self._fleet.names):
            self._put_off(self._members.joining(self._fleet.names), outcome.reason, now)
        elif outcome.reference is None:
            if not replaces:
                self._refused_change = outcome.reason
            request.answered(Answer(False, f"{outcome.reason} (the running manoeuvre goes on)", request.request_id))
            if request.supersedes_change:
                self._remake(now)
            elif replaces or request.made_for != (self._fleet, self._graph, self._settings):
                self._follow_changes(request, now)
        elif pursuit.s(now + self._settings.horizon.budget) > request.takes_over_at:
            self._request = request if request.supersedes_change else None
            self._took = now - self._asked_at
            request.again(now)  # it starts from a moment that has passed: make it again from a later one
        else:
            self._took = 0.0
            poses = self._observer.estimate(now, self._planned).states[:, POSE]
            made = members.extended(outcome.reference, self._fleet, self._settings, poses)
            pursuit.expect(Takeover(made, request.takes_over_at))
            self._silence = outcome.silence
            if replaces:
                self._chain = request.chain
            in_time = max(pursuit.clock(request.takes_over_at) - now, 0.0)
            text = f"in {in_time:.1f} s {_figures(outcome.reference)}"
            request.answered(Answer(True, text, request.request_id))
            self._follow_changes(request, now)

    def _next_maker(self, chain: Chain, states: np.ndarray, driving: tuple[str, ...]) -> Callable[[], Reference]:
        """Makes the reference of the next part from where the part before it ends."""
        fleet, settings, hazard, (name, wanted) = self._fleet, self._settings, self._hazard.point, chain.next
        graph = members.among(self._graph, fleet.names, driving)
        return lambda: members.replaced(name, wanted, fleet, graph, settings, states, driving, hazard)

    def _ask_next(
        self, chain: Chain, answered: Answered = lambda _answer: None, request_id: str = ""
    ) -> None:
        assert self._pursuit is not None
        before = self._pursuit.before(None if self._chain is None else self._chain.expected)
        old, ends = before.reference, before.at - float(before.reference.plan.times[0]) + before.reference.end
        driven = tuple(name for k, name in enumerate(self._fleet.names) if k not in old.task.stands)
        maker = self._next_maker(chain, old.state(old.end), self._members.driving(driven))
        self._ask("next", maker, answered, request_id, ends, chain=chain)

    def _look_after_next(self, cautions: list[Caution]) -> None:
        """Have the next part made, well before it begins."""
        chain, pursuit = self._chain, self._pursuit
        if chain is None or pursuit is None or not chain.more:
            return
        if chain.refused:
            cautions.append(rules.next_refused(self._settings, chain.next[0], chain.refused))
        elif self._request is None and chain.expected is None:
            self._ask_next(chain)

    def _take_next(self, request: _Request, outcome: Outcome, now: float) -> None:
        """The reference of the next part is there or was refused."""
        pursuit, chain = self._pursuit, request.chain
        assert chain is not None
        if self._state is not State.MOVING or pursuit is None:
            request.answered(Answer(False, f"the fleet is {self._state.value}", request.request_id))
        elif request.made_for != (self._fleet, self._graph, self._settings):
            request.answered(Answer(False, "something was changed meanwhile; ask again", request.request_id))
        elif outcome.reference is None:
            if self._chain is not None and self._chain.parts == chain.parts:
                self._chain = attrs.evolve(chain, refused=outcome.reason)
            request.answered(Answer(False, f"{outcome.reason} (nothing has changed)", request.request_id))
        else:
            # Who stands at the joint already goes on as soon as it can.
            at = max(request.takes_over_at, pursuit.s(now + self._settings.horizon.budget))
            self._forget_next()
            pursuit.expect(Takeover(outcome.reference, at))
            self._chain = attrs.evolve(chain, expected=outcome.reference, silence=outcome.silence)
            text = f"in {max(pursuit.clock(at) - now, 0.0):.1f} s {_figures(outcome.reference)}"
            request.answered(Answer(True, text, request.request_id))

    def _forget_next(self) -> None:
        """The next part is to be made anew."""
        if self._chain is not None and self._pursuit is not None and self._chain.expected is not None:
            self._pursuit.forget(self._chain.expected)
            self._chain = attrs.evolve(self._chain, expected=None)

    def _wait_at_joint(self, now: float, pursuit: Pursuit, chain: Chain, standing: bool) -> None:
        """The part is over and the next one is not there."""
        if not standing:
            self._begin_stop(now, f"{chain.next[0]} could not be planned in time", completed=False)
        elif chain.refused:
            pursuit.freeze(now)
            self._state, self._reason = State.HELD, f"{chain.next[0]} cannot follow: {chain.refused}"
            self._chain = attrs.evolve(chain, refused="")

    def _start(self, made: Reference, now: float) -> None:
        begins = now + self._lead_time()
        last = self._history.last
        values = np.zeros((len(self._fleet), 2)) if last is None else last[1]
        self._pursuit = Pursuit(made, begins, 0.0, values, self._fleet)
        self._state, self._reason, self._stop = State.MOVING, "", None
        self._take_up(made)
        # Whoever watches for decisions that stay away counts from here, not from one of long ago.
        self._decision = attrs.evolve(self._decision, time=now)
        self._planned_at, self._refused_change, self._watchman = begins, "", Judge()

    def _take_up(self, made: Reference) -> None:
        """Whoever a reference drives is under command from now on."""
        self._members.take_up(self._fleet.names[k] for k in made.task.stands)
        self._observer.loose = self._members.loose

    # The loop, inside

    def _lead_time(self) -> float:
        """From a snapshot to the first moment at which a new plan can still change what every robot does."""
        return self._settings.horizon.budget + float(self._history.effect_delay.max())

    def _moment(self, now: float) -> float:
        """A moment to reckon with: the newest known one where the clock shows no number.

        In motion also where it shows another day than at the last tick: a stop is not put off until then.
        """
        newest = max(self._seen.values(), default=self._decision.time)
        strange = self._state is State.MOVING and bool(self._seen) and abs(now - newest) > _ANOTHER_DAY
        return newest if strange or not np.isfinite(now) else now

    def _follow_clock(self, now: float, who: str) -> None:
        """A clock that was set back takes everything timed back with it: a stop in hand is not left for a later day."""
        back = now - self._seen.get(who, now)
        if back < -_SET_BACK:
            self._seen = {each: time + back for each, time in self._seen.items()}
            self._history.shift(back)
            self._observer.shift(back)
            self._members.shift(back)
            if self._pursuit is not None:
                self._pursuit.shift(back)
            self._stop_over, self._planned_at = self._stop_over + back, self._planned_at + back
            self._ended_at += back
            self._hazard.shift(back)
            self._decision = attrs.evolve(self._decision, time=self._decision.time + back)
        self._seen[who] = now

    @property
    def _planned(self) -> Optional[Planned]:
        return self._pursuit.schedule.at if self._pursuit is not None and self._state.holds_fleet else None

    def _believed(self, snapshot: Snapshot) -> dict[str, PoseSample]:
        poses = self._settings.poses
        return {
            name: pose for name, pose in snapshot.poses.items()
            if -poses.max_future <= snapshot.time - pose.stamp <= poses.max_age
            and np.abs([pose.x, pose.y, pose.heading]).max() <= FURTHEST
        }

    def _look(self, snapshot: Snapshot) -> Estimate:
        self._observer.observe(self._believed(snapshot), self._planned)
        return self._observer.estimate(snapshot.time, self._planned)

    def _look_for_neighbours(self, now: float, estimate: Estimate, at_once: bool = False) -> None:
        """Take up the graph that the poses give, where it is they that give it."""
        rows = [self._fleet.index(name) for name in self._driving]
        graph, places = self._graph.relative_to(self._driving), estimate.states[rows, :2]
        found = self._lookout.found(self._settings.neighbours, graph, places, now, at_once)
        if found is not None:
            self.change(now, graph=found)

    def _settle(self, now: float) -> None:
        """Changes of state that time alone brings."""
        if self._state is State.STOPPING and now >= self._stop_over:
            self._state = State.ENDED if self._completed else State.HELD
            self._ended_at = now
        elif self._state is State.ENDED and now >= self._ended_at + self._settings.commands.zeros_after_end:
            self._state = State.IDLE
        elif self._state is State.MOVING and self._pursuit is not None:
            self._settle_end(now, self._pursuit)

    def _settle_end(self, now: float, pursuit: Pursuit) -> None:
        if pursuit.coming:
            return
        settle = float(self._history.effect_delay.max())
        if pursuit.s(now - settle) < pursuit.reference.end:
            return
        standing = np.abs(pursuit.schedule.moment(now)[:, 0]).max() < _STANDING
        if self._chain is not None and self._chain.more:
            self._wait_at_joint(now, pursuit, self._chain, bool(standing))
        elif standing:
            self._completed, self._state, self._ended_at = True, State.ENDED, now
            self._reason = "completed"
        elif pursuit.reference.task.end_speed > 0.0:
            self._begin_stop(now, "completed", completed=True)

    def _judge(self, snapshot: Snapshot, estimate: Estimate) -> list[Caution]:
        """What goes wrong while moving, and the stop that follows from it."""
        pursuit = self._pursuit
        assert pursuit is not None
        found = self._watchman.look(self._view(snapshot, estimate, pursuit))
        grave = [caution for caution in found if rules.response(caution) is rules.Response.STOP]
        if grave:
            self._begin_stop(snapshot.time, grave[0].text, completed=False, estimate=estimate)
        return found

    def _view(self, snapshot: Snapshot, estimate: Estimate, pursuit: Pursuit) -> View:
        at = snapshot.time + float(self._history.effect_delay.max())
        driven = self._graph.relative_to(self._members.under_command(self._fleet.names))
        return View(
            snapshot, estimate, self._fleet, driven, self._settings, pursuit, at,
            1.0 / self._settings.horizon.rate, self._refused_change, self._silence,
            hazards(self._settings, self._hazard.point), frozenset(self._outside), dict(self._members.waiting),
        )

    def _prepare(self, now: float) -> Optional[Prepared]:
        pursuit = self._pursuit
        assert pursuit is not None
        at = now + self._lead_time()
        if pursuit.swap_when_due(at):
            self._take_up(pursuit.reference)
            if self._chain is not None and pursuit.reference is self._chain.expected:
                self._silence, self._chain = self._chain.silence, self._chain.moved_on()
        if pursuit.s(at) >= pursuit.reference.end:
            self._planned_at = now  # nothing is left to plan: the commands run out in zeros
            return None
        if pursuit.s(at) < 0.0:
            at = pursuit.clock(0.0)
        predicted = self._observer.estimate(at, self._planned).states
        return pursuit.prepare(at, predicted, self._fleet, self._settings)

    def _solve(self, prepared: Prepared, now: float) -> ladder.Found:
        """Solve a tick, and find what can be driven."""
        settings = self._settings
        solved: Optional[Plan] = None
        failure: Optional[Caution] = None
        try:
            plan = self._solve_tick(prepared.problem, prepared.start, True, self._budget)
            if plan.solve_time > self._budget + self._period:  # the moment it starts from has passed
                failure = rules.plan_late(settings, plan.solve_time)
            else:
                solved = plan
        except SolveError as error:
            failure = rules.plan_failed(settings, str(error))
        return ladder.find(prepared, solved, failure, settings, now - self._planned_at)

    def _drive(self, prepared: Prepared, found: ladder.Found, now: float) -> None:
        pursuit = self._pursuit
        assert pursuit is not None
        if found.plan is None:
            self._begin_stop(now, found.cautions[-1].text, completed=False)
            return
        pursuit.install(prepared, found.plan, now - _SINCE)
        if found.fresh:
            self._planned_at = now

    def _begin_stop(
        self, now: float, reason: str, *, completed: bool, estimate: Optional[Estimate] = None
    ) -> stopping.Stop:
        pursuit = self._pursuit
        assert pursuit is not None
        estimate = estimate or self._observer.estimate(now, self._planned)
        at = now + float(self._history.effect_delay.max())
        stop = stopping.choose(pursuit.schedule, at, self._fleet, estimate, now, pursuit.reference.fencing)
        pursuit.schedule = pursuit.schedule.splice(stop.schedule, at, now - _SINCE)
        pursuit.freeze(now)
        # Machines stand some lags after their commands do; until then nobody is told that the fleet stands.
        settle = _SETTLE_LAGS * float(lags(self._fleet).max())
        self._stop, self._stop_over = stop, float(stop.schedule.times[-1]) + 2 * self._period + settle
        self._state, self._completed = State.STOPPING, completed
        self._reason = reason if completed else f"{reason}; stopping {stop.manner}"
        pursuit.coming = ()
        if self._chain is not None:
            self._chain = attrs.evolve(self._chain, expected=None)
        if self._request is not None and self._request.kind in ("change", "replace", "next"):
            self._cancel("the fleet was stopped")
        return stop

    def _decide(
        self, now: float, estimate: Estimate, plan: Optional[Plan], cautions: list[Caution]
    ) -> Decision:
        pursuit = self._pursuit
        tick = pursuit.tick if pursuit is not None else None
        ahead = pursuit.ahead if pursuit is not None else None
        clearance, pair = (np.inf, (-1, -1)) if ahead is None else ahead.closest(1)
        if self._state is State.MOVING and clearance < self._settings.site_rules.min_clearance - SHORT:
            cautions.append(rules.clearance_short(self._settings, self._names(pair), clearance))
        if self._state is State.MOVING and tick is not None:
            spare, robot, area = tick.reference.fencing.least(self._fleet, tick.plan.dense(1))
            if spare < -SHORT:
                cautions.append(rules.keep_out_ahead(self._settings, self._fleet.names[robot], area, -spare))
        if self._hazard.caution is not None:
            cautions.append(self._hazard.caution)
        common: dict[str, Any] = {
            "time": now, "state": self._state, "names": self._fleet.names, "reason": self._reason,
            "completed": self._completed, "poses": estimate.states[:, POSE],
            "warnings": self._watchman.hold(now, cautions), "outside": self._outside,
        }
        if pursuit is None:
            return Decision(**common)
        task = pursuit.reference.task
        done = np.clip(pursuit.s(now) / pursuit.reference.end, 0.0, 1.0)
        name = task.name
        if self._chain is not None and len(self._chain.parts) > 1:
            name, done = f"{self._chain.name}: {name}", self._chain.progress(done)
        return Decision(
            **common, manoeuvre=name, progress=float(done),
            progress_rate=pursuit.pace if self._state is State.MOVING else 0.0,
            coupling=task.coupling, alignment=task.alignment, lag=pursuit.behind,
            plan_times=np.zeros(0) if ahead is None else ahead.times,
            plan_poses=np.zeros((len(self._fleet), 0, 3)) if ahead is None else ahead.poses,
            clearance=float(clearance), clearance_pair=self._names(pair) if np.isfinite(clearance) else None,
            solve_time=0.0 if plan is None else plan.solve_time,
        )

    def _names(self, pair: tuple[int, int]) -> tuple[str, str]:
        return self._fleet.names[pair[0]], self._fleet.names[pair[1]]


def _chain(name: str, wanted: Manoeuvre) -> Optional[Chain]:
    parts = manoeuvre.parts_of(name, wanted)
    return Chain(name, parts) if len(parts) > 1 else None


def _goes_on(chain: Optional[Chain]) -> bool:
    return chain is not None and chain.more


def _figures(made: Reference) -> str:
    """How long a manoeuvre takes and how near the robots come, in words."""
    text = f"{made.task.name} takes {made.end - float(made.plan.times[0]):.1f} s"
    text += f", smallest clearance {made.clearance:.2f} m" if np.isfinite(made.clearance) else ""
    return f"{text}; {made.task.note}" if made.task.note else text


def _check_time(snapshot: Snapshot) -> None:
    if not np.isfinite(snapshot.time):
        raise RefusedError("it is not known what time it is", "check the clock")


def _check_silence(silence: Optional[Silence], site_rules: SiteRules) -> None:
    if silence is None or not site_rules.refuse_unsafe_silence:
        return
    short = site_rules.min_clearance - silence.clearance
    if short > SHORT:
        raise RefusedError(
            f"should the planner fall silent after {silence.instant:.1f} s, {' and '.join(silence.pair)} would come "
            f"within {silence.clearance:.2f} m of each other, {short:.2f} m short, before both stand",
            "shorten their command time-outs, lower the speed or widen the spacing",
        )
