# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The plain controller that the comparison is held against: it follows, within limits, and lags from hop to hop."""

import numpy as np
import pytest
from fleets import abreast
from sites import site

from coord_planner.record.metrics import summary
from coord_planner.trial.faults import Fault
from coord_planner.trial.follower import follow

LED = {"kind": "to_ends", "ends_deg": ["mower_1 pose 4.5 10 60"]}


@pytest.fixture(scope="module")
def yard():
    quiet = {"simulation__pose_noise_xy": 0.0, "simulation__pose_noise_heading_deg": 0.0}
    return site(abreast(3, 4.0), {"led": LED}, **quiet)


def test_everyone_comes_to_the_neighbours_heading_one_after_the_other(yard):
    run = follow(yard, "led", seed=1)
    figures = summary(run)
    assert figures["completed"] and figures["limit_violations"] == 0
    assert np.degrees(list(figures["heading_change_rad"].values())) == pytest.approx([60.0] * 3, abs=8.0)
    onsets = list(figures["turn_onset_s"].values())
    assert onsets[0] < onsets[1] < onsets[2]  # each begins when its neighbour has begun
    assert figures["end_error_m"]["mower_1"] < 0.5


def test_it_is_struck_by_the_same_faults(yard):
    sound, slowed = (follow(yard, "led", seed=1, faults=faults) for faults in (
        (), (Fault("robot_slow", "mower_2", 1.0, 4.0, 0.3),)))
    driven = [float(np.sum(run.speeds[1, : int(5.0 / 0.05)]) * 0.05) for run in (sound, slowed)]
    assert driven[1] < 0.8 * driven[0]


def test_the_same_seed_is_the_same_run(yard):
    noisy = site(abreast(2, 4.0), {"led": LED})
    one, same, other = (follow(noisy, "led", seed=seed) for seed in (3, 3, 4))
    assert np.array_equal(one.poses, same.poses)
    assert not np.array_equal(one.poses[:, :100], other.poses[:, :100])
