# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Keep-outs and areas with a speed cap: read, planned round or slowed for, warned of, judged and shown."""

import attrs
import fleets
import numpy as np
import pytest
import shapely
from fleets import LATE, abreast, carts, settings
from made_up_run import standing

from coord_planner import config
from coord_planner.core import gate, manoeuvre, outline, reference
from coord_planner.core import graph as graphs
from coord_planner.core.area import area_of
from coord_planner.core.caps import caps
from coord_planner.core.manoeuvre import ToEnds
from coord_planner.core.messages import Level, State
from coord_planner.core.settings import SiteRules, SpeedCap
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.record import areas
from coord_planner.record.marks import marks
from coord_planner.record.page import data
from coord_planner.record.picture import picture

POND = area_of("pond", (6, 1.0, 8, 1.0, 8, 4, 6, 4))
YARD = area_of("yard", (6, -2, 9, -2, 9, 5, 6, 5, 6, 4, 8, 4, 8, 0, 6, 0))  # open to where the robots come from
RING = area_of("ring", (-3, -3, 3, -3, 3, 3, 0.1, 3, 0.1, 2, 2, 2, 2, -2, -2, -2, -2, 2, 0, 2, 0, 3, -3, 3))
SITE = {
    "robots.names": ["a"], "site_rules.keep_outs.names": ["pond"], "site_rules.speed_caps.names": ["gate"],
    "site_rules.keep_outs.pond.corners": [0.0, 0, 4, 0, 4, 1, 1, 1, 1, 3, 0, 3],
    "site_rules.speed_caps.gate.corners": [9.0, 0, 10, 0, 10, 1], "site_rules.speed_caps.gate.max_speed": 0.5,
}


def straight(count, length=16):
    return ToEnds(ends_deg=tuple(f"cart_{k + 1} pose {length} {2.5 * (count - 1 - k)} 0" for k in range(count)))


def planned(wanted, count, keep_outs=(), capped=()):
    chosen, fleet = settings(site_rules={"keep_outs": keep_outs, "speed_caps": capped}), carts(count, response=LATE)
    return fleets.solve(wanted, fleet, abreast(count), chosen)


def yard(count, keep_outs=(), capped=(), wanted=None):
    rules = {"keep_outs": keep_outs, "speed_caps": capped}
    return fleets.Yard(
        carts(count, response=LATE), abreast(count), {"go": wanted or straight(count)},
        settings(site_rules=rules, horizon={"intervals": 12}), pose_noise_xy=0.02, pose_noise_heading_deg=0.5, seed=3,
    )


def exact(fleet, poses, area):
    return float(shapely.distance(outline.outlines(fleet.corners(), poses), area.polygon).min())


# What is read


def test_areas_are_read_from_names_and_flat_lists():
    rules = config.from_parameters(SITE).settings.site_rules
    assert [area.name for area in rules.keep_outs] == ["pond"] and len(rules.keep_outs[0].pieces) == 2
    assert rules.speed_caps == (SpeedCap(area_of("gate", (9, 0, 10, 0, 10, 1)), 0.5),)
    kinds = {item.key: item.kind for item in config.declarations(SITE)}
    assert kinds["site_rules.keep_outs.pond.corners"] == "floats" and kinds["site_rules.keep_outs.names"] == "strs"


@pytest.mark.parametrize("changes, words", [
    ({"site_rules.keep_outs.pond.corners": [0.0, 0, 2, 2, 2, 0, 0, 2]}, "pond crosses or touches itself"),
    ({"site_rules.keep_outs.pond.corners": [0.0, 0, 2]}, "3 numbers"),
    ({"site_rules.keep_outs.pond.corners": [0.0, 0, 1, 1, 2, 2]}, "one line"),
    ({"site_rules.keep_outs.pond.corners": None}, "has to be given"),
    ({"site_rules.keep_outs.pomd.corners": [0.0]}, "'pomd' is not in site_rules.keep_outs.names; did you mean pond"),
    ({"site_rules.speed_caps.gate.max_speed": 0.0}, "out of range"),
    ({"site_rules.speed_caps.names": ["gate", "gate"]}, "more than once"),
    ({"robots.a.min_speed": 0.6, "robots.a.max_speed": 1.0}, "above site_rules.speed_caps.gate.max_speed"),
])
def test_mistakes_are_told_with_key_and_remedy(changes, words):
    flat = {key: value for key, value in (SITE | changes).items() if value is not None}
    with pytest.raises(SettingsError, match="site_rules|robots") as refused:
        config.from_parameters(flat)
    assert words in str(refused.value)


def test_areas_are_not_changed_while_the_planner_runs():
    configuration = config.from_parameters(SITE)
    with pytest.raises(SettingsError, match="cannot be changed while"):
        config.changed(configuration, {"site_rules.keep_outs.names": []})
    changed = config.changed(configuration, {"site_rules.keep_out_clearance": 0.4})
    assert changed.settings.site_rules.keep_outs == configuration.settings.site_rules.keep_outs


# What is planned


@pytest.mark.parametrize("count, keep_outs", [(3, (POND,)), (1, (YARD,)), (2, (POND, YARD))])
def test_the_way_is_bent_round_in_time(count, keep_outs):
    made = planned(straight(count), count, keep_outs)
    assert min(exact(made.plan.fleet, fleets.dense(made)[:, :, :3], area) for area in keep_outs) > 0.05
    assert made.plan.states[:, -1, :3] == pytest.approx(made.task.ends, abs=1e-3) and made.clearance > 0.85


def test_the_nearer_side_is_taken_and_the_other_one_where_that_is_closed():
    low = area_of("low", (6, -6, 8, -6, 8, 0.3, 6, 0.3))
    assert planned(straight(1), 1, [low]).plan.poses[0, :, 1].max() > 0.6  # above it
    # the nearer side is a dead end behind which a wall stands
    wall = area_of("wall", (8.2, -1.2, 9, -1.2, 9, 60.0, 8.2, 60.0))
    low = area_of("low", (6, -3, 8, -3, 8, 0.3, 6, 0.3))
    assert planned(straight(1), 1, [low, wall]).plan.poses[0, :, 1].min() < -3


def test_a_turn_keeps_off_what_stands_on_it():
    post = area_of("post", (3.5, 0.9, 3.8, 0.9, 3.8, 1.2, 3.5, 1.2))
    turn = ToEnds(ends_deg=("cart_1 pose 5 7.5 90", "cart_2 pose 5 5 90"))
    free, bent = (planned(turn, 2, shown) for shown in ((), (post,)))
    assert exact(free.plan.fleet, fleets.dense(free)[:, :, :3], post) == 0.0
    assert exact(bent.plan.fleet, fleets.dense(bent)[:, :, :3], post) > 0.05


@pytest.mark.parametrize("keep_outs, words", [
    ([RING], "ring|too little"),
    ([area_of("spot", (15, -1, 17, -1, 17, 1, 15, 1))], r"would end \d+\.\d\d m too near to spot"),
    ([area_of("spot", (-1, -1, 0.2, -1, 0.2, 1, -1, 1))], r"stands \d+\.\d\d m too near to spot"),
])
def test_what_cannot_be_kept_is_refused_with_the_missing_metres(keep_outs, words):
    with pytest.raises(RefusedError, match=words) as refused:
        planned(straight(1), 1, keep_outs)
    assert any(part.endswith(" m") or " m " in part for part in str(refused.value).split(";"))


def test_the_group_slows_in_step_before_a_capped_area_and_nobody_is_faster_in_it():
    made = planned(straight(3), 3, capped=[SpeedCap(POND, 0.4)])
    chosen = settings(site_rules={"speed_caps": [SpeedCap(POND, 0.4)]})
    states = fleets.dense(made)
    assert (states[:, :, 4] <= caps(made.plan.fleet, chosen, states[:, :, :3]) + 1e-3).all()
    assert np.ptp(states[:, :, 0], axis=0).max() < 0.05 * 16  # also those outside of it
    assert states[:, :, 6].max() > 0.95 and made.end > planned(straight(3), 3).end + 3.0


def test_an_end_is_not_passed_faster_than_its_area_allows():
    wanted = attrs.evolve(straight(1, 7), end_speed=0.8)
    with pytest.raises(RefusedError, match=r"0\.8 m/s is asked at the end.*0\.4 m/s"):
        area = area_of("gate", (5, -3, 12, -3, 12, 3, 5, 3))
        planned(wanted, 1, capped=[SpeedCap(area, 0.4)])


# What is driven


def test_driven_with_noise_it_keeps_out_and_slows():
    bed, gate_way = area_of("bed", (6, -4, 7, -4, 7, 0.2, 6, 0.2)), area_of("gate", (9, 1, 12, 1, 12, 4, 9, 4))
    run = yard(2, [bed], [SpeedCap(gate_way, 0.4)])
    assert run.begin("go").ok
    run.run_to(State.ENDED)
    rules, track = run.settings.site_rules, np.stack([poses for _, poses in run.track], axis=1)
    assert exact(run.fleet, track, rules.keep_outs[0]) > 0.0 and not run.codes()
    speeds = np.linalg.norm(np.diff(track[:, :, :2], axis=1), axis=2) / 0.05
    inside = shapely.intersects(outline.outlines(run.fleet.corners(), track[:, 1:]), rules.speed_caps[0].area.polygon)
    assert inside.any() and speeds[inside].max() <= 0.4 + 0.01
    assert all(value < 1e-6 for value in run.breaches().values())


def test_a_robot_that_slips_towards_a_keep_out_is_stopped_before_it():
    run = yard(1, [area_of("bed", (0.0, -5, 30, -5, 30, -0.9, 0.0, -0.9))])
    run.begin("go")
    run.run(4.0)
    for n in range(12):  # it slips to its right, faster than it can steer
        run.moved["cart_1"] = (0.0, -0.06 * (n + 1))
        run.run(0.1)
    run.run_to(State.HELD)
    found = [caution for decision in run.decisions for caution in decision.warnings]
    assert {"keep-out ahead", "clearance breached"} & {caution.code for caution in found}
    assert any("too near to bed" in caution.text and caution.level is Level.ERROR for caution in found)
    assert run.standing() and "bed" in run.coordinator.decision.reason


def test_the_last_gate_brakes_whoever_is_too_fast_where_it_is():
    fleet, rules = carts(2), SiteRules()
    last = np.array([[1.2, 0.0], [1.2, 0.0]])
    sent, _ = gate.allow(last, last, 0.1, fleet, rules, np.array([0.5, np.inf]))
    assert sent[:, 0] == pytest.approx([1.1, 1.2])
    for _ in range(20):
        sent, _ = gate.allow(last, sent, 0.1, fleet, rules, np.array([0.5, np.inf]))
    assert sent[:, 0] == pytest.approx([0.5, 1.2])


# What is shown and judged


def test_records_are_judged_by_outlines_alone():
    poses = np.zeros((1, 3, 3))
    poses[0, :, 0] = (0.0, 5.0, 7.0)
    poses[0, :, 1] = (2.0, 2.0, 2.0)
    rules = SiteRules(keep_outs=(POND,), speed_caps=(SpeedCap(POND, 0.4),), keep_out_clearance=0.5)
    run = standing(poses[:, 0], count=3, poses=poses, speeds=np.array([[1.0, 1.0, 0.7]]), site_rules=rules)
    assert [(each.robot, each.area) for each in areas.intrusions(run)] == [("r0", "pond")]
    assert areas.intrusions(run)[0].amount == pytest.approx(0.5 + np.sqrt(1.2 * 0.8))
    assert areas.speeding(run)[0].amount == pytest.approx(0.3)
    assert "0.30 m/s too fast in pond" in areas.speeding(run)[0].words("m/s")
    assert not areas.intrusions(attrs.evolve(run, site_rules=SiteRules()))


def test_pages_pictures_and_markers_show_areas():
    rules = SiteRules(keep_outs=(POND,), speed_caps=(SpeedCap(POND, 0.4),))
    run = standing([[0.0, 0.0, 0.0]], count=3, site_rules=rules)
    assert [area["words"] for area in data(run)["areas"]] == ["pond", "pond, at most 0.4 m/s"]
    assert ">pond</text>" in picture(run) and "0.4 m/s</text>" in picture(run)
    drawn = marks(run.fleet, graphs.path(run.fleet.names), run.poses[:, 0], (), rules)
    assert [mark.words for mark in drawn if mark.group == "areas" and mark.words] == ["pond", "pond: at most 0.4 m/s"]


def test_a_rest_made_anew_and_a_slower_one_keep_their_places_of_slowing():
    chosen, fleet = settings(site_rules={"speed_caps": [SpeedCap(POND, 0.4)]}), carts(1)
    graph = graphs.path(fleet.names)
    task = manoeuvre.work_out("go", straight(1), fleet, chosen, np.array([[0.0, 2.0, 0.0]]), 0.0, graph.hops())
    slower = task.stretched(5.0, 1.5, 0.25)
    assert slower.arrival == pytest.approx(5.0 + (task.arrival - 5.0) * 1.5, abs=0.26)
    for s in (6.0, 10.0, 15.0):
        later = 5.0 + (s - 5.0) * (slower.arrival - 5.0) / (task.arrival - 5.0)
        assert slower.profile_time(np.array(later)) == pytest.approx(task.profile_time(np.array(s)))
    made = reference.make(task, fleet, graph, chosen, fleets.states(np.array([[0.0, 2.0, 0.0]])))
    rest = reference.make_rest(made.task, fleet, graph, chosen, made, 4.0)
    states = fleets.dense(rest)
    assert (states[:, :, 6] <= caps(fleet, chosen, states[:, :, :3]) + 1e-3).all()
