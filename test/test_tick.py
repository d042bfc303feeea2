# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Ticks end on the reference: where nothing disturbs the fleet, what is driven is the reference itself."""

import fleets
import numpy as np
import pytest
from fleets import LATE, PROMPT

from coord_planner.core import solver, tick
from coord_planner.core.messages import State
from coord_planner.core.problem import POSE, SPEED


def off_the_reference(yard):
    """Largest distance of the machines from the reference: of the same moment, and of its path; metres."""
    made, track = yard.coordinator.reference, {round(time, 6): poses for time, poses in yard.track}
    curve = made.states(np.linspace(0.0, made.end + 1.0, 3001))[:, :, :2]
    moments, paths = [], []
    for decision in yard.decisions:
        if decision.state is State.MOVING and 0.0 < decision.progress < 1.0:
            there = track[round(decision.time, 6)]
            asked = made.state(decision.progress * made.end)
            moments.append(np.linalg.norm(there[:, :2] - asked[:, :2], axis=1).max())
            paths += [np.linalg.norm(curve[k] - there[k, :2], axis=1).min() for k in range(len(there))]
    return max(moments), max(paths)


@pytest.mark.parametrize("manoeuvre", ["corner", "led"])
@pytest.mark.parametrize("response, same_moment", [(PROMPT, 0.01), (LATE, 0.02)], ids=["prompt", "late"])
def test_undisturbed_the_reference_is_driven(manoeuvre, response, same_moment):
    """No noise. Measured: 1 mm off the path; at the same moment 5 mm, and 14 mm with lag and delay."""
    yard = fleets.small_yard(response=response)
    assert yard.begin(manoeuvre).ok
    yard.run_to(State.ENDED)
    moment, path = off_the_reference(yard)
    assert path < 0.01 and moment < same_moment
    assert max(yard.breaches().values()) < 1e-6 and not yard.codes()


def test_one_that_ends_in_motion_is_driven_to_a_few_centimetres():
    """A tick may slow down a little after the end, which the reference must not: measured, 2 cm along the path."""
    yard = fleets.small_yard(response=PROMPT)
    assert yard.begin("passing").ok
    yard.run_to(State.STOPPING)
    moment, path = off_the_reference(yard)
    assert path < 0.01 and moment < 0.04


@pytest.mark.parametrize("pace", [1.0, 0.4])
@pytest.mark.parametrize("start", [1.0, 3.05, 6.0])
def test_a_tick_from_the_reference_is_the_reference(start, pace):
    """By the principle of optimality; slower in step it is the same path at a part of the speed."""
    made = fleets.corner()
    chosen, fleet = fleets.settings(), made.plan.fleet
    problem, s, begin = tick.pose_problem(
        made, fleet, chosen, tick.paced(made.state(start), pace), start, 50.0, pace, None, np.zeros(len(fleet)),
    )
    assert problem.times[0] == 50.0 and problem.times[-1] - 50.0 == pytest.approx((s[-1] - start) / pace)
    plan = solver.solve(problem, begin)
    want = made.states(s)[:, :, POSE]
    # At 3.05 s commands run straight between other nodes; at another pace the small prices weigh a little less.
    exact = start != 3.05 and pace == 1.0
    assert plan.poses == pytest.approx(want, abs=1e-4 if exact else 0.01)


def test_slower_in_step_everything_is_asked_at_a_part_of_the_speed():
    """So that turning, priced at the asked speed, costs the same per second of the reference."""
    made, chosen = fleets.corner(), fleets.settings()
    full, half = (
        tick.pose_problem(made, made.plan.fleet, chosen, made.state(3.0), 3.0, 0.0, pace, None, np.zeros(3))[0]
        for pace in (1.0, 0.5)
    )
    for name in ("asked_speed", "turn_speed", "full_speed"):
        assert getattr(half, name) == pytest.approx(getattr(full, name) / 2), name
    assert half.intervals == pytest.approx(full.intervals * 2) and half.pace * 2 == full.pace
    assert half.target[:, :4] == pytest.approx(full.target[:, :4])
    assert half.target[:, SPEED] == pytest.approx(full.target[:, SPEED] / 2)


def test_a_robot_that_fell_back_is_brought_back_and_the_others_copy_little():
    made = fleets.corner()
    fleet, chosen = made.plan.fleet, fleets.settings()
    state = made.state(3.0)
    state[1, 0] -= 0.2
    problem, s, begin = tick.pose_problem(made, fleet, chosen, state, 3.0, 0.0, 1.0, None, np.zeros(3))
    plan = solver.solve(problem, begin)
    off = np.linalg.norm(plan.poses[:, :, :2] - made.states(s)[:, :, :2], axis=2)
    assert off[1, 0] == pytest.approx(0.2) and off[:, -1].max() < 1e-3  # it ends on the reference
    assert off[[0, 2]].max() < 0.1


def test_a_robot_held_up_is_asked_for_more_within_its_limits():
    made = fleets.corner()
    fleet, chosen = made.plan.fleet, fleets.settings()
    behind = np.array([0.0, 0.5, 0.0])
    posed = [
        tick.pose_problem(made, fleet, chosen, made.state(3.0), 3.0, 0.0, 1.0, None, lag)[0].asked_speed
        for lag in (np.zeros(3), behind)
    ]
    more = posed[1] - posed[0]
    assert (more[[0, 2]] == 0.0).all() and more[1].max() > 0.1
    assert posed[1].max() <= 1.4 + 1e-9


def test_near_a_stop_nobody_swerves_for_what_may_be_noise():
    """2 cm aside: with 10 m left it is undone; with 0.5 m what 2 degrees undo; an offset beyond noise is not kept."""
    due = fleets.states(fleets.abreast(4))
    initial = due.copy()
    initial[:, 1] += [0.02, 0.02, -0.02, 0.5]
    moved = tick._without_swerve(due.copy(), due, initial, np.array([10.0, 0.5, 0.0, 0.5]), 0.04)
    undone = np.radians(2.0) * 0.5 / 2
    assert moved[:, 1] - due[:, 1] == pytest.approx([0.0, 0.02 - undone, -0.02, 0.04 - undone], abs=1e-12)
    still = tick._without_swerve(due.copy(), due, due, np.zeros(4), 0.04)
    assert np.array_equal(still, due)  # who is where the reference is keeps the reference's target
