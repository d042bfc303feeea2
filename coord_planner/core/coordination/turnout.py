# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who joins and who leaves while the fleet is under command."""

from __future__ import annotations

import numpy as np

from .. import members
from ..messages import Snapshot, State
from ..pursuit import Pursuit
from .joints import forget_next
from .renewal import remake_if_free
from .situation import STANDING, Situation


def grow(situation: Situation) -> None:
    """Rows for those who are wanted and not carried yet; they stand until they are driven."""
    pursuit, new = situation.pursuit, situation.members.absent(situation.fleet.names)
    if pursuit is None or not new:
        return
    forget_next(situation)
    fleet = members.grown(situation.fleet, situation.members.wanted, new)
    there = [situation.members.bystanders.pose(name) for name in new]
    situation.history.grow(fleet.response("command_delay"), situation.period)
    situation.observer.grow(fleet)
    pursuit.grow(fleet, situation.settings, np.concatenate([np.zeros((len(situation.fleet), 3)), np.array(there)]))
    situation.fleet, situation.caps = fleet, np.append(situation.caps, np.full(len(new), np.inf))
    situation.members.loose |= frozenset(new)
    situation.observer.loose = situation.members.loose


def follow_members(situation: Situation, snapshot: Snapshot) -> bool:
    """Who joins gets a row, and who has left and stands is let go; returns whether there are new rows."""
    situation.members.bystanders.see(snapshot)
    if situation.state is State.IDLE:
        situation.adopt()
    pursuit, before = situation.pursuit, len(situation.fleet)
    if pursuit is None or not situation.state.holds_fleet:
        return False
    if situation.moving:
        for name, reason in situation.members.unfit(situation.fleet.names, situation.settings.poses).items():
            put_off(situation, (name,), reason, snapshot.time)
        grow(situation)
        if len(situation.fleet) > before:
            remake_if_free(situation, snapshot.time)
    _let_go(situation, snapshot.time, pursuit)
    return len(situation.fleet) > before


def _let_go(situation: Situation, now: float, pursuit: Pursuit) -> None:
    speeds, still = pursuit.schedule.moment(now)[:, 0], situation.state in (State.HELD, State.ENDED)
    standing = {
        name: bool(abs(speeds[k]) < STANDING)
        for k, name in enumerate(situation.fleet.names)
        if name not in (*situation.driving, *situation.members.loose) and (still or k in pursuit.reference.task.stands)
    }
    rest = situation.settings.commands.zeros_after_end + situation.settling
    rows = [situation.fleet.index(name) for name in situation.members.let_go(now, standing, rest)]
    if rows:
        situation.history.forget(rows)
        pursuit.schedule = pursuit.schedule.stilled(rows)
        situation.observer.loose = situation.members.loose


def put_off(situation: Situation, names: tuple[str, ...], reason: str, now: float) -> None:
    """Robots that cannot join the running manoeuvre wait until the fleet is idle; the others go on."""
    situation.members.put_off(names, reason)
    forget_next(situation)
    for name in set(names) & set(situation.fleet.names):
        if situation.pursuit is not None:
            situation.pursuit.drop_drivers_of(situation.fleet.index(name))
    remake_if_free(situation, now)
