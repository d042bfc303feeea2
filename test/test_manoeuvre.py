# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is asked, worked out for the poses at hand: ends, windings, ways, times."""

import math

import attrs
import numpy as np
import pytest
from fleets import LATE, LIMITS, PROMPT, abreast, carts, settings

from coord_planner.core import manoeuvre
from coord_planner.core.dubins import ArcPath
from coord_planner.core.graph import NeighbourGraph, path
from coord_planner.core.manoeuvre import End, EqualRadius, ToEnds, eased_turn
from coord_planner.errors import RefusedError, SettingsError


def task(wanted, poses, fleet=None, chosen=None, edges=None):
    fleet = fleet or carts(len(poses))
    graph = path(fleet.names) if edges is None else NeighbourGraph(fleet.names, edges)
    return manoeuvre.work_out("turn", wanted, fleet, chosen or settings(), np.array(poses), 0.0, graph.hops())


def test_equal_radius_turns_each_about_a_centre_of_its_own():
    poses = abreast(3)
    poses[:, 2] = 0.3
    made = task(EqualRadius(angle_deg=-90.0, radius=4.0), poses)
    assert made.ends[:, 2] == pytest.approx([0.3 - math.pi / 2] * 3)
    moved = made.ends[:, :2] - poses[:, :2]
    assert moved == pytest.approx(np.repeat(moved[:1], 3, axis=0))
    # easing in and out makes the turn wider than its tightest radius, not tighter than asked
    assert np.hypot(*moved[0]) > 4.0 * math.sqrt(2.0)
    for way in made.ways:
        assert max(abs(curvature) for curvature, _ in way.segments) <= 1 / 4.0 + 1e-12


@pytest.mark.parametrize("start, end, winding", [
    (170.0, -170.0, 190.0),  # the short way round, over 180 degrees
    (-170.0, 170.0, -190.0),
    (350.0, 370.0, 370.0),
    (725.0, 10.0, 730.0),  # a heading that was already wound up twice
])
def test_the_winding_of_a_heading_is_the_nearest(start, end, winding):
    poses = abreast(1)
    poses[:, 2] = math.radians(start)
    made = task(ToEnds(ends_deg=(f"cart_1 heading {end}",)), poses)
    assert math.degrees(made.ends[0, 2]) == pytest.approx(winding)


def test_the_winding_of_a_pose_is_that_of_its_way():
    """Straight behind and looking the same way: a loop, to the left or to the right, never a heading that stays."""
    made = task(ToEnds(ends_deg=("cart_1 pose -6 0 0",)), [[0.0, 0.0, 0.0]])
    assert abs(made.ends[0, 2]) == pytest.approx(2 * math.pi)
    assert made.ways[0].end == pytest.approx((-6.0, 0.0, made.ends[0, 2]), abs=1e-9)


def test_who_has_no_end_copies_the_nearest_who_has_one():
    ends = ("cart_1 pose 6 13 90", "cart_4 pose 8 0 0")
    made = task(ToEnds(ends_deg=ends), abreast(5), edges=(
        ("cart_1", "cart_2", 1.0), ("cart_2", "cart_3", 1.0), ("cart_3", "cart_4", 1.0)))
    assert np.isnan(made.ends[[1, 2, 4]]).all()
    assert [made.ways[k].turning == pytest.approx(math.pi / 2) for k in range(5)] == [True, True, False, False, False]
    assert made.ways[4].turning == 0.0  # joined with nobody: straight on


def test_times_are_whole_intervals_and_machines_get_time_to_settle():
    prompt, late = (task(EqualRadius(radius=4.0), abreast(2), carts(2, response=answer)) for answer in (PROMPT, LATE))
    step = settings().horizon.interval
    for made in (prompt, late):
        for time in (made.arrival, made.duration):
            assert time / step == pytest.approx(round(time / step), abs=1e-9)
    # five of the slowest lag, 0.25 s, is 1.25 s; without lag one interval
    assert late.duration - late.arrival == pytest.approx(1.25)
    assert prompt.duration - prompt.arrival == pytest.approx(step)


def test_a_given_duration_is_kept_and_shorter_ways_are_driven_slower():
    made = task(ToEnds(ends_deg=("cart_1 pose 10 2.5 0", "cart_2 pose 5 0 0"), duration=20.0), abreast(2))
    assert made.arrival == 20.0
    assert made.asked[1] == pytest.approx(made.asked[0] / 2)
    s = np.linspace(0.0, made.arrival, 41)
    assert made.asked_speed(s).sum(axis=1) * 0.5 == pytest.approx([10.0, 5.0])  # the whole way, in the whole time


def test_no_duration_is_shorter_than_the_dubins_bound():
    """From (0, 0, 0) to (4, 4, pi) at radius 1: 7.613728608589 m (shared/checks.md section 4: Dubins 1957)."""
    fleet = carts(1, attrs.evolve(LIMITS, max_curvature=1.0))
    top, up, down = LIMITS.max_speed, LIMITS.max_acceleration, LIMITS.max_braking
    least = 7.613728608589 / top + top / (2 * up) + top / (2 * down)  # speeding up, holding, braking
    wanted = ToEnds(ends_deg=("cart_1 pose 4 4 180",))
    with pytest.raises(RefusedError, match=rf"7\.61 m at a radius of 1\.00 m, takes {least:.1f} s"):
        task(attrs.evolve(wanted, duration=least - 0.01), [[0.0, 0.0, 0.0]], fleet)
    assert task(attrs.evolve(wanted, duration=least + 0.01), [[0.0, 0.0, 0.0]], fleet).arrival >= least


def test_a_guess_begins_at_the_start_and_arrives_at_the_ends_in_time():
    poses = abreast(2)
    made = task(ToEnds(ends_deg=("cart_1 pose 6 8 90", "cart_2 pose 9 8 90")), poses)
    guessed, speeds, _ = made.guess(np.array([0.0, made.arrival, made.duration]))
    assert guessed[:, 0] == pytest.approx(poses) and guessed[:, 1] == pytest.approx(made.ends, abs=1e-6)
    assert guessed[:, 2] == pytest.approx(made.ends, abs=1e-6) and np.abs(speeds).max() < 1e-9


def test_a_manoeuvres_own_coupling_and_alignment_count():
    chosen = settings(coupling={"strength": 3.0, "alignment": 1.0})
    assert task(EqualRadius(), abreast(2), chosen=chosen).coupling == 3.0
    own = task(EqualRadius(coupling=0.0, alignment=2.0), abreast(2), chosen=chosen)
    assert (own.coupling, own.alignment) == (0.0, 2.0)


def test_a_turn_too_short_for_its_radius_stays_wider():
    way = eased_turn(0.1, 1.0, 0.2, np.zeros(3))
    assert way.turning == pytest.approx(0.1)
    assert max(curvature for curvature, _ in way.segments) == pytest.approx(math.sqrt(0.1 * 0.2))


def test_ways_are_wide_where_that_is_hardly_longer():
    made = task(ToEnds(ends_deg=("cart_1 pose 20 20 90",)), [[0.0, 0.0, 0.0]])
    tightest = max(abs(curvature) for curvature, _ in made.ways[0].segments)
    assert tightest <= LIMITS.max_curvature / 4 and made.ways[0].length < 1.12 * 39.0


def test_the_rest_of_a_task_keeps_its_ends_and_windings():
    made = task(ToEnds(ends_deg=("cart_1 pose -6 2.5 0", "cart_2 pose -6 0 0")), abreast(2))
    halfway = np.array([way.sample([way.length / 2])[0] for way in made.ways])
    hops = path(("cart_1", "cart_2")).hops()
    left = ArcPath(tuple(halfway[0]), "left", ((0.1, 3.0),))
    rest = manoeuvre.go_on(made, carts(2), settings(), halfway, hops, (left, None))
    assert rest.ends == pytest.approx(made.ends)
    assert rest.ways[0] is left and rest.ways[1].length == pytest.approx(made.ways[1].length / 2, rel=0.15)
    slower = rest.slower(2.0, settings())
    assert slower.arrival == pytest.approx(2 * rest.arrival, abs=0.25)
    s = np.linspace(0.0, slower.arrival, 100)
    assert slower.asked_speed(s).sum(axis=1) * s[1] == pytest.approx([way.length for way in rest.ways], rel=1e-6)


@pytest.mark.parametrize("entry", [
    "", "cart_1", "cart_1 pose 1 2", "cart_1 pose 1 2 x", "cart_1 heading nan", "cart_1 pose inf 0 0", "cart_1 face 9",
    "cart_1 pose 1 2 3 4",
])
def test_an_end_that_cannot_be_read_is_told_with_what_is_allowed(entry):
    with pytest.raises(SettingsError, match="HEADING_DEG"):
        ToEnds(ends_deg=(entry,)).ends()


def test_ends_are_read():
    read = ToEnds(ends_deg=("a pose 1 -2 90", "b heading -180")).ends()
    assert read == {"a": End(math.pi / 2, 1.0, -2.0), "b": End(-math.pi)}
    with pytest.raises(SettingsError, match="'a' has two ends"):
        ToEnds(ends_deg=("a heading 1", "a heading 2")).ends()
    assert attrs.evolve(ToEnds(ends_deg=("a heading 1",)), speed=0.5).speed == 0.5


@pytest.mark.parametrize("past, circles", [(0.02, False), (0.3, True)])
def test_who_stands_a_finger_past_its_end_is_there_and_drives_no_circle(past, circles):
    """Shortest forward ways jump there: 2 cm behind one is a full circle (Dubins 1957)."""
    made = task(ToEnds(ends_deg=("cart_1 pose 0 0 0", "cart_2 pose 9 3 0")), [[past, 0.0, 0.0], [0.0, 3.0, 0.0]])
    assert (made.ways[0].length > 2.0) == circles
    if not circles:
        assert made.ends[0] == pytest.approx([past, 0.0, 0.0])
