# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Plans within limits and clearances: held exactly, against independent optimisers and published bounds."""

import itertools
import math

import attrs
import numpy as np
import pytest
from posed import posed
from scipy.optimize import minimize

from coord_planner.core import dubins, outline, reeds_shepp
from coord_planner.core.direct import impossible, planning
from coord_planner.core.direct.problem import Caps, SmallPrices, Speeds
from coord_planner.core.se2 import rollout

# Two robots that would touch half way: one bulges towards the other.
TOUCHING = ([[0, 0, 0.5], [0, 1, -0.5]], [[2.5, 0.0, -0.5], [2.5, 1.0, 0.5]], [[0, 1]])


def capped(count, **limits):
    return attrs.evolve(Caps.none(count), **{name: np.full(count, float(value)) for name, value in limits.items()})


def solved(problem, **more):
    plan = planning.plan(problem, **more)
    assert plan.status == "solved", plan.reason
    assert plan.judgement.check.clean
    return plan


def smallest_clearance(plan):
    pairs = outline.all_pairs(len(plan.problem))
    return outline.closest(outline.outlines(plan.problem.corners, plan.between(8)), pairs)[0]


def independent(problem, guess):
    """The same problem by SLSQP over the controls alone, with own arcs, from a guess near the answer."""
    count, intervals = guess[0].shape
    free = not problem.speeds.fixed
    h = problem.duration / intervals
    asked = ~np.isnan(problem.ends)
    weight = np.eye(count) + problem.coupling * problem.laplacian

    def controls(flat):
        kappa = flat[: count * intervals].reshape(count, intervals)
        return kappa, flat[count * intervals:].reshape(count, intervals) if free else np.full_like(kappa, 1.0)

    def cost(flat):
        kappa, speed = controls(flat)
        u = kappa * speed / problem.speeds.asked
        off = problem.prices.speed * np.sum((speed / problem.speeds.asked - 1) ** 2)
        return h * (np.sum(u * (weight @ u)) + off) / 2

    def poses(flat):
        kappa, speed = controls(flat)
        return rollout(problem.starts, h * speed, h * speed * kappa)

    def room(flat):
        kappa, speed = controls(flat)
        rows = [problem.caps.max_curvature[:, None] - np.abs(kappa) if np.isfinite(problem.caps.max_curvature).all()
                else np.zeros(0)]
        if np.isfinite(problem.caps.max_curvature_rate).all():
            rate = np.diff(kappa, axis=1) / h
            rows += [problem.caps.max_curvature_rate[:, None] - rate, problem.caps.max_curvature_rate[:, None] + rate]
        if np.isfinite(problem.caps.max_turn_rate).all():
            rows += [problem.caps.max_turn_rate[:, None] - speed * kappa,
                     problem.caps.max_turn_rate[:, None] + speed * kappa]
        if free:
            rows += [speed - problem.speeds.lowest, problem.speeds.highest - speed]
        return np.concatenate([np.ravel(row) for row in rows])

    start = np.concatenate([np.ravel(part) for part in guess[: 1 + free]])
    random = np.random.default_rng(0)
    found = minimize(cost, start + 0.02 * random.normal(size=start.size), method="SLSQP", constraints=[
        {"type": "eq", "fun": lambda flat: (poses(flat)[:, -1] - problem.ends)[asked]},
        {"type": "ineq", "fun": room}], options={"ftol": 1e-13, "maxiter": 1000})
    assert found.success, found.message
    return found.fun


@pytest.mark.parametrize("limits", [{"max_curvature": 2.1}, {"max_curvature": 2.2, "max_curvature_rate": 6.0}],
                         ids=["curvature", "curvature and its rate"])
def test_limits_against_an_independent_optimiser(limits):
    problem = posed([[0, 0, 0], [0, 1, 0]], [[1.2, 1.0, 1.6], [1.5, 2.3, 1.2]], [[0, 1]], 1.0, 3.0, 12,
                    caps=capped(2, **limits))
    plan = solved(problem)
    assert np.abs(plan.curvature).max() == pytest.approx(limits["max_curvature"], abs=1e-6)  # it is met
    assert independent(problem, (plan.curvature,)) == pytest.approx(plan.cost, rel=1e-7)


def test_free_speeds_against_an_independent_optimiser():
    problem = posed([[0, 0, 0], [0, 1, 0]], [[1.2, 1.0, 1.6], [2.0, 2.0, 1.6]], [[0, 1]], 1.0, 3.0, 10,
                    caps=capped(2, max_turn_rate=0.8), speeds=Speeds(0.2, 1.2, 1.0), prices=SmallPrices(speed=2.0))
    plan = solved(problem)
    assert plan.speed.min() >= 0.2 - 1e-8 and plan.speed.max() <= 1.2 + 1e-8
    assert np.abs(plan.speed * plan.curvature).max() == pytest.approx(0.8, abs=1e-6)
    assert plan.judgement.drifts.hamiltonian < 2e-2  # few intervals; it falls with more
    assert independent(problem, (plan.curvature, plan.speed)) == pytest.approx(plan.cost, rel=1e-7)


def test_all_limits_of_free_speeds_are_kept():
    limits = {"max_curvature": 1.1, "max_curvature_rate": 3.0, "max_turn_rate": 0.9, "max_lateral_acceleration": 0.8,
              "max_acceleration": 0.2, "max_braking": 0.3}
    problem = posed([[0, 0, 0], [0, 1, 0]], [[1.2, 1.0, 1.6], [2.0, 2.2, 1.6]], [[0, 1]], 1.0, 3.2, 60,
                    caps=capped(2, **limits), speeds=Speeds(0.1, 1.5, 1.0), prices=SmallPrices(speed=2.0))
    plan = solved(problem)
    h, v, kappa = 3.2 / 60, plan.speed, plan.curvature
    used = {"max_curvature": np.abs(kappa), "max_curvature_rate": np.abs(np.diff(kappa)) / h,
            "max_turn_rate": np.abs(v * kappa), "max_lateral_acceleration": np.abs(v**2 * kappa),
            "max_acceleration": np.diff(v) / h, "max_braking": -np.diff(v) / h}
    for name, values in used.items():
        assert values.max() <= limits[name] * (1 + 1e-7), name
    assert any(values.max() > limits[name] * (1 - 1e-6) for name, values in used.items())


def test_limits_and_their_conserved_quantities():
    """Curvature limits keep the Hamiltonian and every p; drift falls with the interval (shared notes on numerics)."""
    drifts = []
    for intervals in (50, 200):
        problem = posed([[0, 0, 0]], [[1.2, 1.0, 1.6]], [], 0.0, 3.0, intervals, caps=capped(1, max_curvature=2.1))
        drifts.append(solved(problem).judgement.drifts)
    assert drifts[1].force < 1e-6
    assert drifts[1].hamiltonian < 1e-3 and drifts[1].hamiltonian < drifts[0].hamiltonian / 4


@pytest.mark.parametrize(
    ("boxes", "least", "spare"),
    [(None, 0.4, 1e-6), ([[0.4, 0.2, 0.1, 0.0]] * 2, 0.2, 4e-3)],  # rectangles' shadows are rounded to the safe side
    ids=["points", "rectangles"],
)
def test_clearance_is_kept_between_the_nodes_too(boxes, least, spare):
    more = {} if boxes is None else {"boxes": boxes}
    problem = posed(*TOUCHING, 1.0, 2.7, 50, min_clearance=least, **more)
    plan, careless = solved(problem), solved(attrs.evolve(problem, min_clearance=0.0))
    assert smallest_clearance(careless) < 0.1
    assert least - 1e-7 <= smallest_clearance(plan) < least + spare
    assert plan.cost > careless.cost
    drifts = plan.judgement.drifts
    assert drifts.force is None and drifts.force_sum < 1e-6  # only the sum of p over the two is kept


def test_a_clearance_that_is_kept_anyway_changes_nothing():
    problem = posed([[0, 0, 0], [0, 1, 0]], [[1.2, 1.0, 1.2], [1.4, 2.2, 1.2]], [[0, 1]], 1.0, 3.0, 40)
    plan, watched = solved(problem), solved(attrs.evolve(problem, min_clearance=0.3))
    assert watched.cost == pytest.approx(plan.cost, rel=1e-8)
    assert watched.judgement.drifts.force < 1e-6


# Reversing: Reeds & Shepp, Pacific Journal of Mathematics 145 (1990) 367-393


@pytest.mark.parametrize("spare", [1.0002, 1.1, 1.6])
@pytest.mark.parametrize(("end", "length"), [((0, 1, 0), 2.636232143306), ((0, 0, math.pi), math.pi)])
def test_no_way_is_shorter_than_reeds_and_shepp(end, length, spare):
    """Shared check values, section 4. With hardly more time than the shortest way takes, that way is driven."""
    problem = posed([[0, 0, 0]], [end], [], 0.0, spare * length, 40, caps=capped(1, max_curvature=1.0),
                    speeds=Speeds(-1.0, 1.0, 1.0), prices=SmallPrices(speed=2.0))
    plan = solved(problem)
    way = float(np.sum(np.abs(plan.speed) * np.diff(plan.times)))
    assert length * (1 - 1e-9) <= way <= problem.duration * (1 + 1e-9)
    assert {-1.0, 1.0} == set(np.sign(plan.speed[0]))
    assert np.abs(plan.curvature).max() <= 1 + 1e-9
    gears = [int(gear) for gear, _ in itertools.groupby(np.sign(plan.speed[0]))]
    known = {path.gears for path in reeds_shepp.paths((0, 0, 0), end, 1.0)}
    assert tuple(gears) in known | {tuple(-gear for gear in each) for each in known}


def test_reversing_needs_the_time_of_the_shortest_way():
    problem = posed([[0, 0, 0]], [[0, 1, 0]], [], 0.0, 2.63, 40, caps=capped(1, max_curvature=1.0),
                    speeds=Speeds(-1.0, 1.0, 1.0))
    plan = planning.plan(problem)
    assert plan.status == "infeasible" and plan.obstacles[0].limit == "max_curvature" and "2.636 m" in plan.reason


def test_two_robots_reverse_together():
    """One parks, the other only copies it: it changes gear at the same moments or not at all, and turns likewise."""
    problem = posed([[0, 0, 0], [0, 3, 0]], [[0, 1, 0], [math.nan] * 3], [[0, 1]], 1.0, 3.2, 40,
                    caps=capped(2, max_curvature=1.0), speeds=Speeds(-1.0, 1.0, 1.0), prices=SmallPrices(speed=2.0))
    plan = solved(problem)
    np.testing.assert_allclose(plan.turning[1], plan.turning[0] / 2, atol=1e-6)  # Psi_10 / Psi_00 at chi = 1


# What cannot be


@pytest.mark.parametrize(
    ("change", "limit", "robots", "words"),
    [
        ({"ends": [[4.0, 0, 0], [math.nan] * 3]}, "duration", ("a",), "4 m from its start"),
        ({"ends": [[3.0, 0, 0.5], [math.nan] * 3]}, "duration", ("a",), "not straight ahead"),
        ({"ends": [[0.2, 1.0, math.pi], [math.nan] * 3], "caps": capped(2, max_curvature=1.4)}, "max_curvature", ("a",),
         "no way to its end is shorter than"),
        ({"ends": [[math.nan] * 3, [math.nan, math.nan, 9.0]], "caps": capped(2, max_turn_rate=2.0)}, "max_turn_rate",
         ("b",), "turn by 9 rad"),
        ({"min_clearance": 1.2}, "min_clearance", ("a", "b"), "start 1 m"),
        ({"ends": [[2.5, 1, 0], [2.5, 0.8, 0]], "min_clearance": 0.5}, "min_clearance", ("a", "b"), "end 0.2 m"),
        ({"starts": [[0, 0, 0], [3, 0, math.pi]], "ends": [[2.98, 0, 0], [0.02, 0, math.pi]], "min_clearance": 0.5,
          "intervals": 20},
         "min_clearance", ("a", "b"), "cannot keep"),
        ({"ends": [[1.2, 1.0, 1.6], [math.nan] * 3], "caps": capped(2, max_curvature_rate=0.2)}, "max_curvature_rate",
         ("a",), "misses its end"),
    ],
)
def test_what_stands_in_the_way(change, limit, robots, words):
    problem = posed([[0, 0, 0], [0, 1, 0]], [[2.5, 0, 0], [2.5, 1, 0]], [[0, 1]], 1.0, 3.0, 40)
    plan = planning.plan(attrs.evolve(problem, **change))
    assert plan.status == "infeasible"
    assert (limit, robots) in [(each.limit, each.robots) for each in plan.obstacles]
    assert words in plan.reason


@pytest.mark.parametrize("end", [(4, 3, 1), (4, 4, math.pi), (0.5, 0.5, math.pi), (1, 0, 0.5)])
def test_no_way_is_shorter_than_dubins(end):
    """Dubins 1957: a way a little longer than the shortest one is found, a shorter one is told to be impossible."""
    shortest = dubins.shortest((0, 0, 0), end, 1.0)
    wound = (*end[:2], shortest.turning)
    problem = posed([[0, 0, 0]], [wound], [], 0.0, 1.002 * shortest.length, 60, caps=capped(1, max_curvature=1.0))
    plan = planning.plan(problem)
    assert plan.status == "solved", plan.reason
    shorter = impossible.obstacles(attrs.evolve(problem, duration=0.999 * shortest.length))
    assert shorter[0].limit == "max_curvature"


def test_groups_are_found_one_by_one_and_joined():
    """Robots that nothing joins have the plans that they have alone."""
    starts, ends = [[0, 0, 0], [5, 0, 0], [0, 5, 1]], [[1.2, 1.0, 1.6], [6.0, 1.5, 1.0], [1.0, 6.5, 0.2]]
    problem = posed(starts, ends, [[0, 2]], 2.0, 3.0, 40)
    together, alone = planning.plan(problem), planning.plan(problem.part([1]))
    assert problem.groups() == [[0, 2], [1]]
    np.testing.assert_allclose(together.curvature[1], alone.curvature[0], atol=1e-7)
    assert together.cost == pytest.approx(alone.cost + planning.plan(problem.part([0, 2])).cost, rel=1e-9)
