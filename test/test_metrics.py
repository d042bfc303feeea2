# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The figures of a run, against cases whose figures can be worked out by hand."""

import itertools
import json
import math

import attrs
import numpy as np
import pytest
import shapely
from made_up_run import LIMITS, standing, turn
from shapely.affinity import rotate, translate

from coord_planner.core.fleet import Fleet, Footprint, Limits, Robot
from coord_planner.record.adherence import outside_limits, too_fast, violations
from coord_planner.record.metrics import summary, turn_onsets
from coord_planner.record.nearness import nearness

KEYS = ["completed", "state", "duration_s", "contacts", "min_clearance_m", "limit_violations", "heading_spread_max_rad",
        "curvature_spread_max_per_m", "turn_onset_s", "heading_change_rad", "end_error_m", "end_heading_error_rad",
        "warnings", "tick_ms", "real_time_factor"]


def test_summary_has_the_promised_keys_and_is_strict_json():
    run = turn(slowed="mower_3")
    figures = summary(run)
    assert list(figures) == KEYS
    assert json.loads(json.dumps(figures, allow_nan=False)) == figures
    assert figures["duration_s"] == pytest.approx(15.0)
    assert figures["real_time_factor"] == pytest.approx((16.0 - 0.05) / 1.5)
    assert figures["tick_ms"] == pytest.approx({"median": 20.0, "p99": 29.8, "max": 30.0})
    assert figures["end_error_m"]["mower_4"] == pytest.approx(0.05)
    assert figures["end_heading_error_rad"]["mower_4"] == pytest.approx(0.01)
    assert figures["warnings"][0] | {"text": ""} == {
        "code": "robot not following", "robot": "mower_3", "first_s": pytest.approx(6.2),
        "last_s": pytest.approx(9.3), "text": "",
    }


def test_figures_that_do_not_exist_are_null():
    figures = summary(standing([[0.0, 0.0, 0.0]], count=3, began=math.nan, ended=math.nan, completed=False))
    assert json.dumps(figures, allow_nan=False)
    assert [figures[key] for key in ("duration_s", "min_clearance_m", "heading_spread_max_rad")] == [None] * 3
    assert figures["end_error_m"] == figures["heading_change_rad"] == figures["turn_onset_s"] == {"r0": None}
    assert figures["tick_ms"] == {"median": None, "p99": None, "max": None}


def test_an_end_that_is_only_a_heading_has_only_a_heading_error():
    ends = np.array([[math.nan, math.nan, 2 * math.pi + 0.2], [math.nan] * 3])
    figures = summary(standing([[0, 0, 0.1], [0, 5, 0]], count=2, end_poses=ends))
    assert figures["end_error_m"] == {"r0": None, "r1": None}
    assert figures["end_heading_error_rad"] == {"r0": pytest.approx(0.1), "r1": None}


def test_clearance_is_the_smallest_distance_of_any_pair():
    """Against shapely's own rotate and translate and every pair, without the circles that save work."""
    rng = np.random.default_rng(2)
    sizes = rng.uniform(0.5, 3.0, (5, 2))
    fleet = Fleet(tuple(Robot(f"r{n}", footprint=Footprint(*size, 0.4, -0.1)) for n, size in enumerate(sizes)))
    poses = rng.uniform(-6, 6, (5, 40, 3))
    run = standing(poses[:, 0], count=40, fleet=fleet, poses=poses)
    near = nearness(run)

    def shape(robot, sample):
        x, y, heading = poses[robot, sample]
        polygon = shapely.Polygon(fleet.robots[robot].footprint.corners())
        return translate(rotate(polygon, heading, origin=(0, 0), use_radians=True), x, y)

    for sample in range(40):
        each = {(a, b): shape(a, sample).distance(shape(b, sample)) for a, b in itertools.combinations(range(5), 2)}
        assert near.clearance[sample] == pytest.approx(min(each.values()), abs=1e-12)
        assert each[tuple(near.pair[sample])] == pytest.approx(near.clearance[sample], abs=1e-12)


def test_contacts_are_stretches_of_time_pair_by_pair():
    """Robot 1 passes through robots 0 and 2, away, and through both again."""
    x = np.concatenate([np.linspace(-5, 5, 101), np.linspace(5, -5, 101)])
    poses = np.zeros((3, len(x), 3))
    poses[1, :, 0] = x
    poses[0, :, 0], poses[2, :, 0] = -2.0, 2.0
    near = nearness(standing(poses[:, 0], count=len(x), poses=poses))
    assert near.contacts == 4
    assert near.smallest == 0.0


def test_a_robot_whose_pose_is_unknown_is_left_out():
    near = nearness(standing([[0, 0, 0], [0, 2, 0], [math.nan] * 3], count=2))
    assert near.clearance == pytest.approx([1.2, 1.2])
    assert near.contacts == 0


def test_heading_changes_and_spread_are_since_the_beginning():
    poses = np.zeros((2, 11, 3))
    poses[:, :, 2] = [[1.0], [-2.0]] + np.array([[0.1], [0.25]]) * np.arange(11)
    poses[1, :, 1] = 9.0
    curvatures = np.array([[0.1] * 11, [-0.3] * 11])
    figures = summary(standing(poses[:, 0], count=11, poses=poses, began=0.1, curvatures=curvatures))
    assert figures["heading_change_rad"] == pytest.approx({"r0": 0.8, "r1": 2.0})
    assert figures["heading_spread_max_rad"] == pytest.approx(1.2)
    assert figures["curvature_spread_max_per_m"] == pytest.approx(0.4)


def test_turn_onset_is_where_a_tenth_of_the_largest_turn_rate_is_passed():
    """A ramp from 0 at 1 s to 0.5 rad/s at 3 s passes a tenth at 1.2 s; with noise where it stands above that."""
    times = np.arange(0, 5, 0.02)
    rate = np.stack([np.interp(times, [1, 3], [0, -0.5]), np.zeros_like(times)])
    quiet = standing(np.zeros((2, 3)), times=times, ended=5.0, speeds=np.ones_like(rate), curvatures=rate)
    assert turn_onsets(quiet) == pytest.approx([1.2, math.nan], abs=1e-9, nan_ok=True)
    noisy = attrs.evolve(quiet, curvatures=rate + np.random.default_rng(0).normal(0, 0.02, rate.shape))
    onset = turn_onsets(noisy)
    assert 1.25 < onset[0] < 1.6  # five deviations, 0.1 rad/s, are passed at 1.4 s
    assert math.isnan(onset[1])


def test_an_obedient_record_breaks_no_limit():
    run = turn(slowed="mower_3")
    assert not outside_limits(run).any()
    assert violations(run) == 0


BROKEN = {
    "curvature, standing": (5, (0.0, 0.6)),
    "speed": (150, (1.6, 0.0)),
    "reversing": (2, (-0.01, 0.0)),
    "not a number": (150, (1.0, math.nan)),
}


@pytest.mark.parametrize(("at", "command"), BROKEN.values(), ids=BROKEN.keys())
def test_a_command_outside_a_limit_is_counted(at, command):
    run = turn(count=2)
    commanded = run.commanded.copy()
    commanded[1, at] = command
    out = outside_limits(attrs.evolve(run, commanded=commanded))
    assert out[1, at] and not out[0].any() and not np.delete(out[1], [at, at + 1]).any()


@pytest.mark.parametrize(("limits", "broken"), [
    ({"max_turn_rate": 0.2}, True), ({"max_turn_rate": 0.26}, False),
    ({"max_lateral_acceleration": 0.2}, True), ({"max_lateral_acceleration": 0.26}, False),  # v^2 kappa = 0.25
    ({"max_acceleration": 0.45}, True), ({"max_acceleration": 0.46}, False),  # 1 m/s in 2.2 s = 0.4545
    ({"max_braking": 0.45}, True), ({"max_braking": 0.46}, False),
    ({"max_curvature_rate": 0.12}, True), ({"max_curvature_rate": 0.13}, False),  # 1/4 1/m in 2 s = 0.125
])
def test_each_limit_is_checked_at_its_value(limits, broken):
    run = turn(count=1)
    fleet = Fleet((Robot("mower_1", attrs.evolve(LIMITS, **limits)),))
    assert bool(violations(attrs.evolve(run, fleet=fleet))) == broken


def test_rates_are_judged_by_the_time_that_truly_passed():
    """0.5 m/s^2 for 0.1 s is 0.05 m/s; the same step in 0.05 s is twice what is allowed."""
    fleet = Fleet((Robot("r0", Limits(max_acceleration=0.5, max_braking=1.0, min_speed=-1.0)),))
    speeds = np.array([0.0, 0.05, 0.10, 0.15, 0.02, -0.02])
    times = np.array([0.0, 0.1, 0.15, 0.25, 0.38, 0.44])  # the last: 0.02 s of braking and 0.04 s of speeding up
    commanded = np.stack([speeds, np.zeros(6)], axis=1)[None]
    run = standing([[0, 0, 0]], count=2, fleet=fleet, command_times=times, commanded=commanded)
    assert outside_limits(run)[0].tolist() == [False, False, True, False, False, False]
    sooner = attrs.evolve(run, command_times=times - np.array([0, 0, 0, 0, 0, 0.001]))
    assert outside_limits(sooner)[0].tolist() == [False, False, True, False, False, True]


def test_the_first_command_and_one_after_a_silence_start_from_what_the_machine_does():
    times = np.array([0.0, 0.1, 0.2, 5.0, 5.1])
    speeds = np.array([0.05, 0.1, 0.15, 0.6, 0.6])
    run = standing([[0, 0, 0]], count=200, command_times=times, commanded=np.stack([speeds, np.zeros(5)], axis=1)[None])
    assert outside_limits(run)[0].tolist() == [False, False, False, True, False]  # from standing, not from 0.15 m/s


def test_true_speed_outside_its_range_is_counted_once_a_stretch():
    speeds = np.full((1, 20), 1.0)
    speeds[0, 3:6] = 1.6
    speeds[0, 12] = -0.1
    run = standing([[0, 0, 0]], count=20, speeds=speeds)
    assert too_fast(run).tolist() == [2]
    assert summary(run)["limit_violations"] == 2
