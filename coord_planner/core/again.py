# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A program of the planner, saved when it failed, solved again: as it was then, and from scratch; judged."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Optional

import attrs
import casadi as ca
import numpy as np

from ..errors import SolveError
from . import ocp, optimality, solver
from .case import PlannerCase
from .direct.evaluated import evaluated
from .direct.impossible import Obstacle
from .direct.program import Program
from .optimality import Check
from .plan import Plan
from .problem import CURVATURE, SPEED, STATES, THETA, Problem, Shape
from .solver import Start

_MISSED = 1e-3  # metres, radians and their rates: an end or a clearance missed by more is not kept


@attrs.frozen(eq=False)
class Again:
    """What came of it.

    Attributes:
        status: solved, infeasible or failed, of the solve as it was begun then. reason: in words, when not solved.
        obstacles: ends and clearances that are missed. plan: as begun then; None when the solver returned no numbers.
        check: of that plan. fresh: what a solve from the initial state at the asked speed, straight on, came to.
    """

    problem: Problem
    status: str
    reason: str
    obstacles: tuple[Obstacle, ...]
    plan: Optional[Plan]
    check: Optional[Check]
    fresh: Optional[Plan]

    @property
    def turning(self) -> np.ndarray:
        """Turn rate over the speed that it is counted at, shape (N, M), 1/m."""
        assert self.plan is not None
        rates = np.diff(self.plan.states[:, :, THETA], axis=1) / self.problem.intervals
        return np.asarray(rates / self.problem.turn_speed)

    @property
    def effort(self) -> float:
        """1/2 integral u'u, in seconds of the manoeuvre."""
        return float(np.sum(self.turning**2 * self._seconds)) / 2

    @property
    def disagreement(self) -> float:
        """1/2 integral u'Lu, in seconds of the manoeuvre."""
        u = self.turning
        compared = self.problem.compared
        if compared is not None:
            rows = self.problem.weights[compared.edges] * compared.disagreements(u, self.problem.edges) ** 2
            return float(np.sum(rows * compared.seconds)) / 2
        apart = [weight * (u[k] - u[j]) ** 2 for (k, j), weight in zip(self.problem.edges, self.problem.weights)]
        return float(np.sum(np.array(apart).reshape(-1, u.shape[1]) * self._seconds)) / 2

    @property
    def curvature(self) -> np.ndarray:
        """Mean of what the machines reach at the ends of each interval, shape (N, M), 1/m."""
        return self._mean(CURVATURE)

    @property
    def speed(self) -> np.ndarray:
        """Mean of what the machines reach at the ends of each interval, shape (N, M), m/s."""
        return self._mean(SPEED)

    @property
    def _seconds(self) -> np.ndarray:
        return self.problem.intervals * self.problem.pace

    def _mean(self, state: int) -> np.ndarray:
        assert self.plan is not None
        values = self.plan.states[:, :, state]
        return np.asarray((values[:, 1:] + values[:, :-1]) / 2)


def again(case: PlannerCase) -> Again:
    """Solve a program of the planner as it was solved then, and from scratch: from the initial state, straight on."""
    problem, start, warm = case.problem, case.start, case.warm
    fresh = _solved(problem, _straight_on(problem), False)
    plan = fresh if start is None else _solved(problem, start, warm)
    if plan is None:
        return Again(problem, "failed", "the solver returned numbers that are not finite", (), None, None, fresh)
    check = _check(problem, plan)
    obstacles = _obstacles(problem, plan)
    missed = "; ".join(each.text for each in obstacles)
    status, reason = ("infeasible", missed) if missed else ("solved", "")
    if not plan.solved:
        status, reason = "failed", f"the solver did not finish in {plan.iterations} iterations; {check.words}"
        reason += f"; {missed}" if missed else ""
    return Again(problem, status, reason, obstacles, plan, check, fresh)


def _solved(problem: Problem, start: Start, warm: bool) -> Optional[Plan]:
    try:
        return solver.solve(problem, start, warm=warm)
    except SolveError:
        return None


def _straight_on(problem: Problem) -> Start:
    states = np.repeat(problem.initial[:, None], len(problem.times), axis=1)
    passed = np.concatenate([np.zeros((len(states), 1)), np.cumsum(problem.asked_speed * problem.intervals, axis=1)],
                            axis=1)
    states[:, :, 0] += passed * np.cos(states[:, :, THETA])
    states[:, :, 1] += passed * np.sin(states[:, :, THETA])
    return solver.start_from_states(problem, states)


def _obstacles(problem: Problem, plan: Plan) -> tuple[Obstacle, ...]:
    """Ends and clearances that the plan misses although the prices of missing them are steep."""
    found, names = [], problem.fleet.names
    for k, i in zip(*np.nonzero(plan.missed > _MISSED)):
        found.append(Obstacle(f"end_state.{STATES[i]}", (names[k],),
                              f"{names[k]} misses the {STATES[i]} of its end by {plan.missed[k, i]:.3g}"))
    for (k, j), short in zip(plan.pairs, plan.short):
        if short.max(initial=0.0) > _MISSED:
            found.append(Obstacle("watch", (names[k], names[j]),
                                  f"{names[k]} and {names[j]} come nearer than asked by {short.max():.3g} m"))
    for k, outside in zip(plan.fenced, plan.outside):
        if outside.max(initial=0.0) > _MISSED:
            found.append(Obstacle("fences", (names[k],), f"{names[k]} is behind its fence by {outside.max():.3g} m"))
    return tuple(found)


@lru_cache(maxsize=2)
def _derivatives(shape: Shape) -> ca.Function:
    built = ocp.build(shape)
    settings: dict[str, Any] = {"print_time": False, "ipopt": {"print_level": 0, "sb": "yes"}}
    return ca.nlpsol("derivatives", "ipopt", {"x": built.x, "p": built.p, "f": built.f, "g": built.g}, settings)


def _check(problem: Problem, plan: Plan) -> Check:
    built = ocp.build(problem.shape)
    program = Program(built.variables, built.parameters, built.rows, built.x, built.p, built.f, built.g, STATES,
                      tuple(f"step_{name}" for name in STATES))
    return optimality.check(evaluated(
        program, _derivatives(problem.shape), ocp.numbers(problem), (plan.vector, *plan.multipliers),
        ocp.variable_bounds(problem), ocp.row_bounds(problem)))
