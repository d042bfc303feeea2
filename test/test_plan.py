# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A plan as data: what lies between its nodes."""

import fleets
import numpy as np
import pytest

from coord_planner.core import outline, se2
from coord_planner.core.fast.engine import kernels
from coord_planner.core.plan import _closest_along, closest_along
from coord_planner.core.problem import POSE


def test_at_its_nodes_a_plan_is_what_was_solved_for():
    plan = fleets.corner().plan
    for i in (0, 7, -1):
        assert plan.state(plan.times[i]) == pytest.approx(plan.states[:, i], abs=1e-12)
    assert plan.state(-5.0) == pytest.approx(plan.states[:, 0])
    assert plan.state(plan.times[-1] + 5.0) == pytest.approx(plan.states[:, -1])


def test_between_nodes_poses_lie_on_the_arc_and_the_rest_runs_straight():
    plan = fleets.corner().plan
    i, h = 20, plan.times[21] - plan.times[20]
    before, middle, after = plan.states[:, i], plan.state(plan.times[i] + h / 2), plan.states[:, i + 1]
    assert middle[:, 3:] == pytest.approx((before[:, 3:] + after[:, 3:]) / 2)
    assert middle[:, 2] == pytest.approx((before[:, 2] + after[:, 2]) / 2)
    # The second half of the arc equals the first, moved by the first.
    def step(a, b):
        return np.stack(se2.compose(se2.inverse(tuple(a[:, POSE].T)), tuple(b[:, POSE].T)))

    assert step(before, middle) == pytest.approx(step(middle, after), abs=1e-9)
    assert plan.sample(np.array([plan.times[i]]))[:, 0] == pytest.approx(before)


def test_the_smallest_clearance_looks_between_the_nodes_too():
    """Two robots that cross each other's way between two nodes, far from both."""
    fleet = fleets.carts(2)
    states = np.zeros((2, 3, 7))
    states[0, :, 0], states[1, :, 0] = [-6.0, 6.0, 18.0], [6.0, -6.0, -18.0]
    states[1, :, 1] = 1.0
    plan = fleets.corner(2).plan
    crossing = type(plan)(
        fleet=fleet, times=np.array([0.0, 1.0, 2.0]), states=states, rates=np.zeros((2, 2, 2)), cost=0.0,
        short=plan.short, pairs=plan.pairs, outside=plan.outside, fenced=plan.fenced, missed=plan.missed, solved=True,
        solve_time=0.0, iterations=0,
        vector=plan.vector, multipliers=plan.multipliers,
    )
    at_nodes, pair = crossing.closest(0)
    assert at_nodes == pytest.approx(12.0 - 1.2, abs=0.2) and pair == (0, 1)
    assert crossing.closest(1)[0] == pytest.approx(0.2)  # abreast half-way: 1 m apart, 0.8 m wide


def test_skipping_pairs_that_stay_far_apart_changes_nothing():
    rng = np.random.default_rng(3)
    fleet, poses = fleets.carts(9), rng.uniform(-15.0, 15.0, (9, 6, 3))
    gap, pair = outline.closest(outline.outlines(fleet.corners(), poses), outline.all_pairs(9))
    assert closest_along(fleet, poses) == (pytest.approx(gap, abs=1e-12), pair)


def test_what_is_compiled_finds_the_same_nearest_two():
    compiled = kernels()
    if compiled is None:
        pytest.skip("numba is not installed")
    rng = np.random.default_rng(5)
    fleet, met = fleets.carts(5), 0
    for _ in range(200):
        poses, growth = rng.uniform([-8.0, -8.0, -7.0], [8.0, 8.0, 7.0], (5, 4, 3)), rng.uniform(0.0, 0.5, 5)
        gap, pair = _closest_along(fleet.corners(), poses, growth)
        found, *two = compiled.nearest(fleet.corners(), poses, growth)
        assert max(found, 0.0) == pytest.approx(gap, abs=1e-12)
        met += gap == 0.0
        assert gap == 0.0 or tuple(two) == pair
    assert 20 < met < 180
    assert closest_along(fleets.carts(1), np.zeros((1, 2, 3))) == (np.inf, (-1, -1))
