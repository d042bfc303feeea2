# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is driven when a tick brings no finished plan: one step down after another, each checked, each with its reason.

1. The solver's own plan. 2. What it had found when its time ran out. 3. The last plan, shifted to now, for at most
``horizon.keep`` seconds. 4. One curvature and one speed for all, for as long again: robots that head the same way keep
their places to each other whatever they turn, and copying without bound comes to the same. 5. The stop.
"""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from . import ocp, rules, solver
from .messages import Caution
from .plan import SHORT, Plan, closest_along
from .problem import CURVATURE_COMMAND, POSE, SPEED_COMMAND, Problem
from .pursuit import Prepared
from .rollout import rolled_out
from .settings import Settings
from .tick import paced, sound, usable

_NEAR = 0.5  # metres or radians by which the last plan may miss the end by now and still be driven
_MOST = 0.9  # part of the budget after which a solver has run out of it
_TURNED = 1e-3  # part by which a product of speed and curvature may pass its limit, for rounding


@attrs.frozen(eq=False)
class Found:
    """What is driven; ``plan`` None: nothing, the fleet stops. ``fresh``: the solver found it just now."""

    plan: Optional[Plan]
    fresh: bool
    cautions: tuple[Caution, ...]


def find(
    prepared: Prepared, solved: Optional[Plan], failure: Optional[Caution], settings: Settings, without: float
) -> Found:
    """The highest step that can be driven.

    Args:
        solved: what the solver came to; None when it failed or was late, for the reason in ``failure``.
        without: seconds since the last plan of the solver.
    """
    problem, keep = prepared.problem, settings.horizon.keep
    cautions = [] if failure is None else [failure]
    if solved is not None:
        if sound(problem, solved):
            return Found(solved, True, ())
        plan = usable(problem, solved, _least(prepared, settings))
        if plan is not None and _drivable(prepared, plan, settings):
            # A solver that stops after so many steps leaves the rest to the next tick; that is no news.
            short = solved.solve_time > _MOST * settings.horizon.budget
            return Found(plan, True, (rules.plan_unfinished(settings, solved.solve_time),) if short else ())
        cautions = [rules.plan_late(settings, solved.solve_time)]
    if without <= keep:
        plan = last_plan(prepared)
        if _drivable(prepared, plan, settings) and plan.missed[:, POSE].max() < _NEAR:
            return Found(plan, False, tuple(cautions))
    if without <= 2 * keep:
        plan = common_curvature(prepared)
        if _drivable(prepared, plan, settings):
            return Found(plan, False, (*cautions, rules.common_curvature(settings, without)))
    return Found(None, False, (*cautions, rules.plans_missing(settings, without)))


def last_plan(prepared: Prepared) -> Plan:
    """The last plan from now on, at the group's pace, driven from where the robots are predicted to be."""
    problem = prepared.problem
    blocks = ocp.variable_blocks(problem.shape).unpack(prepared.start.vector)
    commands = np.stack([blocks["curvature_command"], blocks["speed_command"] * prepared.slower], axis=2)
    return _driven(prepared, commands[:, 1:])


def common_curvature(prepared: Prepared) -> Plan:
    """Everybody turns and drives as the reference does on average, as soon as each robot's own rates lead it there."""
    problem, reference = prepared.problem, prepared.reference
    asked = paced(reference.states(prepared.s[1:]), problem.pace)[:, :, [CURVATURE_COMMAND, SPEED_COMMAND]].mean(axis=0)
    bounds = problem.bounds
    speed = np.clip(asked[:, 1], bounds.min_speed.max(axis=0), bounds.max_speed.min(axis=0))
    fast = np.maximum(np.abs(speed), 1e-6)
    most = np.minimum.reduce([
        bounds.max_curvature.min(axis=0), bounds.max_turn_rate.min(axis=0) / fast,
        bounds.max_lateral_acceleration.min(axis=0) / fast**2,
    ])
    common = np.stack([np.clip(asked[:, 0], -most, most), speed], axis=1)
    return _driven(prepared, np.broadcast_to(common, (len(problem.fleet), *common.shape)))


def _driven(prepared: Prepared, commands: np.ndarray) -> Plan:
    """The plan that follows from wanted commands at nodes 1 .. M, shape (N, M, 2), cut to rates and limits."""
    problem, fleet, h = prepared.problem, prepared.problem.fleet, prepared.problem.intervals
    slowest, quickest = problem.rates_of_speed
    steer = fleet.limit("max_curvature_rate")
    before, rates = problem.initial[:, [CURVATURE_COMMAND, SPEED_COMMAND]], np.empty(commands.shape)
    for i, step in enumerate(h):
        rates[:, i] = np.clip(
            (commands[:, i] - before) / step,
            np.stack([-steer, slowest[:, i]], axis=1), np.stack([steer, quickest[:, i]], axis=1),
        )
        before = before + step * rates[:, i]
    states, rates = rolled_out(problem, rates)
    shape, start = problem.shape, solver.start_from_states(problem, states)
    sizes = ocp.variable_blocks(shape).size, ocp.row_blocks(shape).size
    return Plan(
        fleet=fleet, times=problem.times, states=states, rates=rates, cost=np.nan,
        short=np.zeros((len(shape.pairs), shape.intervals)), pairs=problem.watch.pairs,
        outside=np.zeros((len(shape.fenced), shape.intervals)), fenced=problem.fences.robots,
        missed=np.nan_to_num(np.abs(states[:, -1] - problem.target)), solved=False, solve_time=0.0, iterations=0,
        vector=start.vector, multipliers=prepared.start.multipliers or (np.zeros(sizes[0]), np.zeros(sizes[1])),
    )


def _drivable(prepared: Prepared, plan: Plan, settings: Settings) -> bool:
    """Whether limits, clearance and fences are kept, from where the robots are now."""
    return bool(
        np.isfinite(plan.states).all() and _turns_within_limits(prepared.problem, plan)
        and plan.closest(1)[0] >= _least(prepared, settings) and _clear_of_fences(prepared, plan, settings)
    )


def _turns_within_limits(problem: Problem, plan: Plan) -> bool:
    speed, curvature = plan.states[:, 1:, SPEED_COMMAND], plan.states[:, 1:, CURVATURE_COMMAND]
    turn, bounds = np.abs(speed * curvature), problem.bounds
    return bool(
        (turn <= bounds.max_turn_rate * (1 + _TURNED)).all()
        and (np.abs(speed) * turn <= bounds.max_lateral_acceleration * (1 + _TURNED)).all()
    )


def _least(prepared: Prepared, settings: Settings) -> float:
    """Clearance that counts as kept, metres: the site's, or, where robots are nearer already, what they have."""
    poses = prepared.problem.initial[:, None, POSE]
    return min(settings.site_rules.min_clearance, closest_along(prepared.problem.fleet, poses)[0]) - SHORT


def _clear_of_fences(prepared: Prepared, plan: Plan, settings: Settings) -> bool:
    fencing, fleet = prepared.reference.fencing, prepared.problem.fleet
    if not (fencing.pieces or fencing.lines):
        return True
    now = fencing.least(fleet, prepared.problem.initial[:, None, POSE])[0]
    return bool(fencing.least(fleet, plan.dense(1))[0] >= min(now, 0.0) - SHORT)
