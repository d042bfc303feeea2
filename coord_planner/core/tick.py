# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One re-planning: the reference's problem over the horizon only, from the state at hand, ending on the reference."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from . import grid, ocp, solver, succession
from .caps import planned_caps
from .fence import OPEN, Fencing
from .fleet import Fleet
from .manoeuvre import Task
from .plan import Plan
from .problem import CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND, STATES, THETA, Comparison, Problem, bounds_in_force
from .reference import Reference, asked_speeds, turn_speeds, turnings
from .rollout import rolled_out
from .settings import Settings
from .standing import held, where_seen
from .watch import watch

_SWERVE = np.radians(2.0)  # heading by which a robot may leave its reference for what may be noise
_SPEEDS = [SPEED, SPEED_COMMAND]
_OFF = 5e-3  # 1/m or m/s by which a command may be outside its limit
_NEAR = 0.5  # metres or radians by which an unfinished plan may miss its end and still be driven


@attrs.frozen(eq=False)
class Tick:
    """A plan over the horizon and where its nodes lie in the manoeuvre.

    Attributes:
        plan: times on the clock.
        s: the same nodes in seconds of the manoeuvre, shape (M + 1,).
        reference: that it ends on.
    """

    plan: Plan
    s: np.ndarray
    reference: Reference


def pose_problem(
    reference: Reference, fleet: Fleet, settings: Settings, initial: np.ndarray, start: float, time: float,
    pace: float, last: Optional[Tick], behind: np.ndarray,
) -> tuple[Problem, np.ndarray, solver.Start]:
    """The problem of a tick, its nodes in seconds of the manoeuvre, and where to start solving it.

    Args:
        initial: predicted state at ``time``, shape (N, 7). start: seconds of the manoeuvre at ``time``.
        time: seconds on the clock at the first node. pace: seconds of the manoeuvre per second of the clock.
        last: the tick before, when there is one for this reference.
        behind: metres by which each robot is behind the group in the direction in which it drives, shape (N,), as
            the group's progress sees it.
    """
    task, rules = reference.task, settings.site_rules
    s = grid.nodes(start, settings.horizon.interval, settings.horizon.intervals)
    times = time + (s - start) / pace
    guess, steps = _guess(reference, initial, s, pace, last)
    guess = where_seen(guess, initial, task.stands)
    planned = asked_speeds(task, s)
    top = np.minimum(rules.max_speed, planned_caps(fleet, settings, guess[:, :, POSE], task.speed))
    gear = task.gears((s[:-1] + s[1:]) / 2)
    own = np.where(gear < 0, -fleet.limit("min_speed")[:, None], fleet.limit("max_speed")[:, None])
    asked = _closing_up(s, times, planned * pace, behind, task, gear, np.minimum(own, top), settings)
    target = _without_swerve(
        paced(reference.state(float(s[-1])), pace), reference.state(start), initial,
        np.abs(planned) @ np.diff(s), 2 * settings.poses.noise_xy,
    )
    target[list(task.stands)] = np.nan
    graph = reference.graph
    problem = Problem(
        fleet=fleet, edges=graph.index_edges(), weights=graph.weights(), coupling=task.coupling,
        alignment=task.alignment, prices=settings.prices, times=times, pace=pace, initial=initial, asked_speed=asked,
        turn_speed=turn_speeds(task, planned) * pace,
        full_speed=task.asked * pace, target=target,
        bounds=held(bounds_in_force(
            fleet, initial, times, time + (task.arrival - start) / pace, task.end_speed * pace, top,
            rules.max_lateral_acceleration, task.max_curvature, task.gears(s[1:]),
        ), fleet, initial, times, task.stands),
        watch=watch(fleet, settings, reference.pairs, guess[:, :, POSE], task.speed),
        fences=reference.fencing.rows(fleet, settings, guess[:, :, POSE], task.speed),
        compared=_compared(reference, s, settings.horizon.interval),
    )
    if steps is None or last is None:
        return problem, s, solver.start_from_states(problem, guess)
    return problem, s, _shifted(problem, last, steps, guess)


def _compared(reference: Reference, s: np.ndarray, step: float) -> Optional[Comparison]:
    """At which moments neighbours are compared; None where it is at equal ones."""
    task, times = reference.task, reference.plan.times
    if task.behind is None:
        return None
    return succession.comparison_of_tick(
        task, reference.graph.index_edges(), s, step, times, turnings(reference)
    )


def paced(states: np.ndarray, pace: float) -> np.ndarray:
    """States of the reference as they are passed at a pace: speeds scale, curvatures and poses stay."""
    scaled = states.copy()
    scaled[..., _SPEEDS] *= pace
    return scaled


def through(plan: Plan, s: np.ndarray, at: float, following: Reference, pace: float) -> Plan:
    """A plan with what follows behind the end of its manoeuvre, where that falls into the horizon.

    An end holds the whole state, so what lies before it does not depend on what lies behind.

    Args:
        s: nodes of the plan in seconds of the manoeuvre. at: the second at which the reference that follows begins.
    """
    later = s > at + 1e-9
    if not later.any():
        return plan
    states = plan.states.copy()
    states[:, later] = paced(following.states(s[later] - at + float(following.plan.times[0])), pace)
    return attrs.evolve(plan, states=states)


def usable(problem: Problem, plan: Plan, least_clearance: float, fencing: Fencing = OPEN) -> Optional[Plan]:
    """A plan that may be driven: the solver's own, or, where it ran out of time, what its commands come to.

    A half-finished plan is rolled out within its limits. It is used when it stays clear and comes near its end;
    otherwise there is None.

    Args:
        least_clearance: smallest exact clearance that counts as clear, metres. fencing: what is to be kept away from.
    """
    if not _finite(plan):
        return None
    if sound(problem, plan):
        return plan
    states, rates = rolled_out(problem, plan.rates)
    missed = np.nan_to_num(np.abs(states[:, -1] - problem.target))
    finished = attrs.evolve(plan, states=states, rates=rates, missed=missed)
    near = missed[:, :3].max() < _NEAR
    clear = near and finished.closest(1)[0] >= least_clearance
    return finished if clear and fencing.least(plan.fleet, finished.dense(1))[0] >= 0.0 else None


def sound(problem: Problem, plan: Plan) -> bool:
    """Whether a plan may be driven as it is: solved, finite and within the limits in force."""
    return plan.solved and _finite(plan) and _in_bounds(problem, plan)


def _finite(plan: Plan) -> bool:
    return bool(np.isfinite(plan.states).all() and np.isfinite(plan.rates).all())


def _in_bounds(problem: Problem, plan: Plan) -> bool:
    """Whether the commands begin where they are and keep within the limits in force, whatever the solver says of it."""
    commands, first = plan.states[:, 1:], plan.states[:, 0] - problem.initial
    curvature, speed, bounds = commands[:, :, CURVATURE_COMMAND], commands[:, :, SPEED_COMMAND], problem.bounds
    return bool(
        np.abs(first[:, [CURVATURE_COMMAND, SPEED_COMMAND]]).max() < _OFF
        and (np.abs(curvature) < bounds.max_curvature + _OFF).all()
        and (speed < bounds.max_speed + _OFF).all() and (speed > bounds.min_speed - _OFF).all()
    )


def _without_swerve(
    target: np.ndarray, due: np.ndarray, initial: np.ndarray, way: np.ndarray, noise: float
) -> np.ndarray:
    """The target moved aside, by no more than the noise of poses, for robots with too little way left to undo it.

    Going aside by d on a way w and arriving straight takes a heading that is 2 d / w off in between: near a
    stop, robots would swerve for what is only noise.

    Args:
        due: where the reference is now, shape (N, 7). way: what is left to drive in the horizon, shape (N,), metres.
    """
    left = np.stack([-np.sin(due[:, THETA]), np.cos(due[:, THETA])], axis=1)
    off = np.sum((initial[:, :2] - due[:, :2]) * left, axis=1)
    kept = np.sign(off) * np.maximum(np.minimum(np.abs(off), noise) - _SWERVE * way / 2, 0.0)
    moved = target.copy()
    moved[:, 0] -= kept * np.sin(target[:, THETA])
    moved[:, 1] += kept * np.cos(target[:, THETA])
    return moved


def _closing_up(
    s: np.ndarray, times: np.ndarray, asked: np.ndarray, behind: np.ndarray, task: Task,
    gear: np.ndarray, top: np.ndarray, settings: Settings,
) -> np.ndarray:
    """Asked speeds, shape (N, M), m/s, with which a robot that was held up catches up and the others wait for it.

    The horizon's end alone would let them take the whole horizon for it. Nobody is asked for more than ``top``
    m/s, shape (N, M), in the direction that ``gear`` says, nor to leave its place while it is to stand. Within the
    dead band, where there is only noise, nothing is changed and the reference is not biased.
    """
    progress = settings.progress
    off = np.sign(behind) * np.maximum(np.abs(behind) - progress.dead_band, 0.0)
    soon = (times[1:] - times[0] <= progress.catch_up) & (s[1:] <= task.arrival)
    along = np.abs(asked)
    wanted = along + soon[None, :] * (off / progress.catch_up)[:, None]
    return np.where(gear == 0, asked, gear * np.clip(wanted, 0.0, np.maximum(top, along)))


def _guess(
    reference: Reference, initial: np.ndarray, s: np.ndarray, pace: float, last: Optional[Tick]
) -> tuple[np.ndarray, Optional[int]]:
    """Guessed states, shape (N, M + 1, 7), and by how many nodes the last plan is shifted (None: not usable)."""
    guess = paced(reference.states(s), pace)
    steps: Optional[int] = None
    if last is not None and last.reference is reference:
        place = np.flatnonzero(np.abs(last.s[1:] - s[1]) < 1e-6)
        if len(place):
            steps = int(place[0])
            kept = last.plan.states[:, 1 + steps :]
            guess[:, 1 : 1 + kept.shape[1]] = kept
    guess[:, 0] = initial
    return guess, steps


def _shifted(problem: Problem, last: Tick, steps: int, guess: np.ndarray) -> solver.Start:
    """The last plan shifted, with the nodes that are new taken from the guess."""
    begun = solver.start_from_plan(last.plan, problem.shape, steps)
    places, h = ocp.variable_blocks(problem.shape).slices, problem.intervals
    known = {name: guess[:, :, i] for i, name in enumerate(STATES)}
    known["curvature_rate"] = np.diff(guess[:, :, CURVATURE_COMMAND], axis=1) / h
    known["acceleration"] = np.diff(guess[:, :, SPEED_COMMAND], axis=1) / h
    for name, values in known.items():
        begun.vector[places[name]] = values.ravel(order="F")
    return begun
