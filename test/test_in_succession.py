# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A file turns one after the other: compared where they are at the same place, in the reference and in ticks."""

import math
from functools import lru_cache

import attrs
import fleets
import numpy as np
import pytest
from fleets import LATE, carts, settings, solve
from sites import site

from coord_planner.core import ocp, reference, solver, succession, tick
from coord_planner.core.graph import path
from coord_planner.core.manoeuvre import InSuccession, work_out
from coord_planner.core.problem import POSE
from coord_planner.errors import RefusedError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

COUPLED = InSuccession(radius=3.0, coupling=20.0)


def in_file(count, spacing=3.0):
    """The first ahead, all look along x."""
    return np.stack([-spacing * np.arange(count), np.zeros(count), np.zeros(count)], axis=1)


@lru_cache
def made(wanted=COUPLED, count=3, spacing=3.0):
    return solve(wanted, carts(count, response=LATE), in_file(count, spacing), settings())


def task(wanted=COUPLED, poses=None, fleet=None):
    poses = in_file(3) if poses is None else poses
    fleet = fleet or carts(len(poses))
    return work_out("file", wanted, fleet, settings(), poses, 0.0, path(fleet.names).hops())


def spread(planned):
    """Largest difference of turnings at the same place of the way, 1/m."""
    u, passed = reference.turnings(planned), planned.task.passed(planned.plan.times)
    middle, behind = (passed[1:] + passed[:-1]) / 2, planned.task.behind
    places = np.linspace(0.0, passed[-1], 300)
    curves = [np.interp(places, middle + behind.max() - b, turning) for b, turning in zip(behind, u)]
    return float(np.ptp(curves, axis=0).max())


def test_everyone_turns_at_the_same_place_and_ends_as_far_behind():
    laid = task(attrs.evolve(COUPLED, before=2.0, after=1.0))
    assert laid.ends[:, 2] == pytest.approx([math.pi / 2] * 3)
    assert laid.ends[:, 0] == pytest.approx([laid.ends[0, 0]] * 3)
    assert np.diff(laid.ends[:, 1]) == pytest.approx([-3.0, -3.0])
    assert [way.length for way in laid.ways] == pytest.approx([laid.ways[0].length] * 3)
    begins = [way.start[0] + way.segments[0][1] for way in laid.ways]
    assert begins == pytest.approx([2.0] * 3) and laid.behind == pytest.approx([0.0, 3.0, 6.0])


def test_coupling_makes_turnings_alike_at_the_same_place():
    """As the coupling grows the disagreement falls (shared law: a disagreement is never dearer than it is worth)."""
    alone, coupled = made(attrs.evolve(COUPLED, coupling=0.0)), made()
    assert spread(coupled) < 0.6 * spread(alone)


@pytest.mark.parametrize("spacing", [3.0, 4.3])  # a whole number of intervals apart, and not
@pytest.mark.parametrize("start", [0.25, 2.0, 4.0, 6.0])
def test_a_tick_from_the_reference_is_the_reference(start, spacing):
    """By the principle of optimality, since a tick has the same comparisons, with what lies outside it known."""
    planned = made(spacing=spacing)
    fleet, chosen = planned.plan.fleet, settings()
    problem, s, begin = tick.pose_problem(
        planned, fleet, chosen, planned.state(start), start, start, 1.0, None, np.zeros(len(fleet))
    )
    want = planned.states(s)[:, :, POSE]
    assert solver.solve(problem, begin).poses == pytest.approx(want, abs=1e-4)
    at_once = attrs.evolve(problem, compared=None)
    other = solver.solve(at_once, solver.start_from_states(at_once, planned.states(s)))
    assert np.abs(other.poses - want).max() > 0.05  # at equal moments it would be another turn


def test_rows_say_what_the_cost_counts():
    """The compiled cost against the definition, in numpy; weights of a row that has no known part sum to 1."""
    planned = made()
    edges = planned.graph.index_edges()
    rows = succession.comparison(planned.task, edges, planned.plan.times)
    assert rows.second.sum(axis=1) == pytest.approx(1.0)  # who follows stands second in each edge
    assert np.all(rows.first.sum(axis=1) < 1 + 1e-9) and rows.known == pytest.approx(0.0)  # straight on before
    u = reference.turnings(planned)
    counted = 20.0 * np.sum(rows.seconds * rows.disagreements(u, edges) ** 2) / 2
    problem = tick.pose_problem(planned, planned.plan.fleet, settings(), planned.state(2.0), 2.0, 2.0, 1.0, None,
                                np.zeros(3))[0]
    tick_rows = problem.compared
    u_tick = np.diff(planned.states(problem.times)[:, :, 2], axis=1) / problem.intervals / problem.turn_speed
    kept = tick_rows.disagreements(u_tick, edges)
    assert 0 < 20.0 * np.sum(tick_rows.seconds * kept**2) / 2 <= counted * (1 + 1e-9)
    shape = problem.shape
    v = dict.fromkeys(ocp.variable_blocks(shape).shapes, 0.0) | {"compared": u_tick}
    values = ocp.numbers(problem)
    p = ocp.parameter_blocks(shape).unpack(values)
    assert float(ocp.comparison_cost(v, p, shape)) == pytest.approx(20.0 * np.sum(tick_rows.seconds * kept**2) / 2)


def test_a_stretch_is_shared_out_among_the_pieces_that_it_covers():
    bounds = np.array([0.0, 1.0, 3.0, 4.0])
    shared = succession.shares(bounds, np.array([0.5, -2.0]), np.array([2.5, 2.0]))  # half of the second lies before
    assert shared == pytest.approx(np.array([[0.25, 0.75, 0.0], [0.25, 0.25, 0.0]]))
    steps = succession.Steps(bounds, np.array([1.0, 2.0, 3.0]))
    assert steps.integral(np.array([3.5, -1.0]), np.array([4.5, 2.0])) == pytest.approx([1.5, 3.0])


@pytest.mark.parametrize("wanted, poses, words", [
    (InSuccession(radius=1.0), None, r"0\.25 m tighter than cart_1 can turn"),
    (InSuccession(), in_file(3) + [[0, 0, 0], [0, 1.5, 0], [0, 0, 0]],
     r"cart_2 stands 1\.00 m to the left of the file"),
    (InSuccession(), in_file(3) + [[0, 0, 0], [0, 0, 0.3], [0, 0, 0]], r"cart_2 is 11\.5 degrees off"),
])
def test_what_is_no_file_or_too_tight_is_refused_with_figures(wanted, poses, words):
    with pytest.raises(RefusedError, match=words):
        task(wanted, poses)


@pytest.mark.parametrize("count, spacing, radius", [(3, 3.5, 2.0)])
def test_a_rehearsal_ends_as_asked(count, spacing, radius):
    turn = {"kind": "in_succession", "radius": radius}
    run = rehearse(site(in_file(count, spacing), {"file": turn}, horizon__intervals=12), "file", seed=count)
    figures = summary(run)
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert figures["min_clearance_m"] >= 0.85
    assert max(figures["end_error_m"].values()) <= 0.10
    assert math.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0


def test_a_file_that_was_halted_goes_on():
    yard = fleets.Yard(carts(2, response=LATE), in_file(2), {"file": attrs.evolve(COUPLED, coupling=2.0)},
                       settings(horizon={"intervals": 12}))
    assert yard.begin("file").ok
    yard.run(6.0)
    yard.coordinator.halt(yard.now, "asked")
    yard.run_to(fleets.State.HELD)
    assert yard.resume().ok, yard.answers[-1].text
    yard.run_to(fleets.State.ENDED)
    assert np.abs(yard.machines.poses() - yard.coordinator.ends)[:, :2].max() < 0.1
