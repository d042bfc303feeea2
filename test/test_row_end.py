# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Row ends: who goes into which row, turns that fit into the headland, who waits for whom, refusals, closed loop."""

import math

import attrs
import numpy as np
import pytest
import shapely
from fleets import LATE, LIMITS, Yard, abreast, carts, settings
from sites import site

from coord_planner.core import manoeuvre, outline, reference
from coord_planner.core.fence import Fencing
from coord_planner.core.fleet import Fleet, Footprint
from coord_planner.core.graph import path
from coord_planner.core.manoeuvre import RowEnd
from coord_planner.core.messages import State
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

REVERSING = attrs.evolve(LIMITS, min_speed=-0.8)
EASY = settings(site_rules={"min_clearance": 0.5})
# The rows run along x and end at x = 0; the middle of one of them is y = 0.
ROWS = RowEnd(end_x=0.0, end_y=0.0, heading_deg=0.0, depth=7.0, row_spacing=2.5, inside=1.0)


def in_rows(count, x=-1.0, spacing=2.5):
    poses = abreast(count, spacing)
    poses[:, 0] = x
    return poses


def task(wanted, poses, limits=LIMITS, chosen=EASY, fleet=None):
    fleet = fleet or carts(len(poses), limits, LATE)
    return manoeuvre.work_out("rows", wanted, fleet, chosen, np.array(poses), 0.0, path(fleet.names).hops())


def depth_reached(fleet, poses):
    """Largest x of any footprint along poses of shape (N, K, 3)."""
    return float(shapely.get_coordinates(outline.outlines(fleet.corners(), poses))[:, 0].max())


@pytest.mark.parametrize("changed, y", [
    ({"order": "same"}, [12.5, 10.0, 7.5]),  # three robots at 5.0, 2.5 and 0.0: each moves over by three rows
    ({"order": "mirrored"}, [7.5, 10.0, 12.5]),
    ({"order": "mirrored", "side": "right"}, [-7.5, -5.0, -2.5]),
    ({"order": "same", "side": "right", "skip_rows": 1}, [-5.0, -7.5, -10.0]),
    ({"order": "listed", "rows": ("cart_2 1", "cart_1 4", "cart_3 2")}, [15.0, 7.5, 10.0]),
])
def test_everyone_ends_in_its_next_row_looking_back(changed, y):
    made = task(attrs.evolve(ROWS, depth=9.0, **changed), in_rows(3))
    assert made.ends[:, 1] == pytest.approx(y) and made.ends[:, 0] == pytest.approx([-1.0] * 3)
    turned = math.pi if changed.get("side") != "right" else -math.pi
    assert made.ends[:, 2] == pytest.approx([turned] * 3)
    assert np.array([way.end for way in made.ways]) == pytest.approx(made.ends, abs=1e-6)


def test_rows_of_any_direction_and_noise_in_where_robots_stand():
    turn, off = math.radians(130.0), np.array([[0.1, -0.2, 0.05], [-0.3, 0.1, -0.04]])
    rotation = np.array([[math.cos(turn), -math.sin(turn)], [math.sin(turn), math.cos(turn)]])
    poses = in_rows(2, x=-2.0) + off
    poses[:, :2], poses[:, 2] = poses[:, :2] @ rotation.T + [5.0, 6.0], poses[:, 2] + turn
    made = task(attrs.evolve(ROWS, end_x=5.0, end_y=6.0, heading_deg=130.0 - 360.0), poses)
    straight = (made.ends[:, :2] - [5.0, 6.0]) @ rotation
    assert straight == pytest.approx(np.array([[-1.0, 7.5], [-1.0, 5.0]])) and made.ends[:, 2] == pytest.approx(
        [turn + math.pi] * 2)


def test_loops_where_the_headland_is_deep_and_changes_of_gear_where_it_is_not():
    wanted = attrs.evolve(ROWS, order="mirrored")
    deep, shallow = task(wanted, in_rows(1), REVERSING), task(attrs.evolve(wanted, depth=3.2), in_rows(1), REVERSING)
    assert deep.ways[0].word == "bulb" and not deep.reversing.any()
    assert shallow.ways[0].word == "three points" and shallow.reversing.all()
    lowest = task(attrs.evolve(wanted, depth=2.4), in_rows(1), REVERSING)
    assert lowest.ways[0].word == "five points"
    for made, depth in ((deep, 7.0), (shallow, 3.2), (lowest, 2.4)):
        s = np.linspace(0.0, made.duration, 800)
        assert depth_reached(carts(1), made.guess(s)[0]) < depth
        gears, speeds = made.gears(s), made.guess(s)[1]
        assert (gears * speeds >= -1e-9).all()


def test_robots_whose_ways_cross_set_out_one_after_the_other_and_copy_nobody():
    wanted = attrs.evolve(ROWS, order="mirrored")
    made = task(wanted, in_rows(3))
    assert made.waits.min() == 0.0 and made.waits.max() > 1.0 and not made.alike and made.coupling == 0.0
    late = int(np.argmax(made.waits))
    assert f"cart_{late + 1} sets out after {made.waits[late]:.0f} s" in made.note and "nobody copies" in made.note
    fleet, s = carts(3), np.linspace(0.0, made.duration, 400)
    polygons = outline.outlines(fleet.corners(), made.guess(s)[0])
    assert outline.closest(polygons, outline.all_pairs(3))[0] > 0.5 + 2 * 0.05
    together = task(attrs.evolve(ROWS, order="same"), in_rows(2))
    assert together.alike and together.coupling == EASY.coupling.strength and not together.waits.any()
    assert not together.note


def test_who_comes_along_moving_waits_in_its_row_where_there_is_room_to_stop():
    fleet, wanted = carts(3, LIMITS, LATE), attrs.evolve(ROWS, order="mirrored")
    made = manoeuvre.work_out("rows", wanted, fleet, EASY, in_rows(3, x=-4.0), 1.0, path(fleet.names).hops())
    late = int(np.argmax(made.waits))
    assert made.waits[late] > 2.0 and sorted(made.waits)[0] == 0.0
    s = np.linspace(0.0, made.arrival, 600)
    poses, speeds, _ = made.guess(s)
    assert speeds[:, 0] == pytest.approx([1.0] * 3, abs=0.02)
    stands = made.gears(s)[late] == 0
    assert np.abs(poses[late, stands, 0]).max() < 0.01  # where its row ends
    with pytest.raises(RefusedError, match="can wait only as long as it is in its row"):
        manoeuvre.work_out("rows", wanted, fleet, EASY, in_rows(3, x=-0.3), 1.0, path(fleet.names).hops())


def test_the_reference_stays_within_the_depth_that_the_guess_alone_would_leave():
    fleet, poses, wanted = carts(2, REVERSING, LATE), in_rows(2), attrs.evolve(ROWS, order="mirrored", depth=3.1)
    states = np.concatenate([poses, np.zeros((2, 4))], axis=1)
    made = reference.make(task(wanted, poses, REVERSING), fleet, path(fleet.names), EASY, states)
    assert 2.8 < depth_reached(fleet, made.plan.dense(4)) < 3.1
    assert made.clearance >= 0.5 and made.plan.missed[:, :3].max() < 5e-3
    speeds, gears = made.plan.states[:, :, 6], made.task.gears(made.plan.times)
    assert (speeds * gears >= -1e-6).all() and (np.abs(speeds[gears == 0]) < 1e-6).all() and speeds.min() < -0.1


LONG = attrs.evolve(carts(1, REVERSING, LATE).robots[0], footprint=Footprint(footprint_length=2.8, footprint_width=1.0))


@pytest.mark.parametrize("depth", [7.0, 4.5])
def test_a_long_machine_does_not_swing_over_the_edge_of_its_row(depth):
    fleet, wanted = Fleet((LONG,)), attrs.evolve(ROWS, order="mirrored", depth=depth)
    wide, narrow = (
        task(attrs.evolve(wanted, row_width=width), in_rows(1), fleet=fleet) for width in (0.0, 1.25)
    )
    first = [made.ways[0].segments[0] for made in (wide, narrow)]  # straight on, from 1 m inside the row
    assert first[0] == (0.0, pytest.approx(1.0)) and first[1][0] == 0.0 and first[1][1] > 1.3
    edges = Fencing(narrow.pieces)
    assert edges.least(fleet, wide.guess(np.linspace(0.0, wide.arrival, 800))[0])[0] < 0.0
    states = np.concatenate([in_rows(1), np.zeros((1, 4))], axis=1)
    made = reference.make(narrow, fleet, path(fleet.names), EASY, states)
    assert edges.least(fleet, made.plan.dense(4))[0] >= 0.0 and depth_reached(fleet, made.plan.dense(4)) <= depth


def test_a_row_is_not_wider_than_rows_are_apart():
    with pytest.raises(SettingsError, match="row_width: 3 m is wider than row_spacing; allowed: at most 2.5, or 0"):
        attrs.evolve(ROWS, row_width=3.0)


@pytest.mark.parametrize("changed, poses, limits, words", [
    ({"row_width": 1.4}, in_rows(2) + [0.0, 0.4, 0.0], LIMITS, r"cart_2 reaches 0\.10 m over the edge of its row"),
    ({"row_width": 0.9}, in_rows(2), LIMITS, r"cart_1 needs a row 1\.00 m wide, 0\.10 m more"),
    ({"depth": 3.0}, in_rows(1), LIMITS,
     r"cart_1 needs 4\.\d\d m of headland to turn into a row 2\.5 m away \(bulb\), 1\.\d\d m more than the 3 m"),
    ({"depth": 3.0}, in_rows(1), LIMITS, r"with changes of gear 2\.\d\d m would do.*does not let it reverse"),
    ({"depth": 1.5}, in_rows(1), REVERSING, r"with changes of gear 2\.\d\d m \(five points\), 0\.\d\d m more"),
    ({}, in_rows(2) + [0.0, 1.1, 0.0], LIMITS, r"cart_1 is 1\.10 m beside the middle of the nearest row, 0\.88 m"),
    ({}, in_rows(2) + [0.0, 0.0, 0.5], LIMITS, r"cart_1 looks 29 degrees away"),
    ({}, in_rows(2, spacing=0.4), LIMITS, r"apart"),
    ({"row_spacing": 5.0}, in_rows(2, spacing=1.6), LIMITS, r"cart_1 and cart_2 are in the same row"),
    ({"order": "listed", "rows": ("cart_1 1",)}, in_rows(2), LIMITS, r"not the fleet \(cart_2\)"),
    ({"row_spacing": 1.25, "order": "mirrored"}, in_rows(2), LIMITS, r"would end 0\.45 m apart, 0\.\d\d m short"),
])
def test_what_cannot_be_is_refused_with_figures(changed, poses, limits, words):
    wanted = attrs.evolve(ROWS, order=changed.get("order", "mirrored"), **{
        key: value for key, value in changed.items() if key != "order"})
    with pytest.raises(RefusedError, match=words):
        task(wanted, poses, limits)


@pytest.mark.parametrize("rows", [("cart_1",), ("cart_1 0",), ("cart_1 1.5",), ("cart_1 1", "cart_2 1"),
                                  ("cart_1 1", "cart_1 2")])
def test_rows_that_cannot_be_read_are_told(rows):
    with pytest.raises(SettingsError, match=r"'NAME ROW'|once"):
        attrs.evolve(ROWS, order="listed", rows=rows).listed()


SHALLOW = {"kind": "row_end", "end_x": 0.0, "end_y": 0.0, "heading_deg": 0.0, "row_spacing": 2.5, "inside": 2.0}


@pytest.mark.parametrize("count, spacing, robots, fields", [
    (2, 2.5, {}, {"order": "same", "depth": 4.0}),
    (2, 2.5, {"min_speed": -0.8}, {"order": "mirrored", "depth": 3.2}),
    (1, 3.0, {"min_speed": -0.5, "max_curvature": 0.6}, {"order": "mirrored", "side": "right", "depth": 3.6}),
], ids=["loops", "three points", "other radius and spacing"])
def test_a_row_end_is_turned_as_promised(count, spacing, robots, fields):
    fields = {**SHALLOW, "row_spacing": spacing, **fields}
    park = site(in_rows(count, -2.0, spacing), {"turn": fields},
                **{f"robot_defaults__{key}": value for key, value in robots.items()})
    run = rehearse(park, "turn", seed=2)
    figures = summary(run)
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert max(figures["end_error_m"].values()) <= 0.10
    assert np.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0
    assert count == 1 or figures["min_clearance_m"] >= park.settings.site_rules.min_clearance
    assert depth_reached(run.fleet, run.poses) <= fields["depth"]
    assert {warning["code"] for warning in figures["warnings"]} <= {"silence unsafe"}


def test_who_was_still_waiting_when_halted_waits_on_after_the_halt():
    wanted = attrs.evolve(ROWS, order="mirrored")
    yard = Yard(carts(2, LIMITS, LATE), in_rows(2), {"turn": wanted}, EASY)
    assert yard.begin("turn").ok
    waits = yard.coordinator.reference.task.waits
    late = int(np.argmax(waits))
    yard.run(waits[late] / 2)
    yard.coordinator.halt(yard.now, "a look")
    assert yard.run_to(State.HELD) is State.HELD
    assert yard.resume().ok
    left = yard.coordinator.reference.task.waits
    assert 0.0 < left[late] < waits[late] and left[1 - late] == 0.0
    assert yard.run_to(State.ENDED, longest=90.0) is State.ENDED
    off = yard.machines.poses() - yard.coordinator.ends
    assert np.abs(off).max() < 0.1
    gaps = [
        outline.closest(outline.outlines(yard.fleet.corners(), poses[:, None]), outline.all_pairs(2))[0]
        for _, poses in yard.track
    ]
    assert min(gaps) >= 0.5
