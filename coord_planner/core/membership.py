# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who is wanted in the fleet, who is under command, and who stands beside it: the part of it that has a memory."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping

import attrs
import numpy as np

from .bystanders import Bystanders
from .fleet import Fleet
from .graph import NeighbourGraph
from .neighbours import from_poses
from .observer import Estimate
from .settings import Poses, Settings


class Membership:
    """Carried are the robots in the coordinator's arrays; everybody else is known by name only.

    Attributes:
        wanted: the fleet as it was asked for last.
        loose: carried and not under command: they get no commands, and people may drive them.
        waiting: wanted, and why they join only when the fleet is idle.
    """

    def __init__(self, fleet: Fleet) -> None:
        self.bystanders = Bystanders()
        self.start_afresh(fleet)

    def start_afresh(self, fleet: Fleet) -> None:
        """Everybody who is wanted is under command, and nobody else."""
        self.wanted = fleet
        self.loose: frozenset[str] = frozenset()
        self.waiting: dict[str, str] = {}
        self._stood: dict[str, float] = {}

    def want(self, fleet: Fleet) -> None:
        """Another fleet is asked for."""
        self.wanted = fleet
        self.waiting = {name: reason for name, reason in self.waiting.items() if name in fleet.names}

    def everybody(self, carried: Collection[str]) -> tuple[str, ...]:
        """Those carried, and those who are wanted besides."""
        return (*carried, *(name for name in self.wanted.names if name not in carried))

    def absent(self, carried: Collection[str]) -> tuple[str, ...]:
        """Those who are to join and are not carried yet."""
        return tuple(name for name in self.wanted.names if name not in carried and name not in self.waiting)

    def unfit(self, carried: Collection[str], poses: Poses) -> dict[str, str]:
        """Who is to join and could not be driven just now, with the reason."""
        found = {
            name: self.bystanders.unfit(name, poses) for name in (*self.absent(carried), *self.joining(carried))
        }
        return {name: reason for name, reason in found.items() if reason}

    def driving(self, carried: Iterable[str]) -> tuple[str, ...]:
        """Those carried that a new reference is to drive."""
        return tuple(name for name in carried if name in self.wanted.names and name not in self.waiting)

    def under_command(self, carried: Iterable[str]) -> tuple[str, ...]:
        """Those that are driven now and go on being driven."""
        return tuple(name for name in self.driving(carried) if name not in self.loose)

    def joining(self, carried: Iterable[str]) -> tuple[str, ...]:
        """Those that stand until a reference that drives them takes over."""
        return tuple(name for name in self.driving(carried) if name in self.loose)

    def cannot_join(
        self, wanted: Fleet, carried: Collection[str], graph: NeighbourGraph, settings: Settings
    ) -> str:
        """Why somebody who is wanted now and was not before cannot join in motion, in words; "" when all can."""
        new = [name for name in wanted.names if name not in self.wanted.names]
        new = [name for name in new if name not in carried or name in self.loose]
        if not new:
            return ""
        reason = self.bystanders.first_unfit(new, settings.poses)
        if reason:
            return reason
        there = [name for name in self.driving(carried) if name in wanted.names]
        places = self.bystanders.places((*there, *new))
        if settings.neighbours.source != "listed" and np.isfinite(places).all():
            graph = from_poses(settings.neighbours, (*there, *new), places)
        parts = graph.relative_to((*there, *new)).components()
        apart = [name for name in new if not any(name in part and set(part) & set(there) for part in parts)]
        if apart and not settings.coupling.may_split:
            return f"no edge of the neighbour graph joins {', '.join(apart)} to the robots that are driven"
        return ""

    def shift(self, by: float) -> None:
        """The clock was set: whatever was at a moment was so many seconds later by it."""
        self._stood = {name: since + by for name, since in self._stood.items()}

    def let_go(self, now: float, standing: Mapping[str, bool], rest: float) -> tuple[str, ...]:
        """Who has stood for long enough to be let go.

        Args:
            standing: whether each of those that leave is told to stand. rest: seconds for which it takes that.
        """
        self._stood = {name: self._stood.get(name, now) for name, stands in standing.items() if stands}
        done = tuple(name for name, since in self._stood.items() if now - since >= rest)
        self.loose |= frozenset(done)
        return done

    def take_up(self, standing: Iterable[str]) -> None:
        """A reference is in force in which only ``standing`` are not driven."""
        self.loose &= frozenset(standing)

    def put_off(self, names: Iterable[str], reason: str) -> None:
        """Somebody cannot join the running manoeuvre."""
        self.waiting.update(dict.fromkeys(names, reason))


def overlooked(estimate: Estimate, fleet: Fleet, outside: Collection[str]) -> Estimate:
    """An estimate in which nothing is wrong with some robots: they are obstacles where they were last seen."""
    if not outside:
        return estimate
    out = np.array([name in outside for name in fleet.names])
    return attrs.evolve(
        estimate, speed_factor=np.where(out, 1.0, estimate.speed_factor), growth=np.where(out, 0.0, estimate.growth),
        jumped=tuple(name for name in estimate.jumped if name not in outside),
    )
