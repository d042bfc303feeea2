# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The tick solver: a plan in milliseconds, from the last plan and its multipliers."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache, partial

import attrs
import numpy as np

from ...errors import SolveError
from ..fleet import Fleet
from ..plan import Plan
from ..problem import POSE, Problem
from ..solver import Start
from . import vectors
from .engine import Engine, Held, Iterate, Pointed, Trial, engine, kernels
from .interior import BARRIER
from .linearised import NEAR
from .margins import LEAST
from .numbers import FleetNumbers, Numbers, fleet_numbers, numbers, started
from .point import Forces
from .structure import Structure, structure

ENOUGH = 1e-3  # predicted gap, as a part of the cost, below which no other step is worth its time
SOLVED = 1e-2  # predicted gap below which a plan counts as finished

# After so many steps so large a gap is good enough: who has come far gains little from many more steps.
_TOLERATED = ((19, ENOUGH), (23, 2 * ENOUGH), (10_000, SOLVED))

_LEAST_COST = 1e-2  # costs below this count as this where gaps are parts of them
_KEPT_WITHIN = 2e-4  # a plan that passes a limit by more is not taken
_ACTIVE_STEPS = 8
_STEPS = 30
_WANDERING = 6  # rows a robot that change in one step: the sets are lost
_SETTLING = 0.5  # rows a robot that change in one step: the sets are nearly found
_NEARLY_KEPT = 0.05  # by how much limits may be passed then
_SLOW = 0.3  # part of what curved paths left over that a step with kept derivatives may leave
_OVERSTATED = 2.0  # what is open in an interior-point iterate overstates the gap by about this
_LEFT_OF_LAST = 0.5  # part of what the last interior-point step saved that another may still save
_NEARBY = 0.02  # change of a heading (rad), or of a speed (part of the full one), over which a matrix is used again


@attrs.frozen(eq=False)
class _Found:
    """The best so far: cost, by how much limits are passed (at least what is tolerated), predicted gap."""

    point: Pointed
    forces: Callable[[], Forces]
    cost: float
    passed: float
    gap: float
    steps: int


@attrs.frozen(eq=False)
class Prepared:
    """A problem linearised at the predicted state, waiting for the poses."""

    problem: Problem
    numbers: Numbers
    engine: Engine
    curvature: np.ndarray
    speed: np.ndarray
    forces: Forces | None
    held: Held | None


class TickSolver:
    """Solves one tick's problem after another. ``solve`` may be called in several threads at once.

    Edges, pairs, weights, limits and even the fleet may change from tick to tick: nothing is built for them. Making the
    first solver of a process loads the kernels, or compiles them, once for a machine: that takes half a minute.
    """

    def __init__(self) -> None:
        kernels()
        self._fleet: tuple[Fleet, FleetNumbers] | None = None
        self._ready: Prepared | None = None

    def solve(
        self, problem: Problem, start: Start, budget: float = float("inf"),
        clock: Callable[[], float] = lambda: 0.0,
    ) -> Plan:
        """Prepare and feed back at once: the problem's initial state is the measured one.

        Args:
            start: primal vector (its commands count) and, when known, multipliers, as Plan holds them.
            budget: seconds by ``clock`` after which the best plan so far is returned, marked as not solved.

        Raises:
            SolveError: no step could be made.
        """
        began = clock()
        ready = self._prepared(problem, start, linearise=False)
        return _plan(ready, _search(ready, began + budget, clock), clock() - began)

    def prepare(self, problem: Problem, start: Start) -> None:
        """Work out all that does not need the measured state, with the predicted one in the problem."""
        self._ready = self._prepared(problem, start, linearise=True)

    def feedback(
        self, initial: np.ndarray, budget: float = float("inf"), clock: Callable[[], float] = lambda: 0.0
    ) -> Plan:
        """The plan from the measured state, shape (N, 7), for what was prepared. See ``solve``.

        Raises:
            SolveError: no step could be made.
        """
        began = clock()
        if self._ready is None:
            raise SolveError("feedback asked before prepare")
        ready, self._ready = self._ready, None
        if initial is not ready.problem.initial:
            problem = attrs.evolve(ready.problem, initial=initial)
            begun = started(ready.numbers, initial)
            ready = attrs.evolve(ready, problem=problem, numbers=begun, engine=ready.engine.started(begun))
        return _plan(ready, _search(ready, began + budget, clock), clock() - began)

    def _prepared(self, problem: Problem, start: Start, linearise: bool) -> Prepared:
        size = vectors.sizes(problem)
        known = numbers(problem, self._fleet_numbers(problem.fleet))
        order = _structure(len(problem.fleet), problem.edges.tobytes(), problem.watch.pairs.tobytes())
        curvature, speed = (
            np.clip(commands, known.lower[i], known.upper[i])
            for i, commands in enumerate(vectors.commands(size, start.vector))
        )
        forces = None if start.multipliers is None else vectors.forces(size, *start.multipliers)
        steps = engine(known, order)
        held = None
        if linearise and forces is not None and _worth_trying(known, forces):
            held = steps.hold(None, steps.trial(steps.point(curvature, speed), forces), NEAR)
        return Prepared(problem, known, steps, curvature, speed, forces, held)

    def _fleet_numbers(self, fleet: Fleet) -> FleetNumbers:
        last = self._fleet
        if last is None or last[0] is not fleet:
            self._fleet = last = fleet, fleet_numbers(fleet)
        return last[1]


@lru_cache(maxsize=32)
def _structure(count: int, edges: bytes, pairs: bytes) -> Structure:
    joined = (np.frombuffer(data, dtype=int).reshape(-1, 2) for data in (edges, pairs))
    return structure(count, *joined)


def _worth_trying(known: Numbers, forces: Forces) -> bool:
    """Whether the last multipliers tell which rows are met: where ends could not be reached, fresh poses change all."""
    dear = np.abs(forces.ends[:, POSE]) >= known.end_price[:, POSE]
    return not (dear & (known.end_price[:, POSE] > 0)).any() and not (forces.clearances > 0).any()


class _Watchman:
    """Says when to stop: the gap is small enough for the steps made, or another step would pass the deadline."""

    def __init__(self, deadline: float, clock: Callable[[], float]) -> None:
        self._deadline, self._clock, self._last = deadline, clock, clock()
        self._longest = 0.0
        self.steps = 0

    def stepped(self) -> None:
        """One more step was made."""
        now = self._clock()
        self._longest, self._last = max(self._longest, now - self._last), now
        self.steps += 1

    @property
    def late(self) -> bool:
        """Whether there is no time for another step."""
        return self._last + self._longest >= self._deadline

    @property
    def tolerated(self) -> float:
        """The predicted gap that is good enough by now."""
        return next(gap for steps, gap in _TOLERATED if self.steps <= steps)


def _search(ready: Prepared, deadline: float, clock: Callable[[], float]) -> _Found:
    watchman = _Watchman(deadline, clock)
    point = ready.engine.point(ready.curvature, ready.speed)
    forces, barrier, least = ready.forces, BARRIER, LEAST
    if forces is not None and (ready.held is not None or _worth_trying(ready.numbers, forces)):
        trial, found = _active_steps(ready, point, forces, watchman)
        if found is not None:
            return found
        if trial is not None:
            point, forces, barrier, least = trial.point, trial.forces, BARRIER / 10, LEAST / 5
    if forces is None:
        n, m = ready.curvature.shape
        forces = Forces(np.zeros((6, n, m)), np.zeros((n, 7)), np.zeros((len(ready.numbers.pairs), m)))
    return _interior_steps(ready, ready.engine.open(point, forces, barrier, least), watchman)


def _active_steps(
    ready: Prepared, point: Pointed, forces: Forces, watchman: _Watchman
) -> tuple[Trial | None, _Found | None]:
    """Steps with the sets of the last tick: how far they came, None when they wandered; and what they found."""
    steps, robots = ready.engine, len(ready.curvature)
    trial = steps.trial(point, forces)
    held = ready.held
    before = [point.cost, np.inf]  # of the last step and of the one before it, less what curved paths left over
    slow, left_before = False, np.inf
    for step in range(1, _ACTIVE_STEPS + 1):
        held = steps.hold(None if slow else held, trial, _NEARBY)
        trial = steps.active_step(held, trial)
        watchman.stepped()
        reached, left_over, passed = trial.point.cost, trial.left_over, trial.point.excess
        if trial.changed > _WANDERING * robots or not np.isfinite(reached):
            return None, None
        last, saved = abs(before[0] - reached + left_over), abs(before[1] - before[0])
        before = [reached - left_over, before[0]]
        if trial.changed == 0 and passed < _KEPT_WITHIN:
            gap = (left_over + last * min(last / max(saved, 1e-300), 0.5)) / max(reached, _LEAST_COST)
            if gap <= watchman.tolerated:
                return trial, _Found(
                    trial.point, partial(getattr, trial, "forces"), reached, _KEPT_WITHIN, gap, watchman.steps
                )
        slow, left_before = left_over > _SLOW * left_before, left_over
        settling = trial.changed <= _SETTLING * robots and passed < _NEARLY_KEPT
        if watchman.late or (step >= _ACTIVE_STEPS // 2 and not settling):
            break
    return (trial if settling else None), None


def _interior_steps(ready: Prepared, x: Iterate, watchman: _Watchman) -> _Found:
    best: _Found | None = None
    before = np.inf
    for _ in range(_STEPS):
        try:
            x = ready.engine.interior_step(x)
        except SolveError:
            if best is None:
                raise
            break
        watchman.stepped()
        reached = x.point.cost
        gap = max(x.open / _OVERSTATED, abs(before - reached) * _LEFT_OF_LAST) / max(reached, _LEAST_COST)
        before = reached
        if not np.isfinite(reached):
            break
        passed = max(x.point.excess, _KEPT_WITHIN)
        if best is None or (passed, reached) < (best.passed, best.cost):
            best = _Found(x.point, partial(ready.engine.forces, x), reached, passed, gap, watchman.steps)
        elif passed <= _KEPT_WITHIN:
            best = attrs.evolve(best, gap=min(best.gap, gap))  # it costs no more than what has come this near
        if (best.gap <= watchman.tolerated and best.passed <= _KEPT_WITHIN) or watchman.late:
            break
    if best is None:
        raise SolveError("no step led anywhere")
    return attrs.evolve(best, steps=watchman.steps)


def _plan(ready: Prepared, found: _Found, took: float) -> Plan:
    known, problem = ready.numbers, ready.problem
    size = vectors.sizes(problem)
    point, total = ready.engine.boxed(found.point)
    states = vectors.states_of(known, point)
    short = np.maximum(-point.clearances, 0.0)
    priced = known.end_price > 0
    return Plan(
        fleet=problem.fleet, times=problem.times, states=states,
        rates=point.limits[2:4].transpose(1, 2, 0).copy(), cost=total,
        short=short[: size.pairs], pairs=problem.watch.pairs, outside=short[size.pairs :], fenced=problem.fences.robots,
        missed=np.abs(point.missed) * priced,
        solved=found.gap <= SOLVED and found.passed <= _KEPT_WITHIN, solve_time=took,
        iterations=found.steps, vector=vectors.primal(known, size, states, point, short, priced),
        multipliers=vectors.multipliers(known, point, found.forces(), size),
    )
