# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The coupled problem in its classical form: published values, exact families, identities and laws.

Sources: Jurdjevic, Geometric Control Theory, 1997, and Sachkov & Sachkova, arXiv:1303.1746, for the reduced equations
and what they conserve; the identities follow from them (shared check values, section 1).
"""

import itertools
import math

import attrs
import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ellipe, ellipk

from coord_planner.core.theory import copying, search, shooting
from coord_planner.core.theory.classical import ClassicalProblem
from coord_planner.core.theory.coarse import minimise
from coord_planner.core.theory.common_curvature import common_curvature
from coord_planner.core.theory.elastica import Elastica
from coord_planner.core.theory.reach import reach

GRAPHS = {"path": nx.path_graph, "cycle": nx.cycle_graph, "star": lambda n: nx.star_graph(n - 1),
          "complete": nx.complete_graph}
FREE = [math.nan] * 3
SPAN = 4 * ellipe(0.5) - 2 * ellipk(0.5)  # of the rectangular elastica


def laplacian(kind, count):
    return nx.laplacian_matrix(GRAPHS[kind](count)).toarray().astype(float)


def single(start, end, duration):
    return ClassicalProblem(start, end, [[0.0]], 0.0, duration)


def invented(seed, kind="path", count=3, coupling=1.0, duration=3.0):
    """Ends within reach, some on headings alone, some free; invented, from a seed."""
    random = np.random.default_rng(seed)
    starts = np.column_stack([random.normal(size=(count, 2)), random.uniform(-3, 3, count)])
    turns, far = random.uniform(-2, 2, count), random.uniform(0.3, 0.85, count) * duration
    bearing = starts[:, 2] + turns / 2 + random.uniform(-0.6, 0.6, count)
    ends = np.column_stack([starts[:, 0] + far * np.cos(bearing), starts[:, 1] + far * np.sin(bearing),
                            starts[:, 2] + turns])
    ends[random.random(count) < 0.2, :2] = math.nan
    ends[1:][random.random(count - 1) < 0.15] = math.nan
    return ClassicalProblem(starts, ends, laplacian(kind, count), coupling, duration)


def solved(problem):
    return shooting.best(problem, intervals=16, hops=0)


def moved_ends(problem, robot, column, by):
    ends = problem.ends.copy()
    ends[robot, column] += by
    return attrs.evolve(problem, ends=ends)


CASES = [(1, "path", 1, 0.0), (2, "path", 2, 1.0), (3, "path", 3, 30.0), (4, "star", 4, 1.0), (5, "cycle", 3, 1000.0),
         (6, "complete", 4, 0.1)]


@pytest.fixture(scope="module", params=CASES, ids=[f"{kind} {count}, chi {chi:g}" for _, kind, count, chi in CASES])
def case(request):
    seed, kind, count, coupling = request.param
    problem = invented(seed, kind, count, coupling)
    found = search.minima(problem, intervals=32, hops=0)
    return problem, found.best, shooting.shoot(problem, found.best)


@pytest.mark.parametrize(
    ("start", "end", "duration", "cost"),
    [  # shared check values, section 1
        ((0, 0, 0), (0, 2, math.pi), math.pi, math.pi / 2),
        ((0, 0, math.pi / 2), (SPAN, 0, -math.pi / 2), 2 * ellipk(0.5), 1.69442616958795817),
    ],
)
def test_single_robot_values(start, end, duration, cost):
    assert shooting.best(single(start, end, duration)).cost == pytest.approx(cost, abs=1e-11)


@pytest.mark.parametrize("seed", range(4))
def test_one_robot_drives_an_elastica(seed):
    """The closed form (Jacobi's functions) from the costates that shooting found."""
    extremal = solved(invented(seed, count=1))
    sampled = extremal.sample()
    curve = Elastica.from_costates(sampled.mu[0, :, 0])
    np.testing.assert_allclose(curve.poses(sampled.times, extremal.problem.starts[0]), sampled.poses[0].T, atol=1e-9)
    assert curve.cost(extremal.problem.duration) == pytest.approx(extremal.cost, abs=1e-10)


def test_ends_are_met_and_constants_kept(case):
    problem, _, extremal = case
    sampled, asked = extremal.sample(), ~np.isnan(problem.ends)
    np.testing.assert_allclose(sampled.poses[:, :, -1][asked], problem.ends[asked], atol=1e-9)
    scale = np.abs(extremal.force).max() + abs(extremal.energy) + 1
    np.testing.assert_allclose(sampled.energy(), extremal.energy, atol=1e-9 * scale)
    always = np.ones(sampled.times.size)
    strength = np.hypot(*extremal.force.T)
    np.testing.assert_allclose(np.sqrt(sampled.casimirs()), strength[:, None] * always, atol=1e-8 * scale)
    np.testing.assert_allclose(sampled.forces(), extremal.force[:, :, None] * always, atol=1e-8 * scale)
    np.testing.assert_allclose(sampled.mu[:, 0, -1], extremal.end_moment, atol=1e-8 * scale)


def test_cost_identity(case):
    """cost = h T - sum p . displacement."""
    problem, _, extremal = case
    displacement = np.nan_to_num(problem.ends[:, :2] - problem.starts[:, :2])
    identity = extremal.energy * problem.duration - np.sum(extremal.force * displacement)
    assert identity == pytest.approx(extremal.cost, rel=1e-10)


def test_derivatives_of_the_cost(case):
    """d cost / d chi = disagreement, d cost / d end = (p, mu_1), d cost / d T = -h: by central differences."""
    problem, guess, extremal = case

    def cost(other):
        return shooting.shoot(other, minimise(other, guess.curvature)).cost

    def slope(change, step):
        return (cost(change(step)) - cost(change(-step))) / (2 * step)

    scale, step = extremal.cost + np.abs(extremal.force).max(), 1e-4
    if problem.coupling > 0:
        chi = slope(lambda by: problem.with_coupling(problem.coupling + by), step * problem.coupling)
        assert chi == pytest.approx(extremal.disagreement, rel=1e-5, abs=1e-9)
    robot = int(np.flatnonzero(problem.placed)[0])
    for column, expected in enumerate([*extremal.force[robot], extremal.end_moment[robot]]):
        got = slope(lambda by, column=column: moved_ends(problem, robot, column, by), step)
        assert got == pytest.approx(expected, abs=1e-5 * scale)
    later = slope(lambda by: attrs.evolve(problem, duration=problem.duration + by), step)
    assert later == pytest.approx(-extremal.energy, abs=1e-5 * scale)


def test_bounds(case):
    """cost >= dTheta'(I + chi L)dTheta/(2T) (Jensen); few constant pieces cost more, by at most 30/M^2
    (shared check values, section 1).
    """
    problem, guess, extremal = case
    assert extremal.cost >= problem.heading_bound() * (1 - 1e-12)
    gap = guess.cost / problem.duration / extremal.cost - 1
    assert -1e-8 <= gap <= 30 / 32**2
    assert guess.minimal


@pytest.mark.parametrize("seed", [2, 7])
def test_error_falls_as_the_square_of_the_interval(seed):
    """Order by regression, as for any piecewise constant control of a smooth problem: 2."""
    problem = invented(seed, count=2, coupling=3.0)
    plan = search.minima(problem, intervals=32, hops=0).best
    exact, counts = shooting.shoot(problem, plan).cost, np.array([25, 50, 100, 200])
    errors = []
    for count in counts:
        plan = minimise(problem, search.resampled(plan.curvature, count))
        assert plan.converged and plan.minimal
        errors.append(plan.cost / problem.duration / exact - 1)
    order = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    assert 1.8 < order < 2.2


@pytest.mark.parametrize("coupling", [0.0, 0.3, 10.0, 1000.0])
def test_family_of_arcs(coupling):
    """(1) Arcs of constant curvature: (T/2) u'(I + chi L)u; path of 6, chi 10, T 2, u = .5 ... 1.0 gives 4.05."""
    u = np.arange(5, 11) / 10
    ends = np.column_stack([np.sin(2 * u) / u, (1 - np.cos(2 * u)) / u, 2 * u])
    problem = ClassicalProblem(np.zeros((6, 3)), ends, laplacian("path", 6), coupling, 2.0)
    extremal = shooting.best(problem, intervals=16, hops=0)
    assert extremal.cost == pytest.approx(u @ problem.weight @ u, rel=1e-12)
    if coupling == 10.0:
        assert extremal.cost == pytest.approx(4.05, rel=1e-12)


@pytest.mark.parametrize(("kind", "coupling"), [("path", 0.0), ("cycle", 5.0), ("complete", 1000.0)])
def test_family_of_equal_displacements(kind, coupling):
    """(2) Ends that look alike from their starts: N times the cost of one, for every graph and coupling."""
    one = solved(invented(3, count=1))
    starts = np.array([[0, 0, 0], [3, -1, 1.1], [-2, 5, -2.5], [1, 1, 3.0]])
    local = (one.problem.displacements()[0]) * one.problem.duration
    placed = local * np.exp(1j * starts[:, 2])
    headings = starts[:, 2] + one.problem.turns()[0]
    ends = np.column_stack([starts[:, 0] + placed.real, starts[:, 1] + placed.imag, headings])
    problem = ClassicalProblem(starts, ends, laplacian(kind, 4), coupling, one.problem.duration)
    extremal = solved(problem)
    assert extremal.cost == pytest.approx(4 * one.cost, rel=1e-10)
    assert extremal.disagreement == pytest.approx(0, abs=1e-12)


@pytest.mark.parametrize("kind", ["path", "star", "complete"])
@pytest.mark.parametrize("coupling", [0.5, 40.0])
def test_copying_law(kind, coupling):
    """(3) One end, the others free: u_k = (Psi_k0 / Psi_00) u_0 and cost J1 / Psi_00."""
    ends = [[1.4, 1.3, 2.0], FREE, FREE, FREE]
    problem = ClassicalProblem(np.zeros((4, 3)), ends, laplacian(kind, 4), coupling, 2.5)
    led, alone = copying.led_alone(problem)
    extremal, one = solved(problem), solved(alone)
    curvature = extremal.sample().curvature
    np.testing.assert_allclose(curvature, copying.ratios(problem, led)[:, None] * curvature[led], atol=1e-11)
    np.testing.assert_allclose(curvature[led], one.sample().curvature[0], atol=1e-9)
    assert extremal.cost == pytest.approx(copying.cost(problem, led, one.cost), rel=1e-10)


def test_copying_needs_one_led_robot():
    problem = ClassicalProblem(np.zeros((2, 3)), [[1, 0, 0], [1, 0, 0]], laplacian("path", 2), 1.0, 2.0)
    with pytest.raises(ValueError, match="2 robots have an end"):
        copying.led_alone(problem)


@pytest.mark.parametrize("coupling", [0.0, 2.0, 500.0])
def test_family_of_headings(coupling):
    """(4) Only headings fixed: constant curvatures, the bound with equality; free robots turn with their neighbours."""
    ends = [[math.nan, math.nan, 1.0], FREE, [math.nan, math.nan, -7.5], [math.nan, math.nan, 2.0]]
    problem = ClassicalProblem(np.zeros((4, 3)), ends, laplacian("path", 4), coupling, 2.0)
    extremal = shooting.best(problem, intervals=8, hops=0)
    assert extremal.cost == pytest.approx(problem.heading_bound(), rel=1e-12)
    if coupling == 0.0:
        assert extremal.cost == pytest.approx((1 + 7.5**2 + 4) / 4, rel=1e-12)


def test_strong_coupling_limit():
    """Where the ends permit one curvature for all, V(chi) rises to N times the cost of the common problem; here
    robots 1 and 3 are free and 2 has a heading that fits.
    """
    one = solved(single((0, 0, 0), (1.8, 1.0, 1.5), 2.5))
    ends = [[1.8, 1.0, 1.5], FREE, [math.nan, math.nan, 1.5], FREE]
    problem = ClassicalProblem(np.zeros((4, 3)), ends, laplacian("cycle", 4), 0.0, 2.5)
    gaps = 4 * one.cost - np.array([solved(problem.with_coupling(chi)).cost for chi in (10, 1e3, 1e5)])
    assert (gaps > 0).all()
    assert gaps[1] < gaps[0] / 50 and gaps[2] < gaps[1] / 50  # it closes as 1/chi


@settings(max_examples=4, deadline=None)
@given(seed=st.integers(0, 10**6), robot=st.integers(0, 2), motion=st.tuples(*[st.floats(-9, 9)] * 3))
def test_moving_a_robot_changes_nothing(seed, robot, motion):
    """Any element of SE(2), applied to one robot's start and end together."""
    x, y, turn = motion
    problem = invented(seed, count=3, coupling=4.0)
    starts, ends = problem.starts.copy(), problem.ends.copy()
    for poses in (starts, ends):
        place = (poses[robot, 0] + 1j * poses[robot, 1]) * np.exp(1j * turn)
        poses[robot] = [place.real + x, place.imag + y, poses[robot, 2] + turn]
    moved = attrs.evolve(problem, starts=starts, ends=ends)
    assert solved(moved).cost == pytest.approx(solved(problem).cost, rel=1e-9)


@settings(max_examples=4, deadline=None)
@given(seed=st.integers(0, 10**6), scale=st.floats(0.05, 20))
def test_scaling(seed, scale):
    """cost(s * poses, s * T) = cost / s."""
    problem = invented(seed, count=2, coupling=2.0)
    factors = np.array([scale, scale, 1])
    larger = attrs.evolve(problem, starts=problem.starts * factors, ends=problem.ends * factors,
                          duration=problem.duration * scale)
    assert solved(larger).cost * scale == pytest.approx(solved(problem).cost, rel=1e-9)


@settings(max_examples=4, deadline=None)
@given(seed=st.integers(0, 10**6), order=st.permutations(range(3)))
def test_relabelling(seed, order):
    problem = invented(seed, "star", 3, coupling=3.0)
    other = attrs.evolve(problem, starts=problem.starts[order], ends=problem.ends[order],
                         laplacian=problem.laplacian[np.ix_(order, order)])
    assert solved(other).cost == pytest.approx(solved(problem).cost, rel=1e-9)


def test_no_edge_no_influence():
    """A disconnected graph splits into independent problems."""
    first, second = invented(11, count=2, coupling=2.0), invented(12, count=2, coupling=2.0)
    both = ClassicalProblem(np.concatenate([first.starts, second.starts]), np.concatenate([first.ends, second.ends]),
                            np.kron(np.eye(2), first.laplacian), 2.0, first.duration)
    assert solved(both).cost == pytest.approx(solved(first).cost + solved(second).cost, rel=1e-9)


@pytest.mark.parametrize("seed", [3, 21, 22])
def test_cost_rises_and_is_concave_in_the_coupling(seed):
    """The global minimum never falls with chi, and V(chi_i) <= effort_j + chi_i * disagreement_j."""
    solutions = [solved(invented(seed, coupling=chi)) for chi in (0.0, 0.1, 1.0, 10.0, 100.0)]
    for i in solutions:
        for j in solutions:
            assert i.cost <= (j.effort + i.problem.coupling * j.disagreement) * (1 + 1e-9)
    costs = [solution.cost for solution in solutions]
    assert all(late >= early * (1 - 1e-9) for early, late in itertools.pairwise(costs))


@pytest.mark.parametrize("seed", range(3))
def test_reach_derivatives(seed):
    """First and second derivatives against central differences."""
    random = np.random.default_rng(seed)
    u, costate, step = random.normal(size=(2, 6)) * 4, np.array([1 - 0.5j, 0.3 + 2j]), 1e-5
    at = reach(u)
    for robot in range(2):
        for arc in range(6):
            change = np.zeros_like(u)
            change[robot, arc] = step
            above, below = reach(u + change), reach(u - change)
            slope = (above.displacement - below.displacement)[robot] / (2 * step)
            assert slope == pytest.approx(at.gradient[robot, arc], abs=1e-9)
            bend = np.real(np.conj(costate[robot]) * (above.gradient - below.gradient)[robot] / (2 * step))
            np.testing.assert_allclose(bend, at.hessian(costate)[robot, arc], atol=1e-9)


def drive(starts, curvature, length):
    steps = np.broadcast_to(curvature * length / len(curvature), (len(starts), len(curvature)))
    displacement = reach(np.broadcast_to(curvature * length, steps.shape)).displacement * length
    placed = displacement * np.exp(1j * starts[:, 2])
    return np.column_stack([starts[:, 0] + placed.real, starts[:, 1] + placed.imag, starts[:, 2] + steps.sum(axis=1)])


@pytest.mark.parametrize("count", [1, 5, 300])
def test_common_curvature_meets_the_means(count):
    """Least squares of the misses, by its own normal equations: seen from the starts they sum to nothing."""
    random = np.random.default_rng(count)
    starts = np.column_stack([random.normal(size=(count, 2)) * 10, random.uniform(-3, 3, count)])
    local = 4 + 3j + random.normal(size=count) * 0.5
    placed = local * np.exp(1j * starts[:, 2])
    ends = np.column_stack([starts[:, 0] + placed.real, starts[:, 1] + placed.imag, starts[:, 2] + 1.2])
    if count > 1:
        ends[1], ends[3, :2] = math.nan, math.nan
    profile = common_curvature(starts, ends, 5.0, 40, speed=1.5)
    missed = drive(starts, profile, 7.5) - ends
    seen = (missed[:, 0] + 1j * missed[:, 1]) * np.exp(-1j * starts[:, 2])
    assert abs(np.nanmean(seen)) < 1e-8
    assert np.nanmean(missed[:, 2]) == pytest.approx(0, abs=1e-9)


def test_common_curvature_is_the_single_plan_where_all_see_the_same():
    one = solved(single((0, 0, 0), (3.0, 2.0, 1.0), 4.0))
    profile = common_curvature(np.zeros((4, 3)), np.tile([3.0, 2.0, 1.0], (4, 1)), 4.0, 100)
    assert np.sum(profile**2) * 4.0 / 100 / 2 == pytest.approx(one.cost, rel=30 / 100**2)


def test_common_curvature_of_headings_and_of_nothing():
    starts = np.zeros((2, 3))
    np.testing.assert_allclose(common_curvature(starts, [[math.nan, math.nan, 1.0], FREE], 2.0, 3, 0.5), [1.0] * 3)
    np.testing.assert_array_equal(common_curvature(starts, [FREE, FREE], 2.0, 3), [0.0] * 3)


@pytest.mark.parametrize("end", [(9.0, 0.5, 0.3), (8.0, 0.0, 0.0), (8.0, 0.0, 1.0)])
def test_common_curvature_goes_as_far_as_it_can(end):
    profile = common_curvature(np.zeros((1, 3)), [end], 8.0, 30)
    reached = drive(np.zeros((1, 3)), profile, 8.0)[0]
    assert reached[2] == pytest.approx(end[2], abs=1e-8)
    assert math.hypot(reached[0] - end[0], reached[1] - end[1]) <= 0.11 * 8.0 + max(0.0, math.hypot(*end[:2]) - 8.0)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"ends": [[5.0, 0, 0]]}, "farther than the way"),
        ({"ends": [[1.0, math.nan, 0]]}, "allowed ends"),
        ({"ends": [[1.0, 1.0, math.nan]]}, "allowed ends"),
        ({"starts": [[math.nan, 0, 0]]}, "finite starts"),
        ({"coupling": -1.0}, "coupling >= 0"),
        ({"duration": 0.0}, "duration above 0"),
        ({"laplacian": np.zeros((2, 2))}, "shapes"),
    ],
)
def test_bad_problems(change, words):
    with pytest.raises(ValueError, match=words):
        attrs.evolve(single((0, 0, 0), (1, 0, 0.5), 2.0), **change)
