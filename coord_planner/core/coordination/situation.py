# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""All that the coordinator of one fleet knows and has decided; its parts share it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Optional

import attrs
import numpy as np

from .. import members
from ..chain import Chain
from ..fleet import Fleet
from ..graph import NeighbourGraph
from ..hazard import FURTHEST, HazardWatch
from ..history import CommandHistory, Planned
from ..judge import Judge
from ..manoeuvre import Manoeuvre
from ..membership import Membership
from ..messages import Decision, PoseSample, Snapshot, State
from ..motion import lags
from ..neighbours import Lookout
from ..observer import Estimate, Observer
from ..pursuit import Pursuit
from ..reference import Reference
from ..settings import Settings
from ..silence import Silence
from .desk import Desk, InForce

STANDING = 5e-3  # m/s
SINCE = 2.0  # seconds of the schedule that are kept behind now, for the observer
_SETTLE_LAGS = 5.0  # response lags after which a machine has stopped, to a hundredth of its speed
_ANOTHER_DAY = 10.0  # seconds between two looks at the clock in motion that are none of the planner's making
_SET_BACK = 0.2  # seconds by which the clock may go back without being set back


class Situation:
    """Attributes, besides those that their types explain:

    fleet: the robots carried in all arrays. graph: neighbours over the robots that are driven.
    desk: makes references. chain: the sequence under way. hazard: what is known of one.
    stop_over, planned_at, ended_at: planner times at which a stop is over, the last plan was made, motion ended.
    completed: whether the manoeuvre was. refused_change: why a change in motion could not be followed.
    seen: newest moments of ticks and of commands. caps: speed caps of the areas in which the robots are, (N,), m/s.
    asked_at, took: the last reference asked for in motion: when, and how long one took, seconds.
    """

    def __init__(
        self, fleet: Fleet, graph: NeighbourGraph, settings: Settings, manoeuvres: Mapping[str, Manoeuvre], desk: Desk
    ) -> None:
        self.fleet, self.graph, self.settings, self.manoeuvres = fleet, graph, settings, dict(manoeuvres)
        self.desk = desk
        self.members = Membership(fleet)
        self.period = 1.0 / settings.commands.rate
        self.state, self.reason, self.completed = State.IDLE, "", False
        self.pursuit: Optional[Pursuit] = None
        self.chain: Optional[Chain] = None
        self.silence: Optional[Silence] = None
        self.refused_change = ""
        self.stop_over = self.planned_at = self.ended_at = 0.0
        self.asked_at = self.took = 0.0
        self.seen: dict[str, float] = {}
        self.watchman, self.lookout, self.hazard = Judge(), Lookout(), HazardWatch()
        self.decision = Decision(0.0, State.IDLE, fleet.names)
        self._know_nothing()

    def adopt(self) -> None:
        """While the fleet rests, others are taken as they are wanted: nothing that was known of the old ones counts."""
        wanted = self.members.wanted
        if wanted.names == self.members.under_command(self.fleet.names) == self.fleet.names:
            return
        self.members.start_afresh(wanted)
        self.fleet, self.graph = wanted, self.graph.relative_to(wanted.names)
        self.pursuit, self.state = None, State.IDLE
        self.decision = Decision(
            self.decision.time, State.IDLE, self.fleet.names, self.reason, completed=self.completed
        )
        self._know_nothing()

    def take_up(self, made: Reference) -> None:
        """Whoever a reference drives is under command from now on."""
        self.members.take_up(self.fleet.names[k] for k in made.task.stands)
        self.observer.loose = self.members.loose

    def look(self, snapshot: Snapshot) -> Estimate:
        """Take in the poses of a snapshot and estimate where everybody is."""
        jumped = self.observer.observe(self._believed(snapshot), self.planned)
        return attrs.evolve(self.observer.estimate(snapshot.time, self.planned), jumped=jumped)

    def moment(self, now: float) -> float:
        """A moment to reckon with: the newest known one where the clock shows no number.

        In motion also where it shows another day than at the last tick: a stop is not put off until then.
        """
        newest = max(self.seen.values(), default=self.decision.time)
        strange = self.moving and bool(self.seen) and abs(now - newest) > _ANOTHER_DAY
        return newest if strange or not np.isfinite(now) else now

    def follow_clock(self, now: float, who: str) -> None:
        """A clock that was set back takes everything timed back with it: a stop in hand is not left for a later day."""
        back = now - self.seen.get(who, now)
        if back < -_SET_BACK:
            self.seen = {each: time + back for each, time in self.seen.items()}
            for timed in (self.history, self.observer, self.members, self.hazard):
                timed.shift(back)
            if self.pursuit is not None:
                self.pursuit.shift(back)
            self.stop_over, self.planned_at = self.stop_over + back, self.planned_at + back
            self.ended_at += back
            self.decision = attrs.evolve(self.decision, time=self.decision.time + back)
        self.seen[who] = now

    def names(self, pair: tuple[int, int]) -> tuple[str, str]:
        """Of two robots."""
        return self.fleet.names[pair[0]], self.fleet.names[pair[1]]

    @property
    def in_force(self) -> InForce:
        """What a reference is made for."""
        return self.fleet, self.graph, self.settings

    @property
    def moving(self) -> bool:
        """Manoeuvre under way."""
        return self.state is State.MOVING

    @property
    def resting(self) -> bool:
        """Nobody is under command."""
        return self.state in (State.IDLE, State.ENDED)

    @property
    def planned(self) -> Optional[Planned]:
        """What is to be commanded, where anything is."""
        return self.pursuit.schedule.at if self.pursuit is not None and self.state.holds_fleet else None

    @property
    def effect_delay(self) -> float:
        """Seconds until a command changes what every robot does."""
        return float(self.history.effect_delay.max())

    @property
    def lead_time(self) -> float:
        """Seconds from a snapshot to the first moment at which a new plan can still change what every robot does."""
        return self.settings.horizon.budget + self.effect_delay

    @property
    def settling(self) -> float:
        """Seconds after its command to stand until every machine does."""
        return _SETTLE_LAGS * float(lags(self.fleet).max())

    @property
    def driving(self) -> tuple[str, ...]:
        """Those that a new reference is to drive."""
        return self.members.driving(self.fleet.names)

    @property
    def under_command(self) -> tuple[str, ...]:
        """Those that are driven now and go on being driven."""
        return self.members.under_command(self.fleet.names)

    @property
    def outside(self) -> tuple[str, ...]:
        """Carried only as obstacles: who leaves, and who does not drive yet."""
        driven = self.under_command
        return tuple(name for name in self.fleet.names if name not in driven)

    @property
    def neighbours(self) -> NeighbourGraph:
        """The graph as it counts for a new reference, over all rows."""
        return members.among(self.graph, self.fleet.names, self.driving)

    def _know_nothing(self) -> None:
        self.history = CommandHistory(self.fleet.response("command_delay"), self.period)
        self.observer = Observer(self.fleet, self.settings.poses, self.history)
        self.caps = np.full(len(self.fleet), np.inf)

    def _believed(self, snapshot: Snapshot) -> dict[str, PoseSample]:
        poses = self.settings.poses
        return {
            name: pose for name, pose in snapshot.poses.items()
            if -poses.max_future <= snapshot.time - pose.stamp <= poses.max_age
            and np.abs([pose.x, pose.y, pose.heading]).max() <= FURTHEST
        }
