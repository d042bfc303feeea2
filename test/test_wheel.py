# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The line turns as one about a pivot: rigid-body kinematics, limits, refusals, closed loop."""

import math

import attrs
import fleets
import numpy as np
import pytest
from fleets import LATE, LIMITS, abreast, carts, settings, solve
from sites import shown, site

from coord_planner.core import manoeuvre, reference
from coord_planner.core.graph import path
from coord_planner.core.manoeuvre import Wheel
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse


def task(wanted, poses, fleet=None, speed_now=0.0):
    fleet = fleet or carts(len(poses))
    return manoeuvre.work_out("round", wanted, fleet, settings(), np.array(poses), speed_now, path(fleet.names).hops())


@pytest.mark.parametrize("angle, pivot, about", [
    (90.0, "cart_1 3", (0.0, 8.0)), (-60.0, "cart_3 4.5", (0.0, -4.5)), (180.0, "0 11", (0.0, 11.0)),
    (240.0, "2 9", (2.0, 9.0)),  # ahead of the line: straight on until it is abreast
])
def test_everyone_ends_where_the_line_turned_about_the_pivot_lies(angle, pivot, about):
    """Chasles: a displacement of the plane that turns is a rotation about one point (common practice)."""
    made = task(Wheel(angle_deg=angle, pivot=pivot), abreast(3))
    turn = math.radians(angle)
    rotation = np.array([[math.cos(turn), -math.sin(turn)], [math.sin(turn), math.cos(turn)]])
    abreast_of_it = abreast(3)[:, :2] + [about[0], 0.0]
    assert made.ends[:, :2] == pytest.approx(np.array(about) + (abreast_of_it - about) @ rotation.T, abs=1e-9)
    assert made.ends[:, 2] == pytest.approx([turn] * 3)
    assert np.array([way.end for way in made.ways]) == pytest.approx(made.ends, abs=1e-6)


def test_ways_keep_heading_and_spacing_at_every_moment():
    made = task(Wheel(pivot="cart_1 3"), abreast(4))
    poses, speeds, curvatures = made.guess(np.linspace(0.0, made.arrival, 200))
    assert np.ptp(poses[:, :, 2], axis=0).max() < 0.03  # arcs of the easing are passed in steps
    gaps = np.linalg.norm(np.diff(poses[:, :, :2], axis=0), axis=2)
    assert gaps == pytest.approx(np.full_like(gaps, 2.5), abs=0.02)
    turning = (speeds * curvatures)[:, 60:140]
    assert turning == pytest.approx(np.repeat(turning[:1], 4, axis=0), rel=1e-6)  # one turn rate
    assert np.abs(curvatures).max() <= 0.9 * LIMITS.max_curvature


def test_speeds_asked_are_in_proportion_to_the_radii():
    made = task(Wheel(pivot="cart_1 6", speed=1.0), abreast(3))
    middle = made.asked_speed(np.array([made.arrival / 2, made.arrival / 2 + 0.1]))[:, 0]
    assert middle[2] == pytest.approx(1.0, abs=0.02)  # the time is a whole number of intervals
    assert middle / middle[2] == pytest.approx(np.array([6.0, 8.5, 11.0]) / 11.0, abs=0.01)


@pytest.mark.parametrize("limits, allowed", [
    (attrs.evolve(LIMITS, max_speed=0.8), 0.9 * 0.8),
    (attrs.evolve(LIMITS, max_turn_rate=0.05), 0.9 * 0.05 * 8.0),  # about 8 m from the pivot
    (attrs.evolve(LIMITS, max_lateral_acceleration=0.06), math.sqrt(0.9 * 0.06 * 8.0)),
])
def test_the_speed_is_one_that_the_outermost_can_hold(limits, allowed):
    """omega = v / r and a = v^2 / r (common practice), with a tenth left for corrections."""
    fleet = carts(2, limits)
    made = task(Wheel(pivot="cart_1 5.5", speed=0.75), abreast(2), fleet)
    assert made.speed == pytest.approx(min(allowed, 0.75), rel=0.05) and made.speed < 0.75
    assert f"cart_2 drives {made.speed:.2f} m/s" in made.note


def test_a_pivot_that_is_left_out_is_the_nearest_that_the_innermost_can_turn_about():
    made = task(Wheel(), abreast(3))
    tightest = max(abs(curvature) for curvature, _ in made.ways[0].segments)
    assert tightest == pytest.approx(0.9 * LIMITS.max_curvature, rel=0.02)
    assert made.speed == 1.0


@pytest.mark.parametrize("wanted, poses, words", [
    (Wheel(pivot="cart_1 1.3"), abreast(3), r"1\.30 m from cart_1, 0\.1\d m nearer .*smallest radius 1\.25 m"),
    (Wheel(pivot="cart_1 0"), abreast(3), r"cart_1 is to turn on the spot.* smallest radius is 1\.25 m"),
    (Wheel(pivot="0 4"), abreast(3), r"1\.00 m on the outer side of cart_1.*at least 2\.25 m inwards"),
    (Wheel(pivot="cart_3 3"), abreast(3), "innermost robot of this turn is cart_1"),
    (Wheel(pivot="-2 9"), abreast(3), r"2\.00 m behind the line"),
    (Wheel(), abreast(3) + [[0, 0, 0], [0, 0, 0.2], [0, 0, 0]], r"cart_2 is \d\.\d degrees off the mean"),
    (Wheel(), abreast(3) + [[0, 0, 0], [1.2, 0, 0], [0, 0, 0]], r"cart_2 stands 0\.80 m ahead of the line"),
])
def test_what_cannot_be_turned_is_refused_with_figures(wanted, poses, words):
    with pytest.raises(RefusedError, match=words):
        task(wanted, poses)


def test_a_machine_that_cannot_drive_slowly_is_no_innermost():
    fleet = carts(3, attrs.evolve(LIMITS, min_speed=0.1))
    with pytest.raises(RefusedError, match=r"cart_1 may have to drive as slowly as 0\.05 m/s, 0\.05 m/s below"):
        task(Wheel(pivot="cart_1 2.5"), abreast(3), fleet)


@pytest.mark.parametrize("pivot", ["one", "1 2 3", "cart_1 inf", "nan 3"])
def test_a_pivot_that_cannot_be_read_is_told(pivot):
    with pytest.raises(SettingsError, match="'X Y' or 'NAME METRES'"):
        Wheel(pivot=pivot).about()
    with pytest.raises(SettingsError, match="manoeuvres.round.pivot"):
        site(abreast(2), {"round": {"kind": "wheel", "pivot": pivot}})


def test_a_pivot_beside_nobody_is_told():
    with pytest.raises(SettingsError, match="'mower_9', which is not in robots.names"):
        site(abreast(2), {"round": {"kind": "wheel", "pivot": "mower_9 3"}})


@pytest.mark.parametrize("count, spacing, wanted", [
    (3, 2.5, Wheel(pivot="cart_1 2.5")), (5, 1.9, Wheel(angle_deg=-90.0)),
    (4, 4.0, Wheel(pivot="cart_1 5", end_speed=0.5)),
])
def test_the_plan_keeps_the_line(count, spacing, wanted):
    made = solve(wanted, carts(count, response=LATE), abreast(count, spacing), settings())
    states = made.states(np.linspace(0.0, made.end, 300))
    assert np.degrees(np.ptp(states[:, :, 2], axis=0).max()) <= 4.0
    gaps = np.linalg.norm(np.diff(states[:, :, :2], axis=0), axis=2)
    assert np.abs(gaps / spacing - 1).max() <= 0.10
    compared = reference.turn_speeds(made.task, np.ones((count, 1)) * np.arange(1, count + 1)[:, None])
    assert np.ptp(compared) == 0.0  # one speed for all: turn rates are compared


def test_a_wheel_turn_that_was_halted_keeps_the_line_when_it_goes_on():
    yard = fleets.Yard(carts(2, response=LATE), abreast(2), {"round": Wheel(angle_deg=60.0, pivot="cart_1 3")},
                       settings(horizon={"intervals": 12}))
    assert yard.begin("round").ok
    yard.run(4.0)
    yard.coordinator.halt(yard.now, "asked")
    yard.run_to(fleets.State.HELD)
    assert yard.resume().ok, yard.answers[-1].text
    yard.run_to(fleets.State.ENDED)
    track = np.stack([poses for _, poses in yard.track])
    assert np.degrees(np.ptp(track[:, :, 2], axis=1).max()) <= 4.0
    assert np.abs(np.linalg.norm(track[:, 1, :2] - track[:, 0, :2], axis=1) / 2.5 - 1).max() <= 0.10


@pytest.mark.parametrize("angle", [60.0, -60.0])
def test_a_wheel_turn_replaces_another_and_the_line_is_kept(angle):
    wheels = {"round": Wheel(pivot="cart_1 3"), "again": Wheel(angle_deg=angle)}
    yard = fleets.Yard(carts(2, response=LATE), abreast(2), wheels, settings(horizon={"intervals": 12}))
    assert yard.begin("round").ok
    yard.run(5.0)
    heading = yard.machines.poses()[0, 2]
    assert yard.begin("again").ok, yard.answers[-1].text
    yard.run_to(fleets.State.ENDED)
    track = np.stack([poses for _, poses in yard.track])
    assert np.degrees(np.ptp(track[:, :, 2], axis=1).max()) <= 4.0
    assert np.abs(np.linalg.norm(track[:, 1, :2] - track[:, 0, :2], axis=1) / 2.5 - 1).max() <= 0.10
    turned = np.degrees(yard.machines.poses()[0, 2] - heading)
    assert 0.0 < turned - angle < 30.0  # by the angle from where it took over, a second later
    assert max(yard.breaches().values()) < 1e-6


def test_robots_that_turn_each_round_its_own_centre_are_told_what_to_do_for_a_wheel_turn():
    """Abreast at first, they are in echelon half way."""
    bends, poses = np.full(3, 0.25), abreast(3) + [0.0, 0.0, 0.8]
    with pytest.raises(RefusedError, match=r"cart_\d stands 1\.\d\d m .* ask again after this turn, or form a line"):
        manoeuvre.work_out("round", Wheel(), carts(3), settings(), poses, 1.0, path(carts(3).names).hops(), bends)


def test_a_rehearsal_keeps_the_line():
    run = rehearse(site(abreast(3), {"round": {"kind": "wheel", "pivot": "mower_1 2.5"}},
                        horizon__intervals=12), "round", seed=2)
    figures, kept = summary(run), shown(run, 2.5)
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert kept["heading_deg"] <= 4.0 and kept["spacing"] <= 0.10
    assert max(figures["end_error_m"].values()) <= 0.10
    assert math.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0
