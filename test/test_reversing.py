# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Driving backward: schedules of gears, bounds, the gate, ticks, closed loop with both kinds of drive."""

import math

import attrs
import numpy as np
import pytest
from fleets import LATE, LIMITS, Yard, abreast, carts, settings
from hypothesis import given
from hypothesis import strategies as st
from sites import site

from coord_planner.core import gate, manoeuvre, reeds_shepp, reference, tick
from coord_planner.core.fleet import Limits
from coord_planner.core.graph import path
from coord_planner.core.history import CommandHistory
from coord_planner.core.manoeuvre import EqualRadius, ToEnds
from coord_planner.core.messages import State
from coord_planner.core.problem import POSE, SPEED_COMMAND, bounds_in_force
from coord_planner.core.settings import SiteRules
from coord_planner.errors import RefusedError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

BOTH_WAYS = attrs.evolve(LIMITS, min_speed=-0.8)
BACK_OUT = ToEnds(ends_deg=("cart_1 pose -3.0 0.5 90",), reverse=True)  # one change of gear


def task(wanted, poses, limits=BOTH_WAYS, speed_now=0.0):
    fleet = carts(len(poses), limits, LATE)
    return manoeuvre.work_out("back", wanted, fleet, settings(), np.array(poses), speed_now, path(fleet.names).hops())


def made(wanted, poses, limits=BOTH_WAYS):
    fleet = carts(len(poses), limits, LATE)
    states = np.concatenate([poses, np.zeros((len(poses), 4))], axis=1)
    return reference.make(task(wanted, poses, limits), fleet, path(fleet.names), settings(), states)


def test_who_may_not_reverse_or_is_not_asked_to_drives_forward():
    origin = abreast(1)
    assert task(BACK_OUT, origin).reversing.all()
    assert not task(attrs.evolve(BACK_OUT, reverse=False), origin).reversing.any()
    assert not task(BACK_OUT, origin, LIMITS).reversing.any()
    ahead = attrs.evolve(BACK_OUT, ends_deg=("cart_1 pose 9 1 0",))
    assert not task(ahead, origin).reversing.any()  # forward is quicker


def test_the_schedule_of_gears_is_that_of_the_reeds_shepp_word():
    wanted = task(BACK_OUT, abreast(1))
    gears = wanted.gears(np.linspace(0.0, wanted.arrival, 400))[0]
    driven = gears[gears != 0]
    runs = driven[np.flatnonzero(np.diff(driven, prepend=0))]
    assert tuple(runs) == reeds_shepp.shortest((0.0, 0.0, 0.0), (-3.0, 0.5, math.pi / 2), 1.1 / 0.8).gears
    assert wanted.directions(0.1).tolist() == [-1] and wanted.directions(wanted.arrival).tolist() == [1]


def test_all_arrive_together_whoever_changes_gear():
    ends = ("cart_1 pose -3.0 3.0 90", "cart_2 pose 6 0 0")
    wanted = task(attrs.evolve(BACK_OUT, ends_deg=ends), abreast(2))
    assert wanted.reversing.tolist() == [True, False]
    assert wanted.drives[1].duration == pytest.approx(wanted.drives[0].duration, abs=1e-3)


@pytest.mark.parametrize("ends, limits, end_speed, words", [
    ("cart_1 pose -4 0 0", attrs.evolve(BOTH_WAYS, min_speed=-0.8), 0.4, "ends in reverse, and 0.4 m/s is asked"),
])
def test_an_end_in_reverse_is_an_end_at_standstill(ends, limits, end_speed, words):
    wanted = ToEnds(ends_deg=(ends,), reverse=True, end_speed=end_speed)
    with pytest.raises(RefusedError, match=words):
        task(wanted, abreast(1), limits)


def test_the_way_is_no_shorter_than_the_bound_and_hardly_longer_than_its_word_eased():
    """No path of that radius is shorter than that of Reeds & Shepp 1990; only where steering is quick is it near."""
    quick = attrs.evolve(BOTH_WAYS, max_curvature_rate=20.0)
    for ends in ("cart_1 pose -3.0 0.5 90", "cart_1 pose -5 1 20", "cart_1 pose 0 0 180"):
        plan = made(ToEnds(ends_deg=(ends,), reverse=True), abreast(1), quick).plan
        dense = plan.dense(9)[0]
        driven = float(np.hypot(*np.diff(dense[:, :2], axis=0).T).sum())
        x, y, heading = map(float, ends.split()[2:])
        bound = reeds_shepp.shortest((0.0, 0.0, 0.0), (x, y, math.radians(heading)), 1.0 / quick.max_curvature).length
        assert bound * (1 - 1e-3) <= driven <= 1.6 * bound


def test_a_plan_keeps_to_its_gears_and_to_each_rate_in_each_of_them():
    plan = made(BACK_OUT, abreast(1))
    gears, speed = plan.task.gears(plan.plan.times)[0], plan.plan.states[0, :, SPEED_COMMAND]
    assert (gears * speed >= -1e-6).all() and np.abs(speed[gears == 0]).max() < 1e-6
    assert (gears == 0).sum() >= 2 and speed.min() < -0.3 and speed.max() > 0.3
    size, step = np.abs(speed), np.diff(plan.plan.times)
    assert (np.diff(size) <= LIMITS.max_acceleration * step + 1e-6).all()
    assert (np.diff(size) >= -LIMITS.max_braking * step - 1e-6).all()


@given(speed=st.floats(-1.2, 1.2), first=st.integers(-1, 1), then=st.integers(-1, 1), change=st.integers(0, 12))
def test_from_any_speed_braking_keeps_the_bounds_of_any_gears(speed, first, then, change):
    limits = Limits(min_speed=-0.6, max_speed=1.0, max_acceleration=0.5, max_braking=1.0)
    times, state = 0.25 * np.arange(13), np.zeros((1, 7))
    state[0, [4, 6]] = speed
    gears = np.where(np.arange(12) < change, first, then)[None]
    bounds = bounds_in_force(carts(1, limits), state, times, 99.0, 0.0, 9.0, 9.0, gears=gears)
    slowest = np.sign(speed) * np.maximum(abs(speed) - 1.0 * times[1:], 0.0)
    assert (slowest >= bounds.min_speed[0] - 1e-9).all() and (slowest <= bounds.max_speed[0] + 1e-9).all()
    late = times[1:] > 1.25  # back inside by then
    assert (bounds.max_speed[0][late & (gears[0] <= 0)] == 0.0).all()
    assert (bounds.min_speed[0][late & (gears[0] >= 0)] == 0.0).all()
    assert (bounds.min_speed[0][late & (gears[0] < 0)] == -0.6).all()


def test_the_gate_sends_nobody_the_other_way_before_it_stands():
    fleet, rules, history = carts(1, BOTH_WAYS, LATE), SiteRules(), CommandHistory(np.array([0.1]), 0.05)
    rest, sent, last = np.array([3 * LATE.speed_lag]), [], np.array([[0.3, 0.2]])
    history.add(0.0, last)
    for now in np.arange(0.05, 4.0, 0.05):
        last, _ = gate.allow(np.array([[-0.5, 0.2]]), last, 0.05, fleet, rules, rolling=history.rolling(now, rest))
        history.add(now, last)
        sent.append(last[0, 0])
    speeds = np.array(sent)
    standing = 0.05 * (int((speeds == 0.0).sum()) + 1)  # from the last command ahead to the first one back
    assert (np.diff(speeds) <= 1e-12).all() and speeds[-1] == pytest.approx(-0.5)
    assert rest[0] - 1e-9 <= standing <= rest[0] + 0.15
    again, _ = gate.allow(np.array([[0.5, 0.2]]), last, 0.05, fleet, rules)  # the last command alone tells it too
    assert -0.5 < again[0, 0] <= 0.0


@pytest.mark.parametrize("behind, asked", [(0.45, -0.5 - 0.4 / 1.5), (-0.45, -0.5 + 0.4 / 1.5), (0.04, -0.5)])
def test_who_is_behind_while_reversing_is_asked_to_reverse_faster(behind, asked):
    """A dead band of 0.05 m, then 1.5 s to catch up (the defaults)."""
    s = np.arange(5) * 0.25
    wanted = attrs.evolve(task(BACK_OUT, abreast(1)), arrival=99.0)
    speeds = tick._closing_up(
        s, s, np.full((1, 4), -0.5), np.array([behind]), wanted, np.full((1, 4), -1), np.full((1, 4), 0.8), settings())
    assert speeds == pytest.approx(np.full((1, 4), asked))
    standing = tick._closing_up(
        s, s, np.zeros((1, 4)), np.array([behind]), wanted, np.zeros((1, 4)), np.full((1, 4), 0.8), settings())
    assert not standing.any()


CAR = {
    "drive": "car_like", "reference_point": "rear_axle", "wheelbase": 1.4, "max_steering_angle_deg": 32.0,
    "max_steering_rate_deg": 20.0, "max_curvature": 0.4, "max_curvature_rate": 0.2, "footprint_length": 2.2,
    "footprint_offset_x": 0.6,
}


@pytest.mark.parametrize("robots, ends", [
    ({"min_speed": -0.8}, "mower_1 pose -3.0 0.5 90"), ({"min_speed": -0.6, **CAR}, "mower_1 pose -3 2 90"),
], ids=["differential", "car-like"])
def test_it_backs_out_as_promised_and_changes_direction_only_at_standstill(robots, ends):
    fields = {"kind": "to_ends", "ends_deg": [ends], "reverse": True}
    run = rehearse(site(abreast(1), {"back": fields}, **{f"robot_defaults__{k}": v for k, v in robots.items()}), "back")
    figures = summary(run)
    assert figures["completed"] and figures["limit_violations"] == 0 and not figures["warnings"]
    assert max(figures["end_error_m"].values()) <= 0.10
    assert np.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0
    speed = run.speeds[0]
    assert speed.min() < -0.3 and speed.max() > 0.2
    way = np.sign(np.where(np.abs(speed) > 0.02, speed, 0.0))
    for turned in np.flatnonzero(np.diff(way[way != 0.0])):
        here = np.flatnonzero(way != 0.0)[turned:turned + 2]
        assert (run.times[here[1]] - run.times[here[0]]) >= 0.2  # slower than 2 cm/s for so long
    command = run.commanded[0, :, 0]
    sign = np.sign(command[command != 0.0])
    at = np.flatnonzero(command != 0.0)
    for turned in np.flatnonzero(np.diff(sign)):
        assert run.command_times[at[turned + 1]] - run.command_times[at[turned]] >= 0.75  # three lags of 0.25 s


def test_halted_while_it_reverses_it_goes_on_backward_and_arrives():
    horizon = {"intervals": 16}
    yard = Yard(carts(1, BOTH_WAYS, LATE), abreast(1), {"back": BACK_OUT, "turn": EqualRadius()},
                settings(horizon=horizon))
    assert yard.begin("back").ok
    while yard.machines.speeds()[0] > -0.3:
        yard.run(0.1)
    refused = yard.begin("turn")
    assert not refused.ok and "cart_1 will be driving backward" in refused.text
    yard.coordinator.halt(yard.now, "a look")
    assert yard.run_to(State.HELD) is State.HELD and yard.standing()
    assert yard.resume().ok and yard.coordinator.reference.task.drives[0].gears[0] == -1
    assert yard.run_to(State.ENDED) is State.ENDED
    off = yard.machines.poses()[0] - yard.coordinator.ends[0]
    assert np.hypot(*off[:2]) < 0.1 and abs(off[2]) < math.radians(3.0)
    assert max(yard.breaches().values()) < 1e-6
    assert (np.abs(np.diff([values[0, 0] for _, values in yard.sent])) < 0.06).all()


def test_a_schedule_with_standstills_is_slowed_and_stretched_without_losing_its_gears():
    wanted = task(BACK_OUT, abreast(1))
    slower = wanted.slower(2.0, settings())
    s = np.linspace(0.0, wanted.arrival, 300)
    same = slower.gears(s * slower.arrival / wanted.arrival)
    assert (same == wanted.gears(s)).mean() > 0.98
    along = slower.asked_speed(np.linspace(0.0, slower.arrival, 200)).sum() * slower.arrival / 199
    assert along == pytest.approx(float(wanted.drives[0].advance(np.array([99.0]))[0]), rel=1e-6)
    assert wanted.guess(np.array([0.0]))[0][0, 0, POSE] == pytest.approx(abreast(1)[0])
