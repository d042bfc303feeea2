# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""References that take over in motion: the rest made anew, or another manoeuvre."""

from __future__ import annotations

from functools import partial
from typing import Optional

import attrs

from .. import members
from ..chain import chain_of
from ..hazard import Point
from ..manoeuvre import Manoeuvre
from ..reference import Reference
from .desk import Answered, Request
from .joints import forget_next
from .situation import Situation

_TAKES = 1.5  # times as long as the last one took, one that came too late is given


def _branch(situation: Situation, now: float) -> tuple[Reference, float, float]:
    """Where a new reference can leave the one that will be followed by the time it is made.

    Returns:
        that one, the second of its own at which to leave it, and the second of the manoeuvre under way.
    """
    pursuit = situation.pursuit
    assert pursuit is not None
    last = pursuit.last()
    earlier = last.at - float(last.reference.plan.times[0])
    situation.asked_at, lead = now, max(situation.settings.horizon.lead, _TAKES * situation.took)
    at = max(pursuit.s(now + lead), last.at)
    return last.reference, at - earlier, at


def remake_if_free(situation: Situation, now: float) -> None:
    """Make the rest anew, unless what is being made is looked at again when it is there."""
    desk = situation.desk
    if desk.request is not None and desk.request.kind == "next":
        desk.cancel("something was changed meanwhile; ask again")
    if desk.request is None or desk.request.kind == "change":
        forget_next(situation)
        remake(situation, now)


def remake(situation: Situation, now: float) -> None:
    """Make the rest of the manoeuvre anew, under what is now in force."""
    old, leaves, at = _branch(situation, now)
    if leaves > old.task.arrival - 2 * situation.settings.horizon.interval:  # it only settles from then on
        joining = situation.members.joining(situation.fleet.names)
        if situation.chain is None or not situation.chain.more:  # otherwise they join the next part
            situation.members.put_off(joining, "the running manoeuvre is nearly over")
        return
    fleet, graph, settings, driving = situation.fleet, situation.neighbours, situation.settings, situation.driving
    task, wanted = old.task.under(settings), situation.manoeuvres.get(old.task.name)
    situation.desk.ask(
        situation.in_force, "change", lambda: members.rest(task, fleet, graph, settings, old, leaves, driving, wanted),
        lambda _a: None, "", at, partial(remake, situation),
    )


def replace(
    situation: Situation, now: float, name: str, wanted: Manoeuvre, answered: Answered, request_id: str,
    hazard: Optional[Point] = None,
) -> None:
    """Make a reference for another manoeuvre, which leaves the running one from a moment ahead.

    What it keeps away from stays ``hazard``, however often it is made again; the one that is known when left out.
    """
    before = situation.desk.request
    if before is not None and before.kind == "replace" and before.answered is not answered:
        situation.desk.cancel(f"{name} was asked for instead")  # and not only made again from a later moment
    owed = before is not None and (before.kind == "change" or before.supersedes_change)
    forget_next(situation)
    old, leaves, at = _branch(situation, now)
    fleet, settings, states = situation.fleet, situation.settings, old.state(leaves)
    driving = situation.members.under_command(fleet.names)
    graph = members.among(situation.graph, fleet.names, driving)
    away = hazard or situation.hazard.point
    situation.desk.ask(
        situation.in_force, "replace",
        lambda: members.replaced(name, wanted, fleet, graph, settings, states, driving, away),
        answered, request_id, at, lambda later: replace(situation, later, name, wanted, answered, request_id, away),
        chain_of(name, wanted),
    )
    if owed and situation.desk.request is not None:
        situation.desk.request = attrs.evolve(situation.desk.request, supersedes_change=True)


def follow_changes(situation: Situation, request: Request, now: float) -> None:
    """What was changed while a reference was being made is followed at once."""
    pursuit = situation.pursuit
    if pursuit is None:
        return
    stands = {situation.fleet.names[k] for k in pursuit.last().reference.task.stands}
    others = stands != set(situation.fleet.names) - set(situation.driving)
    if others or request.made_for != situation.in_force:
        remake(situation, now)
