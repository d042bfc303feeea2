# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a solution reports of itself: its optimality check, what it conserves, and the identities it must keep."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from .. import optimality
from ..optimality import Check, Point
from . import costates as recovered
from . import program as programs
from .costates import Costates, Drifts
from .evaluated import evaluated
from .problem import DirectProblem
from .solution import Solved, program_of, solve, solver_of

_STEP = 1e-4  # of the way's length and, relative, of the coupling: for derivatives of the cost
_NOTHING = 1e-9  # cost below which a relative deviation says nothing


@attrs.frozen(eq=False)
class Judgement:
    """All in the problem's own units, deviations relative.

    Attributes:
        check: residuals and inertia. missed: of asked ends by the plan's own arcs, in ways' lengths and rad.
        costates: recovered. energy: mean Hamiltonian. drifts: of what is conserved under the limits at hand.
        heading_bound: that no plan is cheaper than (fixed or free speed: turning is counted at the asked one).
        cost_identity: cost = h T - sum p . displacement; None where limits, prices or clearances count.
        coupling_identity: d cost / d chi = disagreement; end_identity: d cost / d end = p, for the robot with the
            largest p; None where there is none, or where a neighbouring problem has no plan.
    """

    check: Check
    missed: float
    costates: Costates
    energy: float
    drifts: Drifts
    heading_bound: float
    cost_identity: Optional[float]
    coupling_identity: Optional[float]
    end_identity: Optional[float]


def point_of(solved: Solved) -> Point:
    """The program at a solution, evaluated anew."""
    return evaluated(
        program_of(solved), solver_of(solved.shape), programs.numbers(solved.problem, solved.lines, solved.gears),
        (solved.vector, solved.bounds, solved.rows),
        programs.variable_bounds(solved.problem, solved.shape, solved.gears),
        programs.row_bounds(solved.problem, solved.shape),
    )


def judge(solved: Solved) -> Judgement:
    """Judge a solution by itself."""
    check = optimality.check(point_of(solved))
    found = recovered.costates(solved)
    energy = recovered.hamiltonian(solved, found)
    mean = float(energy.mean()) if energy.size else 0.0
    asked = ~np.isnan(solved.problem.ends)
    missed = np.abs(solved.poses[:, -1] - solved.problem.ends)[asked]
    return Judgement(
        check, float(missed.max(initial=0.0)), found, mean, recovered.drifts(solved, found, energy),
        heading_bound(solved.problem), _cost_identity(solved, found, mean), None, None,
    )


def with_neighbours(judgement: Judgement, solved: Solved) -> Judgement:
    """The same, with the derivatives of the cost held against problems next to this one."""
    return attrs.evolve(judgement, coupling_identity=_coupling_identity(solved),
                        end_identity=_end_identity(solved, judgement.costates))


def heading_bound(problem: DirectProblem) -> float:
    """No plan costs less, by Jensen's inequality: the turning u, whose mean over the time is the change of heading
    over the way at the asked speed, enters the cost by a convex square. Prices and limits only add.
    """
    turns = problem.ends[:, 2] - problem.starts[:, 2]
    headed = ~np.isnan(turns)
    weight = np.eye(len(problem)) + problem.coupling * problem.laplacian
    best = weight[np.ix_(headed, headed)]
    if not headed.all():
        across = weight[np.ix_(~headed, headed)]
        best = best - across.T @ np.linalg.solve(weight[np.ix_(~headed, ~headed)], across)
    mean = turns[headed] / problem.length
    return float(mean @ best @ mean) * problem.duration / 2


def disagreement(problem: DirectProblem, turning: np.ndarray, intervals: np.ndarray) -> float:
    """1/2 integral u'Lu, u of shape (N, M) in intervals of lengths (M,)."""
    return float(np.sum(turning * (problem.laplacian @ turning) * intervals)) / 2


def _cost_identity(solved: Solved, found: Costates, energy: float) -> Optional[float]:
    problem = solved.problem
    if not problem.classical:
        return None
    moved = solved.poses[:, -1, :2] - problem.starts[:, :2]
    work = float(np.sum(found.force.mean(axis=1) * moved))
    size = solved.cost if solved.cost > _NOTHING * (abs(energy) + abs(work)) else abs(energy) + abs(work)
    return abs(energy * problem.duration - work - solved.cost) / size if size > _NOTHING else 0.0


def _coupling_identity(solved: Solved) -> Optional[float]:
    problem = solved.problem
    chi = problem.coupling
    if chi <= 0.0 or problem.alignment > 0.0:
        return None
    expected = disagreement(problem, solved.curvature * solved.speed / problem.speeds.asked, solved.intervals)
    if chi * expected < _NOTHING * (1 + solved.cost):
        return None
    costs = [_cost_of(solved, attrs.evolve(problem, coupling=chi * (1 + sign * _STEP))) for sign in (1, -1)]
    return _deviation(costs, 2 * chi * _STEP, expected)


def _end_identity(solved: Solved, found: Costates) -> Optional[float]:
    problem = solved.problem
    if not problem.placed.any():
        return None
    force = found.before[:, -1, :2] * problem.placed[:, None]
    robot, column = np.unravel_index(int(np.argmax(np.abs(force))), force.shape)
    expected = float(force[robot, column])
    if abs(expected) < _NOTHING * (1 + solved.cost):
        return None
    costs = []
    for sign in (1, -1):
        ends = problem.ends.copy()
        ends[robot, column] += sign * _STEP
        costs.append(_cost_of(solved, attrs.evolve(problem, ends=ends)))
    return _deviation(costs, 2 * _STEP, expected)


def _cost_of(solved: Solved, problem: DirectProblem) -> Optional[float]:
    near = solve(problem, solved.guess, lines=solved.lines)
    return near.cost if near.success else None


def _deviation(costs: list[Optional[float]], step: float, expected: float) -> Optional[float]:
    above, below = costs
    if above is None or below is None:
        return None
    return abs((above - below) / step / expected - 1)
