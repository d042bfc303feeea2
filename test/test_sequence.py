# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parts one after the other: joints passed without a jump, the plan beyond them, the next one changed or refused."""

import attrs
import numpy as np
import pytest
import shapely
from fleets import LATE, State, Yard, abreast, carts, settings
from sites import site

from coord_planner.core import manoeuvre, outline
from coord_planner.core.graph import path
from coord_planner.core.manoeuvre import EqualRadius, Sequence, Straight, TurnAway, parts_of
from coord_planner.core.settings import Horizon
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

BEND = EqualRadius(angle_deg=30.0, radius=3.0)
ROWS = Sequence(("straight 3", "bend", "straight 2"), joint_speed=0.8, named={"bend": BEND})


def yard(**more):
    """Two carts and a short horizon; ``rows`` and ``bend`` can be begun."""
    manoeuvres = {"rows": ROWS, "bend": BEND, "other": attrs.evolve(BEND, angle_deg=-30.0),
                  "tight": attrs.evolve(BEND, radius=1.0)} | more
    return Yard(carts(2, response=LATE), abreast(2, 3.0), manoeuvres,
                settings(horizon=attrs.asdict(Horizon(intervals=12))))


def until_part(here, part, longest=40.0):
    until = here.now + longest
    while not here.coordinator.decision.manoeuvre.endswith(part):
        assert here.now < until, here.coordinator.decision
        here.run(0.1)


def turned(here):
    return np.degrees(here.machines.poses()[:, 2])


def test_parts_are_joined_at_the_joint_speed_and_keep_what_is_their_own():
    parts = parts_of("rows", attrs.evolve(ROWS, end_speed=0.3, coupling=7.0))
    assert [name for name, _ in parts] == ["straight 3", "bend", "straight 2"]
    assert [part.end_speed for _, part in parts] == [0.8, 0.8, 0.3]
    assert parts[0][1] == Straight(distance=3.0, speed=1.0, end_speed=0.8, coupling=7.0)
    own = attrs.evolve(ROWS, coupling=7.0, named={"bend": attrs.evolve(BEND, coupling=1.0)})
    assert parts_of("rows", own)[1][1].coupling == 1.0
    assert parts_of("bend", BEND) == (("bend", BEND),)


def test_a_sequence_is_driven_through_its_joints():
    here = yard()
    assert here.begin("rows").ok
    until_part(here, "bend")
    slowest = []
    here.run(4.0, lambda each: slowest.append(each.machines.speeds().min()))
    assert min(slowest) > 0.5  # nobody stops at the joint
    assert here.run_to(State.ENDED) is State.ENDED
    assert turned(here) == pytest.approx([30.0, 30.0], abs=1.0)
    assert np.abs(here.machines.poses() - here.coordinator.ends)[:, :2].max() < 0.05
    assert max(here.breaches().values()) < 1e-6 and not here.codes()
    done = [decision.progress for decision in here.decisions if decision.state is State.MOVING]
    assert np.all(np.diff(done) > -1e-9) and done[-1] > 0.95


def test_the_plan_looks_through_the_joint():
    """Just before it the plan already turns, as the part that follows does; poses go on without a jump."""
    here = yard()
    assert here.begin("rows").ok
    seen = []
    while here.coordinator.decision.manoeuvre != "rows: bend":
        here.run(0.1)
        seen.append(here.coordinator.decision.plan_poses)
    turning = [np.degrees(np.ptp(poses[:, :, 2], axis=1)) for poses in seen if poses.shape[1]]
    assert max(turn.min() for turn in turning[-8:]) > 3.0
    steps = [np.linalg.norm(np.diff(poses[:, :, :2], axis=1), axis=2).max() for poses in seen if poses.shape[1]]
    assert max(steps) < 0.30  # a quarter of a second at 1 m/s


def test_another_part_can_be_put_in_the_place_of_the_next_until_it_begins():
    here = yard()
    assert here.begin("rows").ok
    here.run(1.0)
    answers = []
    here.coordinator.then("other", here.snapshot(), answered=answers.append, request_id="7")
    here.work()
    assert answers[0].ok and "other takes" in answers[0].text and answers[0].request_id == "7"
    until_part(here, "other")
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([-30.0, -30.0], abs=1.0)
    assert max(here.breaches().values()) < 1e-6


def test_what_cannot_follow_is_refused_and_nothing_changes():
    here = yard()
    assert here.begin("rows").ok
    here.run(1.0)
    answers = []
    here.coordinator.then("tight", here.snapshot(), answered=answers.append)
    here.work()
    assert not answers[0].ok and "radius of 1 m" in answers[0].text
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([30.0, 30.0], abs=1.0)


def test_a_manoeuvre_can_follow_one_that_is_no_sequence():
    here = yard()
    assert here.begin("bend").ok
    here.run(1.0)
    here.coordinator.then("other", here.snapshot(), answered=here.answers.append)
    here.work()
    assert here.answers[-1].ok
    until_part(here, "other")
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([0.0, 0.0], abs=1.0)


def test_nothing_follows_a_fleet_that_is_idle():
    here = yard()
    here.coordinator.then("other", here.snapshot(), answered=here.answers.append)
    assert not here.answers[-1].ok and "nothing is under way" in here.answers[-1].text


def test_a_part_that_becomes_impossible_holds_the_fleet_at_the_joint():
    """Limits lowered on the way: the straight run can be driven, the bend cannot; freed again, it goes on."""
    here = yard(rows=attrs.evolve(ROWS, joint_speed=0.0))
    assert here.begin("rows").ok
    here.run(1.5)
    fleet = carts(2, limits=attrs.evolve(here.fleet.robots[0].limits, max_curvature=0.3), response=LATE)
    here.coordinator.change(here.now, fleet=fleet)
    here.work()
    here.run_to(State.HELD)
    assert "next part refused" in here.codes() and "radius" in here.coordinator.decision.reason
    assert here.standing() and here.machines.poses()[0, 0] == pytest.approx(3.0, abs=0.1)
    here.coordinator.change(here.now, fleet=here.fleet)
    assert here.resume().ok, here.answers[-1].text
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([30.0, 30.0], abs=1.0)


@pytest.mark.parametrize("moment", ["straight 3", "bend"])
def test_a_sequence_that_was_halted_goes_on_to_its_end(moment):
    here = yard()
    assert here.begin("rows").ok
    until_part(here, moment)
    here.run(1.5)
    here.coordinator.halt(here.now, "asked")
    here.run_to(State.HELD)
    assert here.resume().ok, here.answers[-1].text
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([30.0, 30.0], abs=1.5)
    assert max(here.breaches().values()) < 1e-6


def test_a_change_on_the_way_holds_for_the_next_part_too():
    here = yard()
    assert here.begin("rows").ok
    here.run(1.5)
    coupled = attrs.evolve(here.settings, coupling=attrs.evolve(here.settings.coupling, strength=9.0))
    here.coordinator.change(here.now, settings=coupled)
    here.work()
    until_part(here, "bend")
    assert here.coordinator.decision.coupling == 9.0
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([30.0, 30.0], abs=1.0)


def test_a_change_that_comes_when_a_part_only_settles_makes_nothing_anew():
    here = yard(rows=attrs.evolve(ROWS, joint_speed=0.0))
    assert here.begin("rows").ok
    part = here.coordinator.reference
    horizon, arrives = here.settings.horizon, part.task.arrival
    here.run(arrives - horizon.lead)  # what is made now takes over when the part's ways are driven
    coupled = attrs.evolve(here.settings, coupling=attrs.evolve(here.settings.coupling, strength=9.0))
    here.coordinator.change(here.now, settings=coupled)
    assert here.coordinator.jobs() == [] and here.now + horizon.lead < part.end - 2 * horizon.interval
    here.run_to(State.ENDED)
    assert here.coordinator.decision.completed


def test_members_come_and_go_on_the_way_and_all_turn_away_from_a_hazard():
    """Neighbours come from the poses; the sequence has a coupling of its own, whatever is made anew."""
    rows = Sequence(("straight 6", "bend", "straight 8"), joint_speed=0.8, coupling=7.0, named={"bend": BEND})
    chosen = settings(horizon={"intervals": 12}, neighbours={"source": "nearest"},
                      hazard={"sight": 6.0, "expires": 30.0, "clearance": 1.0})
    here = Yard(carts(3, response=LATE), abreast(3, 3.0), {"rows": rows, "away": TurnAway(after=4.0)}, chosen,
                pose_noise_xy=0.02, pose_noise_heading_deg=0.5)
    here.run(1.0)
    assert here.begin("rows").ok
    here.run(1.5)
    here.want("cart_1", "cart_2")
    until_part(here, "bend")
    assert here.coordinator.decision.outside == ("cart_3",) and here.coordinator.decision.coupling == 7.0
    here.run(2.0)
    here.want("cart_1", "cart_2", "cart_3")  # too late for this part
    until_part(here, "straight 8")
    here.run(2.5)
    assert here.coordinator.decision.outside == () and here.machines.speeds()[2] > 0.2
    assert {edge[:2] for edge in here.coordinator.graph.edges} >= {("cart_1", "cart_2")}
    ahead = here.machines.poses()[0]
    point = ahead[:2] + 5.0 * np.array([np.cos(ahead[2]), np.sin(ahead[2])])
    here.coordinator.arm("away", here.now)
    assert here.coordinator.hazard(*map(float, point), here.now).ok
    here.run_to(State.ENDED)
    assert "away" in {decision.manoeuvre for decision in here.decisions} and max(here.breaches().values()) < 1e-6
    shapes = outline.outlines(here.fleet.corners(), np.stack([poses for _, poses in here.track], axis=1))
    assert shapely.distance(shapes, shapely.Point(point)).min() >= 1.0
    assert outline.closest(shapes, outline.all_pairs(3))[0] >= here.settings.site_rules.min_clearance


def test_another_manoeuvre_takes_the_place_of_a_sequence():
    here = yard()
    assert here.begin("rows").ok
    here.run(1.0)
    assert here.begin("other").ok
    here.run_to(State.ENDED)
    assert turned(here) == pytest.approx([-30.0, -30.0], abs=1.0)
    assert here.coordinator.decision.manoeuvre == "other"


@pytest.mark.parametrize("key", ["alignment", "named", "parts", "nonsense"])
def test_only_numbers_of_its_own_are_overridden(key):
    here = yard()
    answer = here.begin("rows", **{key: 1.0})
    assert not answer.ok and "override one of speed, joint_speed, end_speed, coupling" in answer.text


def test_a_later_part_that_cannot_be_is_refused_before_anything_moves():
    fleet = carts(2)
    rows = attrs.evolve(ROWS, named={"bend": attrs.evolve(BEND, radius=1.0)})
    with pytest.raises(RefusedError, match=r"rows, part 2 of 3: a radius of 1 m is 0\.25 m tighter"):
        manoeuvre.work_out("rows", rows, fleet, settings(), abreast(2), 0.0, path(fleet.names).hops())


@pytest.mark.parametrize("parts, words", [
    (["straight -3"], "no part of a sequence"), (["straight"], "is not in manoeuvres.names"), ([], "at least one"),
    (["corner left"], "no part of a sequence"), (["rows"], "is itself a sequence"), (["bned"], "did you mean bend"),
])
def test_parts_that_mean_nothing_are_told(parts, words):
    bend = {"kind": "equal_radius", "radius": 4.0}
    with pytest.raises(SettingsError, match=words):
        site(abreast(2), {"bend": bend, "rows": {"kind": "sequence", "parts": parts}})


def test_a_rehearsal_drives_all_parts():
    turn = {"kind": "equal_radius", "radius": 4.0, "angle_deg": 45.0}
    rows = {"kind": "sequence", "parts": ["straight 3", "turn"], "joint_speed": 0.6}
    run = rehearse(site(abreast(2), {"turn": turn, "rows": rows}), "rows", seed=1)
    figures = summary(run)
    assert figures["completed"] and figures["limit_violations"] == 0 and figures["contacts"] == 0
    assert max(figures["end_error_m"].values()) <= 0.10
    assert np.degrees(list(figures["heading_change_rad"].values())) == pytest.approx([45.0, 45.0], abs=3.0)
