# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The optimality check against programs whose answers are known: inertia by eigenvalues, residuals by hand.

Nocedal & Wright, Numerical Optimization, 2nd ed., theorems 12.5, 12.6 and section 16.1 (from memory).
"""

import math

import attrs
import numpy as np
import pytest
from posed import driven, posed
from scipy import sparse
from scipy.optimize import root

from coord_planner.core import multistart, optimality
from coord_planner.core.direct import planning, solution
from coord_planner.core.direct import program as programs
from coord_planner.core.direct.judged import judge, point_of, with_neighbours
from coord_planner.core.direct.problem import Units
from coord_planner.core.direct.solution import Guess, solve
from coord_planner.core.theory.reach import reach


def quadratic(hessian, rows, multipliers=None, states=(), dynamics=()):
    """min 1/2 x'Hx with rows . x = 0, at the origin."""
    count, active = len(hessian), len(rows)
    free = np.full(count, np.inf)
    return optimality.Point(
        cost=0.0, vector=np.zeros(count), rows=np.zeros(active), gradient=np.zeros(count),
        jacobian=sparse.csr_matrix(np.reshape(rows, (active, count))), hessian=sparse.csr_matrix(hessian),
        lower=-free, upper=free, row_lower=np.zeros(active), row_upper=np.zeros(active),
        bound_multipliers=np.zeros(count), row_multipliers=np.zeros(active) if multipliers is None else multipliers,
        states=np.array(states, dtype=int), dynamics=np.array(dynamics, dtype=int),
    )


@pytest.mark.parametrize("seed", range(8))
def test_inertia_is_that_of_the_whole_matrix(seed):
    """Counted through the reduced Hessian, and by the eigenvalues of the KKT matrix itself."""
    random = np.random.default_rng(seed)
    count, active, states = 9, 5, 3
    hessian = random.normal(size=(count, count))
    hessian = hessian + hessian.T + 2 * seed * np.eye(count) / 3
    rows = random.normal(size=(active, count))
    if seed % 3 == 0:
        rows[4] = rows[2] - 2 * rows[3]  # a row that follows from others
    found = optimality.check(quadratic(hessian, rows, states=range(states), dynamics=range(states)))
    values = np.linalg.eigvalsh(np.block([[hessian, rows.T], [rows, np.zeros((active, active))]]))
    assert (found.positive, found.negative, found.zero) == (
        np.sum(values > 1e-9), np.sum(values < -1e-9), np.sum(np.abs(values) <= 1e-9))
    assert found.dependent == (seed % 3 == 0)
    assert found.clean == (found.falling == 0)
    if found.falling:
        assert found.steepest @ hessian @ found.steepest < 0
        np.testing.assert_allclose(rows @ found.steepest, 0, atol=1e-9)


def test_directions_that_cost_nothing_are_counted():
    found = optimality.check(quadratic(np.diag([1.0, 0.0, 2.0, 0.0]), np.zeros((0, 4))))
    assert (found.rising, found.falling, found.flat) == (2, 0, 2)
    assert found.words == "nothing better nearby: yes, to 1e-15; 2 ways to change it cost nothing"


def test_a_saddle_is_no_minimum():
    found = optimality.check(quadratic(np.diag([1.0, -1.0]), np.zeros((0, 2))))
    assert not found.clean and "no, 1 of the ways to change it cost less" in found.words


def bounded(multiplier, slope=1.0, value=0.0):
    """min slope * x with x >= 0."""
    point = quadratic(np.zeros((1, 1)), np.zeros((0, 1)))
    return attrs.evolve(point, gradient=np.array([slope]), vector=np.array([value]), lower=np.zeros(1),
                        bound_multipliers=np.array([multiplier]))


def test_what_a_bound_may_and_may_not_hold():
    assert optimality.check(bounded(-1.0)).residual == 0.0
    assert optimality.check(bounded(-1.0)).positive == 0  # held by its bound, the variable counts no more
    assert optimality.check(bounded(1.0, slope=-1.0)).stationarity == 1.0  # there is no upper bound to hold it
    assert optimality.check(bounded(-0.5)).stationarity == pytest.approx(0.5 / 1.5)  # of the terms together
    assert optimality.check(bounded(-1.0, value=-0.25)).constraints == 0.25
    assert optimality.check(bounded(-1.0, value=0.5)).complementarity == 0.5
    assert not optimality.check(bounded(math.nan)).clean


@pytest.mark.parametrize(("value", "words"), [(2.03e-7, "3e-7"), (3e-7, "3e-7"), (9.5e-7, "1e-6"), (0.0, "1e-15"),
                                              (1.0, "1e0"), (math.inf, "nothing")])
def test_small_numbers_in_words(value, words):
    assert optimality.rounded_up(value) == words


@pytest.fixture(scope="module")
def solved():
    problem = driven(3, 3, "star", 2.0, intervals=40)
    own = Units.of(problem).problem(problem)
    rough = multistart.minima(own.relaxed(), hops=0)
    fine = multistart.refined(own.relaxed(), rough, 40)
    return solve(own, Guess(fine.curvature, np.ones_like(fine.curvature)))


def test_derivatives_are_those_of_the_program(solved):
    """Gradient, Jacobian and Hessian by central differences, at a point that is no solution."""
    random = np.random.default_rng(0)
    there = attrs.evolve(solved, vector=solved.vector + random.normal(size=len(solved.vector)) / 10)
    point, step = point_of(there), 1e-5
    for _ in range(3):
        direction = random.normal(size=len(there.vector))
        sides = [point_of(attrs.evolve(there, vector=there.vector + sign * step * direction)) for sign in (1, -1)]
        costs, rows = [side.cost for side in sides], [side.rows for side in sides]
        slopes = [side.gradient + side.jacobian.T @ there.rows for side in sides]
        assert (costs[0] - costs[1]) / (2 * step) == pytest.approx(point.gradient @ direction, rel=1e-6)
        np.testing.assert_allclose((rows[0] - rows[1]) / (2 * step), point.jacobian @ direction, atol=1e-7)
        np.testing.assert_allclose((slopes[0] - slopes[1]) / (2 * step), point.hessian @ direction, atol=1e-5)


def test_a_solution_is_clean_and_what_is_next_to_it_is_not(solved):
    """The solver's word does not count: ``success`` stays True on the spoilt ones."""
    assert optimality.check(point_of(solved)).clean
    off = attrs.evolve(solved, vector=solved.vector * (1 + 1e-4)), attrs.evolve(solved, rows=solved.rows * 1.01)
    for spoilt in off:
        found = optimality.check(point_of(spoilt))
        assert spoilt.success and not found.clean and "not known" in found.words


def test_multipliers_of_the_steps_are_the_slopes_of_the_cost(solved):
    """d cost / d end by solving neighbouring problems: the envelope theorem (from memory)."""
    found, problem = with_neighbours(judge(solved), solved), solved.problem
    assert found.end_identity < 1e-5 and found.coupling_identity < 1e-6
    robot = int(np.flatnonzero(problem.placed)[0])
    force = found.costates.before[robot, -1]
    for column in range(3):
        ends = problem.ends.copy()
        costs = []
        for sign in (1, -1):
            ends[robot, column] = problem.ends[robot, column] + sign * 1e-4
            costs.append(solve(attrs.evolve(problem, ends=ends.copy()), solved.guess).cost)
        assert (costs[0] - costs[1]) / 2e-4 == pytest.approx(force[column], rel=1e-4, abs=1e-4)


def undulating(problem, swings):
    """A stationary plan with more undulations than the best one, by Newton's method on the equations themselves."""
    time = (np.arange(problem.intervals) + 0.5) / problem.intervals
    turn = problem.ends[0, 2] - problem.starts[0, 2]

    def slopes(unknowns):
        curvature, p, moment = unknowns[:-3], unknowns[-3] + 1j * unknowns[-2], unknowns[-1]
        at = reach(curvature[None])
        left = curvature / len(curvature) - np.real(np.conj(p) * at.gradient[0]) - moment / len(curvature)
        end = at.displacement[0] - complex(*(problem.ends[0, :2] - problem.starts[0, :2]))
        return np.concatenate([left, [end.real, end.imag, curvature.mean() - turn]])

    first = np.concatenate([10 * swings * np.cos(2 * np.pi * swings * time), [-(2 * np.pi * swings) ** 2, 0.0, 0.0]])
    found = root(slopes, first, tol=1e-12)
    assert found.success
    guess = Guess(found.x[None, :-3], np.ones((1, problem.intervals)))
    vector = solution._start(problem, programs.DirectShape.of(problem), guess)
    solved = attrs.evolve(solve(problem, guess), vector=vector)
    point = point_of(solved)
    moving = point.lower < point.upper
    rows = np.linalg.lstsq(point.jacobian.toarray()[:, moving].T, -point.gradient[moving], rcond=None)[0]
    return attrs.evolve(solved, rows=rows, bounds=0 * vector, cost=point.cost)


def test_away_from_a_saddle():
    """Euler's column between clamped ends: higher undulations are equilibria, but not stable ones (Love, A Treatise
    on the Mathematical Theory of Elasticity, 4th ed., ch. XIX, from memory).
    """
    problem = posed([[-0.25, 0, 0]], [[0.25, 0, 0]], [], 0.0, 1.0, 40)
    higher = undulating(problem, 2)
    check = optimality.check(point_of(higher))
    assert check.residual < 1e-8 and check.falling >= 1 and not check.clean
    cheaper = min((planning._escaped(higher, sign * check.steepest) for sign in (1, -1)), key=lambda other: other.cost)
    assert optimality.check(point_of(cheaper)).clean and cheaper.cost < 0.5 * higher.cost


def test_inertia_with_limits_that_hold():
    """The counts add up to the variables and rows that are active."""
    problem = posed([[0, 0, 0]], [[1.2, 1.0, math.pi / 2]], [], 0.0, 3.0, 40)
    caps = attrs.evolve(problem.caps, max_curvature=np.array([2.0]))
    own = Units.of(problem).problem(attrs.evolve(problem, caps=caps))
    plan = planning.plan(attrs.evolve(problem, caps=caps))
    check = plan.judgement.check
    held = np.sum(np.abs(np.abs(plan.curvature) - 2.0) < 1e-6)
    variables = programs.variable_blocks(plan.solved.shape).size - 3  # the first pose is given
    assert held > 3 and check.positive == variables - held and check.negative == 3 * 40 + 3 and check.zero == 0
    assert solution.driven(own, plan.solved.guess)[0, -1] == pytest.approx(own.ends[0], abs=1e-9)
