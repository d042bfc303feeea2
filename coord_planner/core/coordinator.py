# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The receding-horizon loop: Snapshot in, Decision out."""

from __future__ import annotations

import threading
from collections.abc import Mapping
from typing import Optional

import attrs
import numpy as np

from . import gate, manoeuvre, solver
from .coordination import asking, changing, ticking
from .coordination.deliveries import deliver
from .coordination.desk import Answered, Desk, Job, Outcome, Refused, Solve
from .coordination.ending import stop
from .coordination.facing import face_hazard
from .coordination.situation import Situation
from .fleet import Fleet
from .graph import NeighbourGraph
from .hazard import FURTHEST
from .manoeuvre import Manoeuvre, TurnAway
from .messages import Answer, Command, Decision, Snapshot, State
from .problem import POSE
from .reference import Reference
from .settings import Settings

__all__ = ["Answered", "Coordinator", "Job", "Outcome", "Refused", "Solve"]


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
        self._lock = threading.RLock()
        desk = Desk(solve, refused, settings.horizon.budget if budget is None else budget)
        self._situation = Situation(fleet, graph, settings, manoeuvres, desk)

    @property
    def state(self) -> State:
        """What the fleet is doing."""
        return self._situation.state

    @property
    def decision(self) -> Decision:
        """The newest decision."""
        return self._situation.decision

    @property
    def ends(self) -> np.ndarray:
        """Ends of the manoeuvre in hand or just ended, shape (N, 3), headings unwrapped; NaN where none."""
        with self._lock:
            pursuit = self._situation.pursuit
            if pursuit is None:
                return np.full((len(self.fleet), 3), np.nan)
            return pursuit.reference.task.ends

    @property
    def fleet(self) -> Fleet:
        """The robots that are carried, with the limits in force."""
        return self._situation.fleet

    @property
    def graph(self) -> NeighbourGraph:
        """The neighbour graph over the robots that are driven."""
        return self._situation.graph

    @property
    def reference(self) -> Optional[Reference]:
        """The reference in force."""
        pursuit = self._situation.pursuit
        return pursuit.reference if pursuit is not None else None

    @property
    def taken_over(self) -> int:
        """How many references have taken over since the manoeuvre in hand began or was resumed."""
        pursuit = self._situation.pursuit
        return pursuit.taken_over if pursuit is not None else 0

    def cannot_join(self, fleet: Fleet, graph: Optional[NeighbourGraph] = None) -> str:
        """Why the fleet cannot become this one just now, in words; "" when it can.

        In motion, whoever joins must stand, be ready, have been seen by the last steps, and have a neighbour.
        """
        with self._lock:
            now = self._situation
            if now.resting:
                return ""
            return now.members.cannot_join(fleet, now.fleet.names, graph or now.graph, now.settings)

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
            asking.begin(self._situation, name, snapshot, overrides or {}, request_id, answered)

    def then(
        self, name: str, snapshot: Snapshot, *, overrides: Optional[Mapping[str, float]] = None, request_id: str = "",
        answered: Answered = lambda _answer: None,
    ) -> None:
        """Ask for a manoeuvre after the one under way, in the place of what a sequence has next."""
        with self._lock:
            asking.then(self._situation, name, snapshot, overrides or {}, request_id, answered)

    def halt(self, now: float, reason: str) -> Answer:
        """A controlled stop of everyone; the fleet is then held."""
        with self._lock:
            situation = self._situation
            now = situation.moment(now)
            if situation.state is State.PLANNING:
                situation.desk.cancel("halted")
                situation.state, situation.reason = State.IDLE, reason
                return Answer(True, "nothing has moved")
            if situation.moving:
                found = stop(situation, now, reason)
                return Answer(True, f"stopping {found.manner}, {found.duration:.1f} s")
            if situation.state is State.HELD:
                situation.desk.cancel("halted")
            return Answer(True, f"the fleet is {situation.state.value}")

    def resume(self, snapshot: Snapshot, answered: Answered = lambda _answer: None) -> None:
        """Go on with a held manoeuvre, from where the robots stand."""
        with self._lock:
            asking.resume(self._situation, snapshot, answered)

    def abandon(self, now: float) -> Answer:
        """Give up a held manoeuvre; the fleet is idle afterwards and people may drive."""
        with self._lock:
            situation = self._situation
            if situation.state not in (State.HELD, State.PLANNING):
                return Answer(False, f"the fleet is {situation.state.value}; halt it first, then abandon")
            situation.desk.cancel("abandoned")
            situation.state, situation.reason, situation.pursuit = State.IDLE, "abandoned", None
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
            changing.change(self._situation, now, settings, fleet, graph)

    def arm(self, name: str, now: float) -> Answer:
        """Turn away from hazards by a manoeuvre, for ``hazard.armed_for`` seconds, instead of stopping."""
        with self._lock:
            situation = self._situation
            wanted = situation.manoeuvres.get(name)
            if not isinstance(wanted, TurnAway):
                return Answer(False, f"{name!r} is no manoeuvre that turns away; arm one of the kind turn_away")
            seconds = situation.settings.hazard.armed_for
            situation.hazard.armed, situation.hazard.armed_until = name, situation.moment(now) + seconds
            return Answer(True, f"{name} is armed for {seconds:g} s; it begins when a hazard is seen in motion")

    def hazard(self, x: float, y: float, now: float) -> Answer:
        """A hazard is at a point of the fleet's frame. In motion everyone stops or, where it is armed, turns away.

        A standing fleet is not moved by it; whoever begins or resumes keeps away from it until it has expired.
        """
        with self._lock:
            situation = self._situation
            now, point, watch = situation.moment(now), (float(x), float(y)), situation.hazard
            if not np.abs(point).max() <= FURTHEST:
                return Answer(False, f"({x:g}, {y:g}) is no point of a site")
            watch.look(now)
            watch.hear(point, now, situation.settings)
            if not situation.moving:
                seconds = situation.settings.hazard.expires
                return Answer(True, f"kept away from for {seconds:g} s; nothing is moved by it")
            face_hazard(situation, now, situation.observer.estimate(now, situation.planned).states[:, POSE])
            return Answer(True, watch.caution.text if watch.caution is not None else "")

    # Slow work

    def jobs(self) -> list[Job]:
        """Work to be done elsewhere; each job is handed out once."""
        with self._lock:
            return self._situation.desk.jobs()

    def deliver(self, outcome: Outcome, now: float) -> None:
        """The outcome of a job; outcomes that nobody waits for any more are dropped."""
        with self._lock:
            deliver(self._situation, outcome, self._situation.moment(now))

    # The loop

    def step(self, snapshot: Snapshot) -> Decision:
        """One tick: look, judge, plan, decide. Nothing is decided anew at a time that is no number."""
        situation = self._situation
        if not np.isfinite(snapshot.time):
            return attrs.evolve(situation.decision, state=situation.state, reason=situation.reason)
        with self._lock:
            seen = ticking.look(situation, snapshot)
        found = None if seen.prepared is None else ticking.solve(situation, seen.prepared, snapshot.time)
        with self._lock:
            return ticking.conclude(situation, seen, found)

    def commands(self, now: float) -> Optional[dict[str, Command]]:
        """What to send now; None when nothing is to be sent."""
        with self._lock:
            situation, pursuit = self._situation, self._situation.pursuit
            if not situation.state.holds_fleet or pursuit is None or not np.isfinite(now):
                return None
            situation.follow_clock(now, "commands")
            fleet, history, period = situation.fleet, situation.history, situation.period
            wanted, last = pursuit.schedule.at(now + history.effect_delay), history.last
            before = last[1] if last is not None else np.zeros((len(fleet), 2))
            elapsed = min(now - last[0], 2 * period) if last is not None else period
            rolling = history.rolling(now, manoeuvre.STAND_LAGS * fleet.response("speed_lag"))
            allowed, nonsense = gate.allow(
                wanted, before, max(elapsed, 0.0), fleet, situation.settings.site_rules, situation.caps, rolling
            )
            history.add(now, allowed)
            if nonsense.any() and situation.moving:
                stop(situation, now, "a plan held numbers that are not finite")
            return {
                name: Command(float(speed), float(curvature))
                for name, (speed, curvature) in zip(fleet.names, allowed) if name not in situation.members.loose
            }
