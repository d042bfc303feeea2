# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Requests to move: a manoeuvre from standing, the next one, or the rest of one that was held."""

from __future__ import annotations

from collections.abc import Mapping

from ...errors import CoordPlannerError, RefusedError
from .. import manoeuvre, members, reference
from ..chain import Chain, chain_of
from ..messages import Answer, Snapshot, State
from ..problem import POSE, SPEED, SPEED_COMMAND
from ..reference import Reference
from .changing import look_for_neighbours
from .desk import Answered
from .fitness import check_alone, check_fit, check_free, check_joining, check_time, manoeuvre_of
from .joints import ask_next, next_maker
from .renewal import replace
from .situation import Situation
from .turnout import grow


def begin(
    situation: Situation, name: str, snapshot: Snapshot, overrides: Mapping[str, float], request_id: str,
    answered: Answered,
) -> None:
    """See ``Coordinator.begin``."""
    try:
        wanted = manoeuvre_of(situation, name, overrides)
        check_time(snapshot)
        if situation.moving:
            check_alone(snapshot)
            replace(situation, snapshot.time, name, wanted, answered, request_id)
            return
        check_free(situation, "begun")
        situation.adopt()
        estimate = situation.look(snapshot)
        look_for_neighbours(situation, snapshot.time, estimate, at_once=True)
        check_fit(situation, estimate, snapshot)
    except CoordPlannerError as error:
        answered(Answer(False, str(error), request_id))
        return
    # Nothing is known of what people sent the robots meanwhile; they must stand.
    situation.history.clear()
    fleet, graph, settings = situation.fleet, situation.neighbours, situation.settings
    states, hazard = estimate.states, situation.hazard.point
    states[:, POSE.stop :] = 0.0

    def make() -> Reference:
        task = manoeuvre.work_out(name, wanted, fleet, settings, states[:, POSE], 0.0, graph.hops(), hazard=hazard)
        return reference.make(task, fleet, graph, settings, states)

    situation.state, situation.reason, situation.completed = State.PLANNING, "", False
    situation.desk.ask(
        situation.in_force, "begin", make, answered, request_id, chain=chain_of(name, wanted)
    )


def then(
    situation: Situation, name: str, snapshot: Snapshot, overrides: Mapping[str, float], request_id: str,
    answered: Answered,
) -> None:
    """See ``Coordinator.then``."""
    desk, pursuit = situation.desk, situation.pursuit
    try:
        wanted = manoeuvre_of(situation, name, overrides)
        check_time(snapshot)
        if not situation.moving or pursuit is None:
            raise RefusedError(f"nothing is under way: the fleet is {situation.state.value}", f"begin {name}")
        if desk.request is not None and desk.request.kind in ("change", "replace"):
            raise RefusedError("the rest of the manoeuvre is just being made anew", "ask again in a moment")
    except CoordPlannerError as error:
        answered(Answer(False, str(error), request_id))
        return
    if desk.request is not None:
        desk.cancel(f"{name} was asked for instead")
    task = pursuit.last().reference.task if situation.chain is None else pursuit.reference.task
    alone = Chain(task.name, ((task.name, situation.manoeuvres.get(task.name, wanted)),))
    ask_next(situation, (situation.chain or alone).with_next(name, wanted), answered, request_id)


def resume(situation: Situation, snapshot: Snapshot, answered: Answered) -> None:
    """See ``Coordinator.resume``."""
    desk, pursuit, chain = situation.desk, situation.pursuit, situation.chain
    if situation.state is not State.HELD or pursuit is None or desk.request is not None:
        answered(Answer(False, f"nothing to resume: the fleet is {situation.state.value}"))
        return
    situation.members.waiting.clear()
    try:
        check_time(snapshot)
        check_joining(situation)
        grow(situation)
        estimate = situation.look(snapshot)
        look_for_neighbours(situation, snapshot.time, estimate, at_once=True)
        check_fit(situation, estimate, snapshot)
    except RefusedError as error:
        answered(Answer(False, str(error)))
        return
    fleet, graph, settings = situation.fleet, situation.neighbours, situation.settings
    driving, hazard = situation.driving, situation.hazard.point
    old, since, states = pursuit.reference, pursuit.s(snapshot.time), estimate.states
    states[:, SPEED] = states[:, SPEED_COMMAND] = 0.0
    if chain is not None and chain.more and since >= old.task.arrival - 1e-9:
        maker = next_maker(situation, chain, states, driving)
        desk.ask(situation.in_force, "resume", maker, answered, "", chain=chain.moved_on())
        return
    wanted = situation.manoeuvres.get(old.task.name)
    desk.ask(
        situation.in_force, "resume",
        lambda: members.resumed(old, since, fleet, graph, settings, states, driving, wanted, hazard),
        answered, "", chain=chain,
    )
