# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Controlled stops: within every brake, along the planned curves, the one with the larger clearance."""

import attrs
import fleets
import numpy as np
import pytest
from fleets import LIMITS, abreast, carts

from coord_planner.core import stopping
from coord_planner.core.fleet import Fleet, Limits, Robot
from coord_planner.core.motion import drive
from coord_planner.core.observer import Estimate
from coord_planner.core.problem import POSE
from coord_planner.core.schedule import Schedule, constant, of_plan

AT = 6.0  # seconds of the manoeuvre: in the middle of the bend


def unequal():
    """The corner's three carts; the second one brakes badly."""
    weak = attrs.evolve(LIMITS, max_braking=0.4)
    return Fleet(tuple(Robot(f"cart_{k + 1}", weak if k == 1 else LIMITS) for k in range(3)))


def followed(schedule, start, begin, fine=0.005):
    """Poses of machines that do at once what they are told, from a moment to standstill, shape (N, K, 3)."""
    count = int(np.ceil((schedule.times[-1] - begin) / fine))
    moments = begin + fine * (np.arange(count) + 0.5)
    commands = schedule.at(np.broadcast_to(moments, (len(start), count)))
    n = len(start)
    path, _ = drive(start, commands[:, 0], commands, np.full(n, fine), np.zeros((n, 2)), np.ones(n))
    return path


def off_the_curve(poses, curve):
    """Largest distance (x, y and heading) of poses from the nearest of a dense curve, shapes (K, 3), (L, 3)."""
    return max(np.abs(curve - pose).max(axis=1).min() for pose in poses)


@pytest.fixture(scope="module")
def turn():
    made = fleets.corner()
    return of_plan(made.plan), made.plan.sample(np.linspace(0.0, made.end, 4001))[:, :, POSE], made.plan.state(AT)


@pytest.mark.parametrize("stop", [stopping.in_step, stopping.apart])
def test_a_stop_keeps_every_brake_and_ends_standing(turn, stop):
    schedule, _, state = turn
    fleet = unequal()
    slowing = stop(schedule, AT, fleet)
    assert slowing.moment(AT) == pytest.approx(schedule.moment(AT))
    assert np.abs(slowing.values[:, -1, 0]).max() < 1e-9
    excess = fleets.excess(fleet, slowing.times, slowing.values)
    assert excess["max_braking"] <= 1e-9 and excess["max_acceleration"] <= 1e-9, excess
    assert excess["max_turn_rate"] <= 1e-9 and excess["max_lateral_acceleration"] <= 1e-9


def test_in_step_visits_only_planned_configurations(turn):
    schedule, curve, state = turn
    driven = followed(stopping.in_step(schedule, AT, unequal()), state[:, POSE], AT)
    for k in range(3):
        assert off_the_curve(driven[k, ::20], curve[k]) < 0.01
    # All of them together: at each moment the whole fleet is where it is at one moment of the plan.
    together = [np.abs(curve[:, :, :2] - driven[:, i, None, :2]).max(axis=(0, 2)).min() for i in range(0, 400, 20)]
    assert max(together) < 0.02


def test_apart_each_stays_on_its_own_curve_and_strong_brakes_stop_sooner(turn):
    schedule, curve, state = turn
    alone = stopping.apart(schedule, AT, unequal())
    driven = followed(alone, state[:, POSE], AT)
    for k in range(3):
        assert off_the_curve(driven[k, ::20], curve[k]) < 0.01
    speeds = alone.values[:, :, 0]
    stands = [alone.times[np.flatnonzero(speed > 1e-6)[-1]] - AT for speed in speeds]
    assert stands[0] == pytest.approx(stands[2], abs=0.06) and stands[1] > 2.0 * stands[0]
    together = stopping.in_step(schedule, AT, unequal())
    assert together.times[-1] - AT == pytest.approx(stands[1], abs=0.2)  # all take as long as the weakest brake


WEAK, STRONG = Limits(max_braking=0.3, max_speed=1.5), Limits(max_braking=2.0, max_speed=1.5)


def chosen(poses, limits):
    """The stop for robots that all drive straight on at 1 m/s."""
    fleet = Fleet(tuple(Robot(name, limit) for name, limit in zip("abc", limits)))
    state, schedule = fleets.states(np.array(poses), 1.0), constant(np.array([[1.0, 0.0]] * len(poses)), 0.0)
    estimate = Estimate(state, np.ones(len(poses)), np.zeros(len(poses)), growth=np.zeros(len(poses)))
    return stopping.choose(schedule, 0.0, fleet, estimate, 0.0)


def test_in_file_the_stop_in_step_is_chosen_where_the_one_behind_has_the_weaker_brake():
    stop = chosen([(3.0, 0.0, 0.0), (0.0, 0.0, 0.0)], (STRONG, WEAK))
    assert stop.manner == "in step" and stop.clearance == pytest.approx(1.8, abs=1e-2)


def test_towards_each_other_each_brakes_as_hard_as_it_may():
    """A third one, far away, has the weak brake that a stop in step would wait for."""
    stop = chosen([(0.0, 0.0, 0.0), (8.0, 0.0, np.pi), (0.0, 50.0, 0.0)], (STRONG, STRONG, WEAK))
    assert stop.manner == "apart" and stop.pair == (0, 1)
    # 8 m, less a length of 1.2 m, less v^2/(2 a) for each, with 0.95 of the brake, to a step of the stop
    want = 8.0 - 1.2 - 2 * 1.0 / (2 * 0.95 * 2.0)
    assert want - 0.06 <= stop.clearance <= want


def test_stopping_distance():
    """v t_r + v^2 / (2 a) with 1.5 m/s, 0.3 s, 1 m/s^2 is 1.575 m (shared/checks.md section 6, common practice).

    A stop uses 0.95 of the brake, so that rounding and jitter never ask for more than the machine has.
    """
    fleet = carts(1, Limits(max_braking=1.0, max_speed=1.5))
    schedule = constant(np.array([[1.5, 0.0]]), 0.0)
    stop = stopping.apart(schedule, 0.3, fleet)
    path = followed(schedule.splice(stop, 0.3, 0.0), abreast(1), 0.0)
    assert 1.575 <= path[0, -1, 0] <= 0.45 + 1.5**2 / (2 * 0.95) + 0.01


def test_a_stop_of_a_standing_fleet_is_over_at_once():
    schedule = Schedule(np.array([0.0, 1.0]), np.zeros((2, 2, 2)))
    for stop in (stopping.in_step, stopping.apart):
        assert stop(schedule, 0.5, carts(2)).times[-1] == 0.5


def test_a_robot_that_reverses_stops_too():
    fleet = carts(1, attrs.evolve(LIMITS, min_speed=-1.0))
    stop = stopping.in_step(constant(np.array([[-0.8, 0.2]]), 0.0), 0.0, fleet)
    assert stop.values[0, -1, 0] == pytest.approx(0.0, abs=1e-9) and (stop.values[0, :, 0] <= 0.0).all()
    assert fleets.excess(fleet, stop.times, stop.values)["max_braking"] <= 1e-9
