# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a solve promises, whatever the method inside: its own equations, limits kept, breaches priced and reported."""

import attrs
import fleets
import numpy as np
import pytest
from fleets import abreast, carts, settings, states

from coord_planner.core import ocp, solver
from coord_planner.core.problem import STATES, Problem, bounds_in_force
from coord_planner.core.watch import watch

INTERVALS = 12


def problem(ends=None, spacing=2.5, pairs=((0, 1),)):
    """Two carts drive on at 1 m/s for 3 s, to ends 3 m ahead unless told otherwise."""
    fleet, start = carts(2), states(abreast(2, spacing), 1.0)
    times = 0.25 * np.arange(INTERVALS + 1)
    target = np.full((2, len(STATES)), np.nan)
    target[:, :3] = abreast(2, spacing) + [3.0, 0.0, 0.0] if ends is None else ends
    guess = np.repeat(start[:, None, :3], INTERVALS + 1, axis=1)
    guess[:, :, 0] = times
    return Problem(
        fleet=fleet, edges=np.array([[0, 1]]), weights=np.ones(1), coupling=1.0, alignment=0.0,
        prices=settings().prices, times=times, pace=1.0, initial=start, asked_speed=np.ones((2, INTERVALS)),
        turn_speed=np.ones((2, INTERVALS)), full_speed=np.ones(2), target=target,
        bounds=bounds_in_force(fleet, start, times, 99.0, 0.0, 9.0, 9.0),
        watch=watch(fleet, settings(), np.array(pairs).reshape(-1, 2), guess, 1.0),
    )


def solved(given):
    straight_on = np.repeat(given.initial[:, None], INTERVALS + 1, axis=1)
    straight_on[:, :, 0] += given.times
    return solver.solve(given, solver.start_from_states(given, straight_on))


def test_a_plan_keeps_its_equations_and_limits():
    given = problem(ends=abreast(2) + [2.8, 0.3, 0.15])
    plan = solved(given)
    assert plan.solved and ocp.violation(given, plan.vector) < 1e-6
    assert plan.states[:, -1, :3] == pytest.approx(given.target[:, :3], abs=1e-6)
    assert plan.states[:, 0] == pytest.approx(given.initial, abs=1e-12)


def test_where_nothing_speaks_against_it_the_fleet_drives_straight_on_for_nothing():
    plan = solved(problem())
    # The solver lets slacks fall 1e-8 below 0, and each of 28 is priced at 200.
    assert plan.cost == pytest.approx(0.0, abs=1e-4)
    assert plan.states[:, :, 2:6] == pytest.approx(np.broadcast_to([0.0, 0.0, 1.0, 0.0], (2, 13, 4)), abs=1e-3)


def test_an_end_out_of_reach_is_missed_by_as_little_as_it_can_be_and_told():
    """9 m in 3 s from 1 m/s: at 0.6 m/s^2 up to 1.4 m/s it is 4.07 m, and not a failure."""
    plan = solved(problem(ends=abreast(2) + [9.0, 0.0, 0.0]))
    reached = 3 * 1.4 - 0.4**2 / (2 * 0.6)
    assert plan.solved and plan.missed[:, 0] == pytest.approx(9.0 - reached, abs=2e-2)
    assert plan.states[:, -1, 0] == pytest.approx(reached, abs=2e-2)


def test_a_clearance_that_cannot_be_kept_is_told_and_not_a_failure():
    """They start nearer than the smallest clearance and its margin, 0.99 m: 0.7 m, and tails swing out."""
    given = problem(spacing=1.5, ends=np.full((2, 3), np.nan))
    plan = solved(given)
    assert plan.solved and 0.28 < plan.short.max() < 0.4
    gap = plan.states[0, :, 1] - plan.states[1, :, 1]
    assert (np.diff(gap)[:6] >= -1e-6).all() and gap[-1] > 0.8 + 0.98  # they make room


def test_the_smallest_clearance_binds_and_is_kept():
    """Ends that lead them within the margin: the ends are met as far as the steeper price allows."""
    given = problem(ends=np.array([[2.9, 1.65, 0.0], [2.9, 0.0, 0.0]]))
    free = solved(attrs.evolve(given, watch=attrs.evolve(given.watch, gaps=np.full_like(given.watch.gaps, -9.0))))
    assert free.closest()[0] < 0.9
    assert solved(given).closest()[0] > free.closest()[0] + 0.03


def test_starting_from_its_own_solution_changes_nothing():
    given = problem(ends=abreast(2) + [2.8, 0.3, 0.15])
    plan = solved(given)
    again = solver.solve(given, solver.start_from_plan(plan, given.shape, 0), warm=True)
    assert again.states == pytest.approx(plan.states, abs=3e-4)  # a warm solve stops at a tolerance of 1e-5
    assert again.cost == pytest.approx(plan.cost, rel=1e-3, abs=1e-4)


def test_the_same_problem_has_the_same_numbers():
    given = problem(ends=abreast(2) + [2.8, 0.3, 0.15])
    assert np.array_equal(solved(given).vector, solved(given).vector)


def test_a_shift_moves_the_plan_and_keeps_its_ends():
    given = problem(ends=abreast(2) + [9.0, 0.0, 0.0])
    plan, layout = solved(given), ocp.variable_blocks(given.shape)
    before = layout.unpack(plan.vector)
    after = layout.unpack(solver.start_from_plan(plan, given.shape, 3).vector)
    assert np.array_equal(after["x"][:, :-3], before["x"][:, 3:])
    assert np.array_equal(after["acceleration"][:, -3:], np.repeat(before["acceleration"][:, -1:], 3, axis=1))
    assert np.array_equal(after["under"], before["under"])


def test_mirrored_problems_have_mirrored_plans():
    ends = abreast(2) + [2.8, 0.3, 0.15]
    mirror = np.array([1.0, -1.0, -1.0])
    plan, other = solved(problem(ends=ends)), solved(problem(ends=ends * mirror, spacing=-2.5))
    assert other.states[:, :, :3] == pytest.approx(plan.states[:, :, :3] * mirror, abs=1e-5)


def test_what_is_free_at_the_end_costs_nothing():
    """A heading alone: the position is not held anywhere."""
    ends = np.array([[np.nan, np.nan, 0.4], [np.nan, np.nan, np.nan]])
    plan = solved(problem(ends=ends))
    assert plan.states[0, -1, 2] == pytest.approx(0.4, abs=1e-6) and (plan.missed[1] < 1e-6).all()
    assert 0.0 < plan.states[1, -1, 2] < 0.4  # it copies a part


def test_fleets_of_one_have_no_pairs_and_no_edges():
    made = fleets.solve(fleets.EqualRadius(radius=4.0), carts(1), abreast(1), settings())
    assert made.plan.solved and made.clearance == np.inf
