# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One plan from one problem, in its classical form: published values, exact families, identities, order.

Sources: shared check values, section 1 (Jurdjevic, Geometric Control Theory, 1997; Sachkov & Sachkova,
arXiv:1303.1746); "best known" is the independent shooting solution of core/theory.
"""

import math

import attrs
import numpy as np
import pytest
from posed import FREE, anywhere, classical, driven, edges, posed
from scipy.special import ellipe, ellipk

from coord_planner.core.direct import planning
from coord_planner.core.direct.problem import Speeds
from coord_planner.core.theory import shooting
from coord_planner.core.theory.coarse import minimise
from coord_planner.core.theory.search import resampled

SPAN = 4 * ellipe(0.5) - 2 * ellipk(0.5)  # of the rectangular elastica


def solved(problem, **more):
    plan = planning.plan(problem, **more)
    assert plan.status == "solved", plan.reason
    return plan


def shot(problem, plan):
    """The extremal that shooting reaches from a plan."""
    relaxed = classical(problem)
    return shooting.shoot(relaxed, minimise(relaxed, resampled(plan.curvature * problem.duration, 64)))


@pytest.mark.parametrize(
    ("start", "end", "duration", "cost"),
    [((0, 0, 0), (0, 2, math.pi), math.pi, math.pi / 2),
     ((0, 0, math.pi / 2), (SPAN, 0, -math.pi / 2), 2 * ellipk(0.5), 1.69442616958795817)],
)
def test_single_robot_values(start, end, duration, cost):
    plan = solved(posed([start], [end], [], 0.0, duration, 200))
    assert -1e-8 <= plan.cost / cost - 1 <= 30 / 200**2


@pytest.mark.parametrize("coupling", [0.0, 10.0])
def test_family_of_arcs(coupling):
    """(1) (T/2) u'(I + chi L)u; path of 6, chi 10, T 2, u = .5 ... 1.0 gives 4.05."""
    u = np.arange(5, 11) / 10
    ends = np.column_stack([np.sin(2 * u) / u, (1 - np.cos(2 * u)) / u, 2 * u])
    problem = posed(np.zeros((6, 3)), ends, edges("path", 6), coupling, 2.0, 60)
    plan = solved(problem, neighbours=False)
    assert plan.cost == pytest.approx(u @ (np.eye(6) + coupling * problem.laplacian) @ u, rel=1e-9)
    if coupling == 10.0:
        assert plan.cost == pytest.approx(4.05, rel=1e-9)


@pytest.mark.parametrize(("kind", "coupling"), [("cycle", 5.0), ("complete", 1000.0)])
def test_family_of_equal_displacements(kind, coupling):
    """(2) Ends that look alike from their starts: N times the cost of one."""
    one = solved(posed([[0, 0, 0]], [[1.1, 1.0, 1.9]], [], 0.0, 2.0, 60))
    starts = np.array([[0, 0, 0], [3, -1, 1.1], [-2, 5, -2.5]])
    moved = (1.1 + 1.0j) * np.exp(1j * starts[:, 2])
    ends = np.column_stack([starts[:, 0] + moved.real, starts[:, 1] + moved.imag, starts[:, 2] + 1.9])
    plan = solved(posed(starts, ends, edges(kind, 3), coupling, 2.0, 60))
    assert plan.cost == pytest.approx(3 * one.cost, rel=1e-9)
    assert plan.disagreement == pytest.approx(0, abs=1e-12)


@pytest.mark.parametrize("kind", ["path", "star", "complete"])
@pytest.mark.parametrize("coupling", [0.5, 40.0])
def test_copying_law(kind, coupling):
    """(3) One led robot, the others free: u_k = (Psi_k0 / Psi_00) u_0 at every instant, cost J1 / Psi_00."""
    end = [1.4, 1.3, 2.0]
    problem = posed(np.zeros((4, 3)), [end, FREE, FREE, FREE], edges(kind, 4), coupling, 2.5, 50)
    plan, one = solved(problem, neighbours=False), solved(posed([[0, 0, 0]], [end], [], 0.0, 2.5, 50), neighbours=False)
    psi = np.linalg.inv(np.eye(4) + coupling * problem.laplacian)
    np.testing.assert_allclose(plan.curvature, (psi[:, [0]] / psi[0, 0]) * plan.curvature[[0]], atol=1e-6)
    assert plan.cost == pytest.approx(one.cost / psi[0, 0], rel=1e-6)


def test_family_of_headings():
    """(4) Only headings fixed: constant curvatures, and the bound from below with equality."""
    ends = [[math.nan, math.nan, 1.0], FREE, [math.nan, math.nan, -7.5], [math.nan, math.nan, 2.0]]
    plan = solved(posed(np.zeros((4, 3)), ends, edges("path", 4), 2.0, 2.0))
    assert plan.cost == pytest.approx(plan.judgement.heading_bound * plan.units.cost, rel=1e-9)
    np.testing.assert_allclose(plan.curvature, plan.curvature[:, [0]] * np.ones(100), atol=1e-8)


CASES = [(driven, 7, 1, "path", 0.0), (driven, 2, 2, "path", 1.0), (anywhere, 3, 3, "star", 100.0),
         (driven, 5, 4, "complete", 10.0), (driven, 6, 3, "cycle", 1000.0)]


@pytest.fixture(scope="module", params=CASES, ids=[f"{kind} {count}, chi {chi:g}" for _, _, count, kind, chi in CASES])
def case(request):
    make, seed, count, kind, coupling = request.param
    problem = make(seed, count, kind, coupling)
    return problem, solved(problem)


def test_as_cheap_as_the_best_known(case):
    """-1e-8 <= (J - J*)/J* <= 30/M^2, J* by shooting."""
    problem, plan = case
    assert -1e-8 <= plan.cost / shot(problem, plan).cost - 1 <= 30 / problem.intervals**2


def test_what_holds_on_a_solved_plan(case):
    """Check values, section 1, the table: constants, identities, the bound from below."""
    problem, plan = case
    judgement, asked = plan.judgement, ~np.isnan(problem.ends)
    assert judgement.check.clean and judgement.check.zero == 0
    np.testing.assert_allclose(plan.poses[:, -1][asked], problem.ends[asked], atol=1e-7)
    assert judgement.drifts.hamiltonian < 1e-3 and judgement.drifts.force < 1e-6 and judgement.drifts.casimir < 1e-6
    assert judgement.cost_identity < 1e-6 and judgement.end_identity < 1e-4
    assert judgement.coupling_identity is None or judgement.coupling_identity < 1e-4
    assert plan.cost == pytest.approx(plan.effort + problem.coupling * plan.disagreement, rel=1e-9)
    assert plan.cost >= judgement.heading_bound * plan.units.cost * (1 - 1e-9)


def test_costates_are_those_of_the_extremal(case):
    """p and h against the shooting solution: what the multipliers of few intervals are good for."""
    problem, plan = case
    extremal, units = shot(problem, plan), plan.units
    force = plan.judgement.costates.force[:, 0] * units.cost / units.metre
    scale = np.abs(extremal.force).max() + abs(extremal.energy)
    np.testing.assert_allclose(force, extremal.force, atol=2e-3 * scale)
    assert plan.judgement.energy * units.cost / units.second == pytest.approx(extremal.energy, abs=2e-3 * scale)


@pytest.mark.parametrize(("seed", "count"), [(1001, 2), (1004, 2)])
def test_error_and_drift_fall_as_the_square_of_the_interval(seed, count):
    """Order by regression over 50, 100, 200, 400 intervals: 1.8 to 2.2."""
    counts, errors, drifts, best = np.array([50, 100, 200, 400]), [], [], None
    for intervals in counts:
        problem = driven(seed, count, "path", 1.0, intervals=int(intervals))
        plan = solved(problem, neighbours=False)
        best = best or shot(problem, plan).cost
        errors.append(plan.cost / best - 1)
        drifts.append(plan.judgement.drifts.hamiltonian)
    for values in (errors, drifts):
        assert 1.8 < -np.polyfit(np.log(counts), np.log(values), 1)[0] < 2.2


def test_speed_only_sets_the_clock():
    """At another fixed speed the same ways are driven; a cost per second of a turning per metre falls with it."""
    problem = driven(2, 2, "path", 1.0, intervals=50)
    slow, fast = solved(problem), solved(attrs.evolve(problem, speeds=Speeds(2.0, 2.0, 2.0),
                                                      duration=problem.duration / 2))
    assert fast.cost == pytest.approx(slow.cost / 2, rel=1e-9)
    np.testing.assert_allclose(fast.poses, slow.poses, atol=1e-7)


@pytest.mark.parametrize(("ends", "cost"), [([FREE, FREE], 0.0), ([[3.0, 1.0, 0.0], FREE], 0.0)])
def test_nothing_to_turn_for(ends, cost):
    """Nobody has an end; or the end lies straight ahead, as far as the way is long (its rows depend on each other)."""
    plan = solved(posed([[0, 1, 0], [1, 1, 1]], ends, [[0, 1]], 1.0, 3.0))
    assert plan.cost == pytest.approx(cost, abs=1e-12)


def test_the_global_minimum_among_many():
    """Strongly coupled, ends anywhere: no other seeds find anything cheaper."""
    problem = anywhere(13, 4, "path", 1000.0, intervals=60)
    plan = solved(problem, neighbours=False)
    assert plan.cost <= solved(problem, seed=1, neighbours=False).cost * (1 + 1e-6)
    assert plan.tried > 50 and len(plan.reached) > 1
