# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Limits in force: from any state there is a way to keep them, and it leads back at the machine's own rates."""

import numpy as np
import pytest
from fleets import LIMITS, abreast, carts, settings, states
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core.fleet import Limits
from coord_planner.core.problem import CURVATURE_COMMAND, SPEED_COMMAND, bounds_in_force
from coord_planner.core.watch import choose_pairs, watch

SLACK = 1e-9


def start(speed, curvature):
    state = states(np.zeros((1, 3)), speed)
    state[:, CURVATURE_COMMAND] = curvature
    return state


def slowest_drive(bounds, times, limits, speed, curvature):
    """Steer back and drive as slowly as the lower bound allows, each as fast as the machine can; shapes (M,)."""
    speeds, curvatures = [], []
    for i, h in enumerate(np.diff(times)):
        lowest = max(bounds.min_speed[0, i], -np.inf)
        target = lowest if speed < 0 or lowest > 0 else max(lowest, 0.0)
        speed += np.clip(target - speed, -limits.max_braking * h, limits.max_acceleration * h)
        curvature -= np.clip(curvature, -limits.max_curvature_rate * h, limits.max_curvature_rate * h)
        speeds.append(speed)
        curvatures.append(curvature)
    return np.array(speeds), np.array(curvatures)


@given(
    speed=st.floats(0.0, 3.0), curvature=st.floats(-2.0, 2.0), lowest=st.sampled_from([-0.5, 0.0, 0.4]),
    end_time=st.floats(0.0, 6.0), end_part=st.floats(0.0, 1.0), cap=st.floats(0.4, 5.0), bend=st.floats(0.1, 5.0),
    first=st.floats(0.05, 0.3),
)
def test_from_any_state_braking_and_steering_back_keep_the_limits(
    speed, curvature, lowest, end_time, end_part, cap, bend, first
):
    limits = Limits(
        max_curvature=0.8, max_curvature_rate=0.6, min_speed=lowest, max_speed=1.4, max_acceleration=0.6,
        max_braking=1.0, max_turn_rate=1.0, max_lateral_acceleration=1.0,
    )
    end_speed = end_part * min(1.4, cap)
    times = np.concatenate([[0.0], first + 0.25 * np.arange(20)])
    state = start(speed, curvature)
    bounds = bounds_in_force(carts(1, limits), state, times, end_time, end_speed, cap, 5.0, bend)
    speeds, curvatures = slowest_drive(bounds, times, limits, speed, curvature)
    assert (bounds.min_speed <= bounds.max_speed + SLACK).all()
    assert (speeds <= bounds.max_speed + SLACK).all() and (speeds >= bounds.min_speed - SLACK).all()
    assert (np.abs(curvatures) <= bounds.max_curvature + SLACK).all()
    assert (np.abs(speeds * curvatures) <= bounds.max_turn_rate + SLACK).all()
    assert (np.abs(speeds**2 * curvatures) <= bounds.max_lateral_acceleration + SLACK).all()


def test_a_state_outside_its_limits_comes_back_at_the_machines_own_rates():
    times = np.array([0.0, 0.25, 0.5, 1.0, 3.0])
    bounds = bounds_in_force(carts(1), start(2.0, -1.2), times, 99.0, 0.0, 9.0, 9.0)
    # from 2 m/s by 1 m/s^2 to 1.4 m/s; from 1.2 1/m by 0.6 1/(m s) to 0.8 1/m
    assert bounds.max_speed[0] == pytest.approx([1.75, 1.5, 1.4, 1.4])
    assert bounds.max_curvature[0] == pytest.approx([1.05, 0.9, 0.8, 0.8])
    assert bounds.max_turn_rate[0] == pytest.approx([1.75 * 1.05, 1.5 * 0.9, 1.0, 1.0])
    assert bounds.max_lateral_acceleration[0] == pytest.approx([1.75**2 * 1.05, 1.5**2 * 0.9, 1.0, 1.0])


def test_within_its_limits_nothing_but_the_limits_is_in_force():
    bounds = bounds_in_force(carts(1), start(1.0, 0.3), np.linspace(0.0, 3.0, 7), 99.0, 0.0, 1.2, 0.7, 0.25 + 0.1)
    assert (bounds.max_speed == 1.2).all()  # the site's cap is below the machine's 1.4 m/s
    assert (bounds.max_lateral_acceleration == 0.7).all()
    assert (bounds.max_turn_rate == LIMITS.max_turn_rate).all()
    assert (bounds.max_curvature == 0.35).all()  # what the manoeuvre asks for at most


def test_a_machine_with_a_lowest_speed_may_start_and_stop():
    limits = Limits(min_speed=0.5, max_speed=1.4, max_acceleration=0.5, max_braking=1.0)
    times = np.array([0.0, 0.5, 1.0, 2.0, 3.5, 4.0, 4.5])
    bounds = bounds_in_force(carts(1, limits), start(0.0, 0.0), times, 4.0, 0.0, 9.0, 9.0)
    # up at 0.5 m/s^2 from 0; down at 1 m/s^2 to 0 at 4 s; standing afterwards
    assert bounds.min_speed[0] == pytest.approx([0.25, 0.5, 0.5, 0.5, 0.0, 0.0])
    assert bounds.max_speed[0, -2:] == pytest.approx([0.0, 0.0])


def test_after_the_end_it_goes_straight_on_at_the_end_speed():
    times = np.linspace(0.0, 4.0, 9)
    bounds = bounds_in_force(carts(1), start(1.0, 0.3), times, 2.0, 0.5, 9.0, 9.0)
    after = times[1:] >= 2.0
    assert (bounds.max_curvature[0, after] == 0.0).all() and (bounds.max_curvature[0, ~after] == 0.8).all()
    assert (bounds.max_speed[0, after] == 0.5).all()


def test_reversing_faster_than_allowed_comes_back_too():
    limits = Limits(min_speed=-0.5, max_speed=1.0, max_acceleration=0.5, max_braking=1.0)
    state = start(-1.0, 0.0)
    bounds = bounds_in_force(carts(1, limits), state, np.array([0.0, 0.5, 1.0, 2.0]), 99.0, 0.0, 9.0, 9.0)
    assert state[0, SPEED_COMMAND] == -1.0
    assert bounds.min_speed[0] == pytest.approx([-0.75, -0.5, -0.5])


# Watched pairs


def test_the_gap_to_keep_is_the_sites_the_margin_and_what_can_happen_between_two_nodes():
    """0.85 m; for each robot 0.05 m and 0.02 s at 1.5 m/s; a pair that moves by 0.4 m, (0.4 m)^2 / (8 * 1.01 m)."""
    poses = np.zeros((2, 3, 3))
    poses[1, :, 1] = 3.0
    poses[1, :, 0] = [0.0, 0.4, 0.4]
    found = watch(carts(2), settings(), np.array([[0, 1]]), poses, 1.5)
    kept = 0.85 + 2 * (0.05 + 0.02 * 1.5)
    assert found.gaps[0] == pytest.approx([kept + 0.4**2 / (8 * kept), kept])
    assert found.normals[0] == pytest.approx(np.array([[0.0, 1.0]] * 2), abs=1e-9)  # over the stretch both share


def test_pairs_within_reach_are_watched_and_others_not():
    poses = np.repeat(abreast(4, 5.0)[:, None], 3, axis=1)
    pairs = choose_pairs(carts(4), settings(clearance={"reach": 4.0}), poses)
    assert pairs.tolist() == [[0, 1], [1, 2], [2, 3]]
    poses[3, 2, 1] = 6.0  # the last one comes to the first three in the end
    assert [1, 3] in choose_pairs(carts(4), settings(clearance={"reach": 4.0}), poses).tolist()
