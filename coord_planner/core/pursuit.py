# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A manoeuvre under way: where the group is along its reference, and the plan that is being driven."""

from __future__ import annotations

from collections.abc import Collection
from typing import Optional

import attrs
import numpy as np

from . import tick as ticks
from .fleet import Fleet
from .members import extended
from .observer import Estimate
from .plan import Plan
from .problem import SPEED, SPEED_COMMAND, THETA, Problem
from .progress import GroupProgress
from .reference import Reference
from .schedule import Schedule, constant, of_plan
from .settings import Settings
from .solver import Start
from .tick import Tick

_FALL = 0.9  # part of the weakest brake with which the pace may fall
_SLOW = 0.3  # part of the asked speed below which the pace falls no faster


@attrs.frozen(eq=False)
class Prepared:
    """A tick that is ready to be solved.

    Attributes:
        s: its nodes in seconds of the manoeuvre, shape (M + 1,). reference: that it ends on.
        slower: the group's pace as a part of what it was for the plan being driven.
    """

    problem: Problem
    s: np.ndarray
    start: Start
    reference: Reference
    slower: float


@attrs.frozen(eq=False)
class Takeover:
    """A reference that the group changes over to.

    Attributes:
        reference: from ``reference.plan.times[0]`` on.
        at: second of the manoeuvre under way at which that moment falls.
    """

    reference: Reference
    at: float


class Pursuit:
    """Not thread-safe by itself: the coordinator guards it.

    Args:
        begins: moment at which second 0 of the manoeuvre falls (or ``at`` of it), seconds on the clock.
        values: commands in force until then, shape (N, 2).
    """

    def __init__(self, reference: Reference, begins: float, at: float, values: np.ndarray, fleet: Fleet) -> None:
        self.reference = reference
        self.progress = GroupProgress(len(fleet))
        self.schedule: Schedule = constant(values, begins)
        self.tick: Optional[Tick] = None
        self.ahead: Optional[Plan] = None  # the plan of the last tick, through the end of the manoeuvre to the next
        self.coming: tuple[Takeover, ...] = ()  # in the order in which they fall due
        self.taken_over = 0  # references so far
        self._s, self._time = at, begins
        self._updated = begins
        self._plan_pace = 1.0  # of the plan being driven
        self.behind = np.zeros(len(fleet))

    def shift(self, by: float) -> None:
        """The clock was set: whatever was or is to be at a moment is so many seconds later by it."""
        self._time, self._updated = self._time + by, self._updated + by
        self.schedule = Schedule(self.schedule.times + by, self.schedule.values)

    def freeze(self, now: float) -> None:
        """The group leaves its reference for a stop: its progress stays what it is now."""
        self._s, self._time, self.progress.pace = self.s(now), now, 0.0

    def freeze_at_end(self) -> None:
        """The group stands where its reference ends."""
        self._s = max(self._s, self.reference.end)

    @property
    def pace(self) -> float:
        """Seconds of the manoeuvre per second of the clock."""
        return self.progress.pace

    def s(self, time: float) -> float:
        """Second of the manoeuvre at a moment."""
        return self._s + self.pace * (time - self._time)

    def clock(self, s: float) -> float:
        """Moment at which a second of the manoeuvre is reached at the present pace."""
        return self._time + (s - self._s) / self.pace

    def grow(self, fleet: Fleet, settings: Settings, poses: np.ndarray) -> None:
        """Room for robots that come last from now on and stand; poses of all, shape (N, 3)."""
        more = len(fleet) - len(self.behind)
        self.reference = extended(self.reference, fleet, settings, poses)
        self.coming = tuple(
            attrs.evolve(each, reference=extended(each.reference, fleet, settings, poses)) for each in self.coming
        )
        self.progress.grow(more)
        self.behind = np.concatenate([self.behind, np.zeros(more)])
        self.schedule, self.tick, self.ahead = self.schedule.grown(more), None, None

    def drop_drivers_of(self, row: int) -> None:
        """What is to come no longer comes, from the first on in which a robot is driven that must not be."""
        kept = [row in each.reference.task.stands for each in self.coming]
        self.coming = self.coming[: kept.index(False) if False in kept else None]

    def advance(
        self, now: float, estimate: Estimate, fleet: Fleet, settings: Settings, outside: Collection[int] = ()
    ) -> None:
        """Move the group on, and slow it when one of them is held up; nobody waits for those at ``outside``."""
        s_now = self.s(now)
        asked = self.reference.state(s_now)
        heading, gear = asked[:, THETA], self.reference.task.directions(s_now)
        ahead = gear[:, None] * np.stack([np.cos(heading), np.sin(heading)], axis=1)
        self.behind = np.sum((asked[:, :2] - estimate.states[:, :2]) * ahead, axis=1)
        expected = np.minimum(gear * estimate.states[:, SPEED_COMMAND], self.pace * gear * asked[:, SPEED])
        deficit = np.maximum(expected - gear * estimate.states[:, SPEED], 0.0) * (estimate.speed_factor < 0.99)
        aside = [*self.reference.task.stands, *outside]
        self.behind[aside] = deficit[aside] = 0.0
        elapsed = max(now - self._updated, 0.0)
        fastest = max(float(np.max(np.abs(asked[:, SPEED]))), _SLOW * float(np.max(self.reference.task.asked)), 1e-3)
        fall = _FALL * float(np.min(fleet.limit("max_braking"))) / fastest
        self._s, self._time, self._updated = s_now, now, now
        if s_now >= 0.0:
            self.progress.update(elapsed, self.behind, deficit, settings.progress, fall)

    def last(self) -> Takeover:
        """What the group will follow once all takeovers have come, and from when on."""
        return self.coming[-1] if self.coming else Takeover(self.reference, float(self.reference.plan.times[0]))

    def expect(self, takeover: Takeover) -> None:
        """Change over to a reference when its moment has come, in the place of what was to come from then on."""
        self.coming = (*(each for each in self.coming if each.at < takeover.at - 1e-9), takeover)

    def before(self, reference: Optional[Reference]) -> Takeover:
        """What the group will follow last before it changes over to a reference, or at all."""
        kept = tuple(each for each in self.coming if each.reference is not reference)
        return kept[-1] if kept else Takeover(self.reference, float(self.reference.plan.times[0]))

    def forget(self, reference: Optional[Reference]) -> None:
        """Do not change over to a reference after all."""
        self.coming = tuple(each for each in self.coming if each.reference is not reference)

    def swap_when_due(self, at: float) -> bool:
        """Change over to what has fallen due; seconds of the manoeuvre are counted as it counts them."""
        swapped = False
        while self.coming and self.s(at) >= self.coming[0].at - 1e-9:
            due, *rest = self.coming
            earlier = due.at - float(due.reference.plan.times[0])  # 0 for the rest of the same manoeuvre
            tick = self._carried(due.reference) if abs(earlier) < 1e-9 else None
            self.reference, self.tick = due.reference, tick
            self._s -= earlier
            self.taken_over += 1
            self.coming = tuple(attrs.evolve(each, at=each.at - earlier) for each in rest)
            swapped = True
        return swapped

    def prepare(self, at: float, initial: np.ndarray, fleet: Fleet, settings: Settings) -> Prepared:
        """Pose the tick whose plan takes effect at a moment, from the state predicted for it."""
        problem, s, start = ticks.pose_problem(
            self.reference, fleet, settings, initial, max(self.s(at), 0.0), at, self.pace, self.tick,
            self.progress.lag,
        )
        return Prepared(problem, s, start, self.reference, 1.0 if self.tick is None else self.pace / self._plan_pace)

    def install(self, prepared: Prepared, plan: Plan, since: float) -> None:
        """Drive a solved plan from its first node on."""
        self.tick = Tick(plan, prepared.s, prepared.reference)
        self.ahead = plan
        for each in self.coming:
            if each.at >= self.reference.end - 1e-9:
                self.ahead = ticks.through(plan, prepared.s, each.at, each.reference, prepared.problem.pace)
        self.schedule = self.schedule.splice(of_plan(self.ahead), float(plan.times[0]), since)
        self._plan_pace = prepared.problem.pace

    def _carried(self, new: Reference) -> Optional[Tick]:
        """The last plan as a start for the rest of the same manoeuvre, where the problems have the same shape."""
        if self.tick is None:
            return None
        old = self.tick.reference
        same = (
            old.task.name == new.task.name
            and len(old.plan.states) == len(new.plan.states)
            and np.array_equal(old.pairs, new.pairs)
            and np.array_equal(old.graph.index_edges(), new.graph.index_edges())
            and np.array_equal(old.fencing.bound, new.fencing.bound)
        )
        return attrs.evolve(self.tick, reference=new) if same else None

