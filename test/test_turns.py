# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Turns in turn rates of which everything is known."""

import math

import numpy as np
import pytest

from coord_planner.record import turns
from coord_planner.record.turns import Onset

TIMES = np.arange(0.0, 60.0, 0.05)


def bump(begins, *, height=0.25, ramp=1.0, hold=5.0):
    return height * np.interp(TIMES, begins + np.array([0.0, ramp, ramp + hold, 2 * ramp + hold]), [0.0, 1.0, 1.0, 0.0])


def test_onset_is_where_a_tenth_is_passed_between_samples():
    found = turns.onset(TIMES, bump(10.02))
    assert found.time == pytest.approx(10.02 + 0.1, abs=1e-9)  # a tenth of a linear ramp of 1 s
    assert found.peak == pytest.approx(0.25)
    assert found.sd == pytest.approx(0.05 / math.sqrt(12.0), rel=1e-3)  # of a value known to within a sample


def test_onset_waits_for_the_noise_and_its_deviation_covers_the_error():
    errors = []
    for seed in range(40):
        noisy = bump(10.0, ramp=4.0) + np.random.default_rng(seed).normal(0.0, 0.004, len(TIMES))
        found = turns.onset(TIMES, noisy)
        assert found.threshold >= 5.0 * 0.003
        errors.append((found.time - 10.4) / found.sd)
    assert 0.5 < np.std(errors) < 2.0


def test_who_goes_straight_has_no_onset():
    assert turns.onset(TIMES, np.random.default_rng(1).normal(0.0, 0.01, len(TIMES)), sd=0.01) is None
    assert turns.onset(TIMES, np.full(len(TIMES), np.nan)) is None


def test_each_robot_turns_once_in_a_turn():
    moving = np.ones((2, len(TIMES)))
    rates = np.stack([bump(5.0) + bump(30.0), bump(7.0) + bump(33.0)])
    first, second = turns.find(TIMES, rates, moving, [0.0, 0.0])
    assert first.robots == second.robots == (0, 1)
    assert first.from_s < 5.1 and 14.0 < first.to_s < second.from_s < 30.1
    # one after the other at the same place is one turn, one after the other's is over by far are two
    assert len(turns.find(TIMES, np.stack([bump(5.0), bump(12.5)]), moving, [0.0, 0.0])) == 1
    assert len(turns.find(TIMES, np.stack([bump(5.0), bump(25.0)]), moving, [0.0, 0.0])) == 2


def test_a_turn_reaches_to_the_standstills_beside_it_but_not_to_far_ones():
    speeds = np.where((TIMES > 3.0) & (TIMES < 40.0), 1.0, 0.0)[None]
    (span,) = turns.find(TIMES, bump(6.0)[None], speeds, [0.0])
    assert span.from_s == pytest.approx(3.0, abs=0.06)  # it set out 3 s before
    assert span.to_s == pytest.approx(14.0, abs=0.2)  # it drove on for long after: a second beyond the turning


def test_wobbling_is_no_turn():
    wobble = 0.03 * np.sin(2 * np.pi * TIMES / 3.0)
    assert turns.find(TIMES, wobble[None], np.ones((1, len(TIMES))), [0.0]) == []


def onsets(times, sd):
    return [Onset(time, sd, 0.02, 0.25, 0.001) for time in times]


def test_speed_of_spreading_only_where_onsets_differ_by_more_than_the_noise():
    hops = np.arange(6.0)
    found = turns.spread(hops, onsets(1.0 + 0.2 * hops, 0.02))
    assert found.sure and found.delay == pytest.approx(0.2) and found.speed == pytest.approx(5.0)
    assert found.delay_sd == pytest.approx(0.02 / math.sqrt(17.5))  # least squares: sd / sqrt(sum of squared distances)
    assert not turns.spread(hops, onsets(1.0 + 0.002 * hops, 0.02)).sure
    assert not turns.spread(hops, onsets(2.0 - 0.2 * hops, 0.02)).sure  # the farthest first: nothing spread from here
    assert turns.spread(np.zeros(6), onsets(np.ones(6), 0.02)) is None


def test_noise_alone_is_hardly_ever_taken_for_spreading():
    rng, hops = np.random.default_rng(0), np.arange(6.0)
    sure = [turns.spread(hops, onsets(rng.normal(1.0, 0.02, 6), 0.02)).sure for _ in range(400)]
    assert np.mean(sure) < 0.05
