# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands over time, and how a new plan is joined to what is already under way."""

import fleets
import numpy as np
import pytest

from coord_planner.core.schedule import Schedule, constant, of_plan


def ramp(slope, times=(0.0, 1.0, 2.0, 3.0)):
    """Two robots; speeds rise with the time, curvatures are twice them."""
    speed = slope * np.array(times)
    return Schedule(np.array(times), np.stack([np.stack([speed, 2 * speed], axis=1)] * 2))


def test_values_run_straight_between_moments_and_hold_outside():
    schedule = ramp(0.5)
    assert schedule.moment(1.5).tolist() == [[0.75, 1.5]] * 2
    assert schedule.moment(-3.0).tolist() == [[0.0, 0.0]] * 2 and schedule.moment(9.0).tolist() == [[1.5, 3.0]] * 2
    own = schedule.at(np.array([[0.5, 1.0, 2.5], [1.0, 2.0, 3.0]]))
    assert own.shape == (2, 3, 2) and own[1, :, 0].tolist() == [0.5, 1.0, 1.5]
    assert constant(np.array([[1.0, 0.1]]), 5.0).moment(-9.0).tolist() == [[1.0, 0.1]]


def test_a_splice_leaves_what_was_before_and_takes_over_what_comes_after():
    before, after = ramp(0.5), Schedule(np.array([1.3, 4.0]), np.full((2, 2, 2), 0.65))
    joined = before.splice(after, 1.3, 0.2)
    assert (np.diff(joined.times) > 0).all() and joined.times[0] == 0.2  # what lies further back is dropped
    for time in (0.2, 0.7, 1.0):
        assert joined.moment(time) == pytest.approx(before.moment(time))
    for time in (1.3, 2.0, 9.0):
        assert joined.moment(time) == pytest.approx(after.moment(time))
    # Where both agree at the switch there is no jump: every piece is as steep as one of the two.
    equal = Schedule(np.array([1.3, 2.3]), np.stack([before.moment(1.3), before.moment(1.3) + 0.1], axis=1))
    steepness = np.abs(np.diff(before.splice(equal, 1.3, 0.2).values, axis=1)) / np.diff(
        before.splice(equal, 1.3, 0.2).times)[:, None]
    assert steepness.max() <= 1.0 + 1e-9


def test_a_splice_at_a_node_does_not_double_it():
    joined = ramp(0.5).splice(ramp(1.0), 2.0, 0.0)
    assert (np.diff(joined.times) > 1e-6).all()


def test_a_plan_gives_its_commands():
    plan = fleets.corner(late=True).plan
    schedule = of_plan(plan)
    middle = (plan.times[10] + plan.times[11]) / 2
    want = (plan.states[:, 10] + plan.states[:, 11])[:, [6, 5]] / 2  # what is commanded, not what is reached
    assert schedule.moment(middle) == pytest.approx(want)
