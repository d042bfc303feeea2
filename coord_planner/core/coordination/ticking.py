# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One tick in motion: judge, plan, drive, decide."""

from __future__ import annotations

from typing import Any, Optional

import attrs
import numpy as np

from ...errors import SolveError
from .. import ladder, rules
from ..caps import caps
from ..fence import hazards
from ..judge import View
from ..membership import overlooked
from ..messages import Caution, Decision, Snapshot, State
from ..observer import Estimate
from ..plan import SHORT, Plan
from ..problem import POSE
from ..pursuit import Prepared, Pursuit
from .changing import look_for_neighbours
from .ending import settle, stop
from .facing import face_hazard
from .joints import look_after_next
from .renewal import remake_if_free
from .situation import SINCE, Situation
from .turnout import follow_members


@attrs.frozen(eq=False)
class Look:
    """What a tick found before it solves: where everybody is, what is wrong, and the problem, where there is one."""

    time: float
    estimate: Estimate
    cautions: list[Caution]
    prepared: Optional[Prepared] = None


def look(situation: Situation, snapshot: Snapshot) -> Look:
    """Take in a snapshot, and do what follows from it at once."""
    now, cautions = snapshot.time, list[Caution]()
    situation.follow_clock(now, "step")
    situation.hazard.take(snapshot.hazard, now, situation.settings)
    grew = follow_members(situation, snapshot)
    estimate = overlooked(situation.look(snapshot), situation.fleet, situation.outside)
    situation.caps = caps(situation.fleet, situation.settings, estimate.states[:, None, POSE])[:, 0]
    settle(situation, now)
    look_for_neighbours(situation, now, estimate, at_once=grew)
    pursuit = situation.pursuit
    if situation.state in (State.STOPPING, State.HELD) and pursuit is not None:
        cautions += situation.watchman.look_on(_view(situation, snapshot, estimate, pursuit))
    elif situation.moving and pursuit is not None:
        outside = [situation.fleet.index(name) for name in situation.outside]
        pursuit.advance(now, estimate, situation.fleet, situation.settings, outside)
        face_hazard(situation, now, estimate.states[:, POSE])
        if situation.moving:
            cautions += _judge(situation, snapshot, estimate)
        if situation.moving:
            look_after_next(situation, cautions)
            return Look(now, estimate, cautions, _prepare(situation, now))
    return Look(now, estimate, cautions)


def conclude(situation: Situation, seen: Look, found: Optional[ladder.Found]) -> Decision:
    """Drive by what was solved, if the fleet still moves, and decide."""
    if seen.prepared is not None and found is not None and situation.moving:
        seen.cautions.extend(found.cautions)
        _drive(situation, seen.prepared, found, seen.time)
    if len(seen.estimate.age) == len(situation.fleet):  # otherwise others are wanted since
        plan = None if found is None else found.plan
        situation.decision = _decide(situation, seen.time, seen.estimate, plan, seen.cautions)
    return situation.decision


def _judge(situation: Situation, snapshot: Snapshot, estimate: Estimate) -> list[Caution]:
    """What goes wrong while moving, and the stop that follows from it."""
    pursuit = situation.pursuit
    assert pursuit is not None
    found = situation.watchman.look(_view(situation, snapshot, estimate, pursuit))
    grave = [caution for caution in found if rules.response(caution) is rules.Response.STOP]
    if grave:
        stop(situation, snapshot.time, grave[0].text, estimate=estimate)
    return found


def _view(situation: Situation, snapshot: Snapshot, estimate: Estimate, pursuit: Pursuit) -> View:
    """What the judge looks at."""
    at = snapshot.time + situation.effect_delay
    driven = situation.graph.relative_to(situation.under_command)
    return View(
        snapshot, estimate, situation.fleet, driven, situation.settings, pursuit, at,
        1.0 / situation.settings.horizon.rate, situation.refused_change, situation.silence,
        hazards(situation.settings, situation.hazard.point), frozenset(situation.outside),
        dict(situation.members.waiting),
    )


def _prepare(situation: Situation, now: float) -> Optional[Prepared]:
    """The problem of this tick, from where the next plan can still change something; None when nothing is left."""
    pursuit = situation.pursuit
    assert pursuit is not None
    at = now + situation.lead_time
    if pursuit.swap_when_due(at):
        situation.take_up(pursuit.reference)
        if situation.chain is not None and pursuit.reference is situation.chain.expected:
            situation.silence, situation.chain = situation.chain.silence, situation.chain.moved_on()
            if situation.members.joining(situation.fleet.names):  # who came too late for the part before
                remake_if_free(situation, now)
    if pursuit.s(at) >= pursuit.reference.end:
        situation.planned_at = now  # nothing is left to plan: the commands run out in zeros
        return None
    if pursuit.s(at) < 0.0:
        at = pursuit.clock(0.0)
    predicted = situation.observer.estimate(at, situation.planned).states
    return pursuit.prepare(at, predicted, situation.fleet, situation.settings)


def solve(situation: Situation, prepared: Prepared, now: float) -> ladder.Found:
    """Solve a tick, and find what can be driven."""
    settings, desk = situation.settings, situation.desk
    solved: Optional[Plan] = None
    failure: Optional[Caution] = None
    try:
        plan = desk.solve(prepared.problem, prepared.start, True, desk.budget)
        if plan.solve_time > desk.budget + situation.period:  # the moment it starts from has passed
            failure = rules.plan_late(settings, plan.solve_time)
        else:
            solved = plan
    except SolveError as error:
        failure = rules.plan_failed(settings, str(error))
    return ladder.find(prepared, solved, failure, settings, now - situation.planned_at)


def _drive(situation: Situation, prepared: Prepared, found: ladder.Found, now: float) -> None:
    """Drive by what was found, or stop where nothing was."""
    pursuit = situation.pursuit
    assert pursuit is not None
    if found.plan is None:
        stop(situation, now, found.cautions[-1].text)
        return
    pursuit.install(prepared, found.plan, now - SINCE)
    if found.fresh:
        situation.planned_at = now


def _decide(
    situation: Situation, now: float, estimate: Estimate, plan: Optional[Plan], cautions: list[Caution]
) -> Decision:
    """What is told of a tick."""
    pursuit = situation.pursuit
    tick = pursuit.tick if pursuit is not None else None
    ahead = pursuit.ahead if pursuit is not None else None
    clearance, pair = (np.inf, (-1, -1)) if ahead is None else ahead.closest(1)
    if situation.moving and clearance < situation.settings.site_rules.min_clearance - SHORT:
        cautions.append(rules.clearance_short(situation.settings, situation.names(pair), clearance))
    if situation.moving and tick is not None:
        spare, robot, area = tick.reference.fencing.least(situation.fleet, tick.plan.dense(1))
        if spare < -SHORT:
            cautions.append(rules.keep_out_ahead(situation.settings, situation.fleet.names[robot], area, -spare))
    if situation.hazard.caution is not None:
        cautions.append(situation.hazard.caution)
    common: dict[str, Any] = {
        "time": now, "state": situation.state, "names": situation.fleet.names, "reason": situation.reason,
        "completed": situation.completed, "poses": estimate.states[:, POSE],
        "warnings": situation.watchman.hold(now, cautions), "outside": situation.outside,
    }
    if pursuit is None:
        return Decision(**common)
    task = pursuit.reference.task
    done = np.clip(pursuit.s(now) / pursuit.reference.end, 0.0, 1.0)
    name = task.name
    if situation.chain is not None and len(situation.chain.parts) > 1:
        name, done = f"{situation.chain.name}: {name}", situation.chain.progress(done)
    return Decision(
        **common, manoeuvre=name, progress=float(done),
        progress_rate=pursuit.pace if situation.moving else 0.0,
        coupling=task.coupling, alignment=task.alignment, lag=pursuit.behind,
        plan_times=np.zeros(0) if ahead is None else ahead.times,
        plan_poses=np.zeros((len(situation.fleet), 0, 3)) if ahead is None else ahead.poses,
        clearance=float(clearance), clearance_pair=situation.names(pair) if np.isfinite(clearance) else None,
        solve_time=0.0 if plan is None else plan.solve_time,
    )
