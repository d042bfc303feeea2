# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The plan of a whole manoeuvre, made once when it begins, against which ticks are held."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from ..errors import RefusedError, SolveError
from . import bypass, grid, ocp, se2, solver, succession
from .caps import planned_caps
from .case import PlannerCase
from .dubins import ArcPath, through
from .fast.solver import TickSolver
from .fast.ticks import knows
from .fence import OPEN, Fencing, fencing, hazards
from .fleet import Fleet
from .graph import NeighbourGraph
from .manoeuvre import Task
from .plan import Plan
from .problem import (
    CURVATURE,
    CURVATURE_COMMAND,
    POSE,
    SPEED,
    SPEED_COMMAND,
    THETA,
    Problem,
    bounds_in_force,
)
from .settings import Settings
from .standing import held
from .watch import choose_pairs, watch

_ROUNDS = 6  # re-solves with separating lines taken from the last solution
_SETTLED = 2e-3  # metres: the smallest clearance no longer changes
_END_KEPT = 5e-3  # metres or radians: an end missed by more is refused
_END_KEPT_AGAIN = 0.05  # the same for a fleet that was stopped on its way
_CLEARANCE_KEPT = 2e-3  # metres
_BROKEN = 1e-4  # largest residual, in its own unit, of a plan that the solver did not finish
_LEAST_TURN_SPEED = 0.25  # part of the full speed
_FINE = 0.05  # seconds between the poses that stand for a way
_ON_WAY = 0.3  # metres or radians from its way within which a robot goes on along it
_QUICK = 72  # intervals up to which the fast solver, whose work grows with their cube, gains time
_STRETCHES = (1.0, 1.25, 1.6, 2.0, 3.0)  # times tried for the rest of a manoeuvre, against the old one


@attrs.frozen(eq=False)
class Reference:
    """A manoeuvre planned from ``plan.times[0]`` to its end, in seconds of the manoeuvre.

    Attributes:
        task: what was asked. plan: its nodes. pairs: watched, shape (P, 2).
        graph: neighbours that it was made for.
        clearance: smallest exact clearance, metres. pair: who comes that near.
        fencing: what robots stay away from, and who of them is watched.
    """

    task: Task
    plan: Plan
    pairs: np.ndarray
    graph: NeighbourGraph
    clearance: float
    pair: tuple[int, int]
    fencing: Fencing = OPEN

    @property
    def end(self) -> float:
        """Seconds of the manoeuvre at which it ends."""
        return self.task.duration

    def state(self, s: float) -> np.ndarray:
        """States at a moment of the manoeuvre, shape (N, 7), also before its first node and after its end."""
        return self.states(np.array([s]))[:, 0]

    def states(self, s: np.ndarray) -> np.ndarray:
        """States at several moments, shape (N, K, 7).

        After the end everyone goes straight on at the end speed. Before the first node everyone came along as it
        drives there: one that takes over in motion is looked at some moments before it begins.
        """
        states = self.plan.sample(np.minimum(s, self.end))
        before, after = s < self.plan.times[0], s > self.end
        if before.any():
            x, y, heading = np.moveaxis(states[:, before][:, :, POSE], 2, 0)
            metres = states[:, before, SPEED] * (s[before] - self.plan.times[0])
            states[:, before, POSE] = np.stack(
                se2.arc(x, y, heading, metres, metres * states[:, before, CURVATURE]), axis=2
            )
        if after.any():
            speeds = np.full((len(states), 1), self.task.end_speed)
            speeds[list(self.task.stands)] = 0.0
            ahead, heading = speeds * (s[after] - self.end), states[:, after, THETA]
            states[:, after, 0] += ahead * np.cos(heading)
            states[:, after, 1] += ahead * np.sin(heading)
            for column in (CURVATURE, CURVATURE_COMMAND):
                states[:, after, column] = 0.0
            for column in (SPEED, SPEED_COMMAND):
                states[:, after, column] = speeds
        return states


def ways_left(made: Reference, poses: np.ndarray, since: float) -> tuple[Optional[ArcPath], ...]:
    """What is left of each robot's way from where it stands; None for one that does not stand on it.

    Args:
        poses: shape (N, 3). since: second of the manoeuvre from which on the robots may be anywhere.
    """
    moments = np.linspace(since, made.end, max(2, int(np.ceil((made.end - since) / _FINE))))
    curves = made.states(moments)[:, :, POSE]
    off = np.abs(curves - poses[:, None]).max(axis=2)  # metres and radians alike
    nearest = np.argmin(off, axis=1)
    return tuple(
        through(pose, curve[i:]) if distances[i] < _ON_WAY else None
        for pose, curve, distances, i in zip(poses, curves, off, nearest)
    )


def make(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, initial: np.ndarray, start: float = 0.0,
    guess: Optional[np.ndarray] = None, end_kept: float = _END_KEPT,
) -> Reference:
    """Plan a task from a state on.

    Args:
        initial: shape (N, 7), at ``start`` seconds of the manoeuvre.
        guess: states at the nodes, shape (N, M + 1, 7); worked out from the task's ways when left out.
        end_kept: metres or radians by which an end may be missed.

    Raises:
        RefusedError: an end or the site's clearance cannot be kept, with the figures: not on this way nor on others.
    """
    times = grid.until(start, task.duration, settings.horizon.interval)
    first = _guess(task, times) if guess is None else guess
    try:
        return _made(task, fleet, graph, settings, initial, times, first, end_kept)
    except RefusedError:
        for bent in bypass.guesses(task, fleet, settings, first):
            with contextlib.suppress(RefusedError):
                return _made(task, fleet, graph, settings, initial, times, bent, end_kept)
        if task.otherwise is None or guess is not None:
            raise
        try:
            return make(task.otherwise, fleet, graph, settings, initial, start, None, end_kept)
        except RefusedError:
            pass  # the reason is that of the first
        raise


def _made(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, initial: np.ndarray, times: np.ndarray,
    guess: np.ndarray, end_kept: float,
) -> Reference:
    pairs = choose_pairs(fleet, settings, guess[:, :, POSE])
    fences = fencing(settings, task.strip, (*task.pieces, *hazards(settings, task.hazard)))
    fences = fences.watching(fleet, settings, guess[:, :, POSE])
    problem = _problem(task, fleet, graph, settings, initial, times, guess, pairs, fences)
    problem, plan = _settled(problem, guess, settings, task.speed, fences)
    pairs_then, fences_then = choose_pairs(fleet, settings, plan.poses), fences.watching(fleet, settings, plan.poses)
    if not (_contains(pairs, pairs_then) and fences.covers(fences_then)):
        # The solution came near something that the guess passed at a distance.
        pairs, fences = np.unique(np.concatenate([pairs, pairs_then]), axis=0), fences.joined(fences_then)
        problem = _problem(task, fleet, graph, settings, initial, times, plan.states, pairs, fences)
        problem, plan = _settled(problem, plan.states, settings, task.speed, fences)
    try:
        _check_solved(task, problem, plan)
        clearance, pair = plan.closest()
        _check_kept(task, plan, fleet, settings, clearance, pair, end_kept)
        _check_outside(task, plan, fleet, fences)
    except RefusedError as refused:
        refused.case = PlannerCase(problem, solver.start_from_states(problem, guess), False, str(refused))
        raise
    return Reference(task, plan, pairs, graph, clearance, pair, fences)


def make_again(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, initial: np.ndarray
) -> Reference:
    """What is left for a fleet that stands on its way.

    Near its end a robot has no room to undo what noise has put it beside the way: an end missed by a few
    centimetres counts as kept here. What cannot be kept is tried in a longer time.

    Raises:
        RefusedError: it cannot be kept even at a third of the speed; the reason is that of the first try.
    """
    return _first_kept(task, lambda stretch: make(
        task.slower(stretch, settings), fleet, graph, settings, initial, end_kept=_END_KEPT_AGAIN
    ))


def make_rest(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, old: Reference, start: float
) -> Reference:
    """The rest of a running manoeuvre, made anew from where the old reference is at ``start``.

    What can no longer be kept in the old time (a limit was lowered) is tried in a longer one.

    Raises:
        RefusedError: it cannot be kept even at a third of the speed; the reason is that of the first try.
    """
    left = old.states(grid.until(start, task.duration, settings.horizon.interval))
    blocked = bypass.in_the_way(task, fleet, settings, left)
    return _first_kept(
        task, lambda stretch: make(*_stretched(task, fleet, graph, settings, old, start, stretch)),
        _STRETCHES[:1] if blocked else _STRETCHES,  # who stands in the way stands there for longer, too
    )


def _first_kept(
    task: Task, attempt: Callable[[float], Reference], stretches: tuple[float, ...] = _STRETCHES
) -> Reference:
    first: Optional[RefusedError] = None
    for stretch in stretches:
        try:
            return attempt(stretch)
        except RefusedError as refused:
            first = first or refused
    raise first or RefusedError(f"{task.name}: nothing is left to plan", "begin a new manoeuvre")


def _stretched(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, old: Reference, start: float, stretch: float
) -> tuple[Task, Fleet, NeighbourGraph, Settings, np.ndarray, float, np.ndarray]:
    """Arguments of make for the rest in a longer time, with the old plan, slowed, as the guess."""
    step = settings.horizon.interval
    slower = task.stretched(start, stretch, step)
    end = slower.duration
    times = grid.until(start, end, step)
    guess = old.states(start + (times - start) * (task.duration - start) / max(end - start, step))
    guess[:, 1:, [SPEED, SPEED_COMMAND]] /= stretch
    return slower, fleet, graph, settings, old.state(start), start, guess


def end_target(task: Task, count: int) -> np.ndarray:
    """State asked when the machines have settled, shape (N, 7): past the end, straight on, at the end speed."""
    target = np.full((count, 7), np.nan)
    target[:, POSE] = task.ends
    past = task.end_speed * (task.duration - task.arrival)
    target[:, 0] += past * np.cos(task.ends[:, 2])
    target[:, 1] += past * np.sin(task.ends[:, 2])
    target[:, [CURVATURE, CURVATURE_COMMAND]] = 0.0
    target[:, [SPEED, SPEED_COMMAND]] = task.end_speed
    target[list(task.stands)] = np.nan
    return target


def asked_speeds(task: Task, s: np.ndarray) -> np.ndarray:
    """Mean asked speed in each interval between seconds of the manoeuvre, shape (N, M), backward negative."""
    asked = task.asked_speed(s)
    asked[list(task.stands)] = 0.0
    return asked


def turn_speeds(task: Task, asked: np.ndarray) -> np.ndarray:
    """Speed that makes a turn rate into turning, shape (N, M): at the asked speed the turning is the curvature.

    Dividing by the full speed while the fleet starts and stops would make turning on the way to it cheap, and
    the fleet would swing out first. Where the line turns as one it is one speed for all, so that turn rates are
    priced and compared: the innermost's, whose turning they then are.
    """
    each = np.maximum(np.abs(asked), _LEAST_TURN_SPEED * task.asked[:, None])
    return np.repeat(each.mean(axis=0, keepdims=True), len(each), axis=0) if task.turn_rates else each


def turnings(made: Reference) -> np.ndarray:
    """Turning of each robot in the intervals of a reference, shape (N, M), 1/m."""
    times = made.plan.times
    rates = np.diff(made.plan.states[:, :, THETA], axis=1) / np.diff(times)
    return np.asarray(rates / turn_speeds(made.task, asked_speeds(made.task, times)))


def _problem(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, initial: np.ndarray, times: np.ndarray,
    guess: np.ndarray, pairs: np.ndarray, fences: Fencing,
) -> Problem:
    rules = settings.site_rules
    asked = asked_speeds(task, times)
    return Problem(
        fleet=fleet, edges=graph.index_edges(), weights=graph.weights(), coupling=task.coupling,
        alignment=task.alignment, prices=settings.prices, times=times, pace=1.0, initial=initial, asked_speed=asked,
        turn_speed=turn_speeds(task, asked), full_speed=task.asked, target=end_target(task, len(fleet)),
        bounds=held(bounds_in_force(
            fleet, initial, times, task.arrival, task.end_speed,
            np.minimum(rules.max_speed, planned_caps(fleet, settings, guess[:, :, POSE], task.speed)),
            rules.max_lateral_acceleration, task.max_curvature, task.gears(times[1:]),
        ), fleet, initial, times, task.stands),
        watch=watch(fleet, settings, pairs, guess[:, :, POSE], task.speed),
        fences=fences.rows(fleet, settings, guess[:, :, POSE], task.speed),
        compared=None if task.behind is None else succession.comparison(task, graph.index_edges(), times),
    )


def _settled(
    problem: Problem, guess: np.ndarray, settings: Settings, speed: float, fences: Fencing
) -> tuple[Problem, Plan]:
    """The converged solution with separating lines from where it leads itself, and its problem.

    Lines are taken anew from each solution until what comes nearest stays as near as it is. The fast solver comes
    near the first one; where it does not know the way the general one finds it.
    """
    start = solver.start_from_states(problem, guess)
    near = _near(problem, start)
    plan = solver.solve(problem, start) if near is None else near
    if not len(problem.watch.pairs) and not len(fences.bound):
        return problem, plan if near is None else solver.finish(problem, plan)
    nearest = _nearest(plan, fences)
    for _ in range(_ROUNDS):
        lines = watch(problem.fleet, settings, problem.watch.pairs, plan.poses, speed)
        held = fences.rows(problem.fleet, settings, plan.poses, speed)
        problem = attrs.evolve(problem, watch=lines, fences=held)
        plan = solver.finish(problem, plan)
        before, nearest = nearest, _nearest(plan, fences)
        if np.abs(nearest - before).max() < _SETTLED:
            break
    return problem, plan


def _near(problem: Problem, start: solver.Start) -> Optional[Plan]:
    """What the fast solver comes to, where it is quick and comes near the solution."""
    if len(problem.times) - 1 <= _QUICK and knows(problem):
        with contextlib.suppress(SolveError):
            near = TickSolver().solve(problem, start)
            if near.solved:
                return near
    return None


def _nearest(plan: Plan, fences: Fencing) -> np.ndarray:
    """Smallest clearance between robots and smallest distance to spare from fences, shape (2,); 0 where none."""
    found = np.array([plan.closest(0)[0], fences.least(plan.fleet, plan.poses)[0]])
    return np.where(np.isfinite(found), found, 0.0)


def _guess(task: Task, times: np.ndarray) -> np.ndarray:
    poses, speeds, curvatures = task.guess(times)
    return np.concatenate([poses, np.stack([curvatures, speeds, curvatures, speeds], axis=2)], axis=2)


def _contains(pairs: np.ndarray, others: np.ndarray) -> bool:
    return set(map(tuple, others.tolist())) <= set(map(tuple, pairs.tolist()))


def _check_solved(task: Task, problem: Problem, plan: Plan) -> None:
    """A plan that the solver did not finish may still do; one that jumps or breaks a limit may not."""
    broken = 0.0 if plan.solved else ocp.violation(problem, plan.vector)
    if broken > _BROKEN:
        raise RefusedError(
            f"{task.name}: no plan was found in {plan.solve_time:.1f} s and {plan.iterations} iterations",
            "ask for a wider radius or more time, or free the machine that plans of other work",
        )


def _check_kept(
    task: Task, plan: Plan, fleet: Fleet, settings: Settings, clearance: float, pair: tuple[int, int], end_kept: float
) -> None:
    missed = plan.missed[:, :3]
    worst = int(np.argmax(missed.max(axis=1)))
    if missed[worst].max() > end_kept:
        distance, angle = float(np.hypot(*missed[worst, :2])), abs(float(np.degrees(missed[worst, 2])))
        raise RefusedError(
            f"{task.name}: {fleet.names[worst]} would miss its end by {distance:.2f} m and {angle:.1f} degrees; "
            + (_clearance_in_the_way(plan, fleet, worst) or _busiest_limit(task, plan, fleet, worst)),
            "give it more room, more time or a lower speed",
        )
    allowed = settings.site_rules.min_clearance
    if clearance < allowed - _CLEARANCE_KEPT:
        first, second = fleet.names[pair[0]], fleet.names[pair[1]]
        raise RefusedError(
            f"{task.name}: {first} and {second} would come within {clearance:.2f} m of each other, "
            f"{allowed - clearance:.2f} m short of the site's smallest clearance of {allowed:g} m",
            "widen the turn, the spacing or the ends",
        )


def _check_outside(task: Task, plan: Plan, fleet: Fleet, fences: Fencing) -> None:
    spare, robot, name = fences.least(fleet, plan.dense(2))
    if spare < -_CLEARANCE_KEPT:
        raise RefusedError(
            f"{task.name}: {fleet.names[robot]} would come {-spare:.2f} m too near to {name}",
            "give the turn more room or another end, or lead it round by a pose to reach on the way",
        )


def _clearance_in_the_way(plan: Plan, fleet: Fleet, k: int) -> str:
    """Who or what the robot comes too near to, in words; "" when it keeps its clearances."""
    for pair, short in zip(plan.pairs, plan.short.max(axis=1, initial=0.0)):
        if k in pair and short > _CLEARANCE_KEPT:
            other = fleet.names[int(pair.sum()) - k]
            return f"the clearance to {other}, margin included, is {short:.2f} m short on the way"
    for robot, outside in zip(plan.fenced, plan.outside.max(axis=1, initial=0.0)):
        if k == robot and outside > _CLEARANCE_KEPT:
            return f"what it must keep away from, margin included, leaves {outside:.2f} m too little room on the way"
    return ""


def _busiest_limit(task: Task, plan: Plan, fleet: Fleet, k: int) -> str:
    """The limit that the robot meets for the largest part of the plan, in words."""
    limits, states, rates = fleet.robots[k].limits, plan.states[k, 1:], plan.rates[k]
    speed, bend = np.abs(states[:, SPEED_COMMAND]), np.abs(states[:, CURVATURE_COMMAND])
    faster = rates[:, 1] * np.where(states[:, SPEED_COMMAND] < 0.0, -1.0, 1.0)
    use = {
        "max_curvature": bend / limits.max_curvature,
        "radius": bend / task.max_curvature,
        "max_speed": speed / limits.max_speed,
        "max_turn_rate": speed * bend / limits.max_turn_rate,
        "max_lateral_acceleration": speed**2 * bend / limits.max_lateral_acceleration,
        "max_curvature_rate": np.abs(rates[:, 0]) / limits.max_curvature_rate,
        "max_acceleration": faster / limits.max_acceleration,
        "max_braking": -faster / limits.max_braking,
    }
    busy = {name: float(np.mean(part > 0.99)) for name, part in use.items()}
    name = max(busy, key=lambda key: busy[key])
    if busy[name] == 0.0:
        return "no limit of its own stands in the way"
    if name == "radius":
        met = f"the radius of {1 / task.max_curvature:g} m that is asked"
    else:
        met = f"its {name} of {getattr(limits, name):g}"
    return f"{met} is met for {100 * busy[name]:.0f}% of the time"
