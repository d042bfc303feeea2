# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The loop from snapshots to commands: who may begin, halt and resume when, and what stops the fleet."""

import math

import attrs
import fleets
import numpy as np
import pytest
from fleets import LATE, abreast, carts, small_yard

from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.manoeuvre import EqualRadius
from coord_planner.core.messages import Level, PoseSample, Snapshot, State


def under_way(seconds=3.0, manoeuvre="corner", **imperfect):
    """Two carts in the middle of a turn."""
    yard = small_yard(**imperfect)
    assert yard.begin(manoeuvre).ok
    yard.run(seconds)
    assert yard.coordinator.state is State.MOVING and yard.machines.speeds().min() > 0.5
    return yard


def kept_its_limits(yard, fleet=None, since=-1.0):
    return max(yard.breaches(fleet, since).values()) < 1e-6


# From beginning to end


def test_a_manoeuvre_from_idle_to_idle():
    yard = small_yard()
    assert yard.coordinator.state is State.IDLE and yard.coordinator.commands(0.0) is None
    yard.coordinator.begin("corner", yard.snapshot(), answered=yard.answers.append, request_id="r7")
    assert yard.coordinator.state is State.PLANNING and not yard.answers
    assert yard.coordinator.commands(0.0) is None  # nothing moves yet
    yard.work()
    assert yard.answers[0].ok and yard.answers[0].request_id == "r7" and "clearance" in yard.answers[0].text
    assert yard.coordinator.state is State.MOVING
    yard.run_to(State.ENDED)
    assert yard.standing() and yard.coordinator.decision.completed
    assert yard.machines.poses() == pytest.approx(yard.coordinator.ends, abs=0.01)
    ended = yard.now
    yard.run_to(State.IDLE)
    assert yard.now - ended == pytest.approx(1.0, abs=0.2)  # commands.zeros_after_end
    assert all((values == 0.0).all() for time, values in yard.sent if time > ended + 0.1)
    assert yard.coordinator.commands(yard.now) is None
    progress = [decision.progress for decision in yard.decisions]
    assert (np.diff(progress) >= 0.0).all() and progress[-1] == 1.0
    assert kept_its_limits(yard) and not yard.codes()


def test_one_that_ends_in_motion_is_completed_by_a_stop():
    yard = small_yard()
    assert yard.begin("passing").ok
    assert yard.run_to(State.STOPPING) is State.STOPPING
    assert yard.machines.speeds() == pytest.approx(0.5, abs=0.05)
    assert yard.run_to(State.ENDED, State.HELD) is State.ENDED
    assert yard.coordinator.decision.completed and yard.standing() and kept_its_limits(yard)


def test_the_next_one_may_begin_while_zeros_are_still_sent():
    yard = small_yard()
    yard.begin("corner")
    yard.run_to(State.ENDED)
    assert yard.begin("corner").ok
    yard.run_to(State.ENDED)
    assert yard.machines.poses()[0, 2] == pytest.approx(math.radians(120.0), abs=0.01)
    assert kept_its_limits(yard)


def test_overrides_count_for_one_request():
    yard = small_yard()
    assert yard.begin("corner", speed=0.5, angle_deg=-30).ok
    assert yard.coordinator.reference.task.speed == 0.5
    assert yard.coordinator.ends[:, 2] == pytest.approx(math.radians(-30.0))


# What is not begun


@pytest.mark.parametrize("overrides, words", [
    ({"radius": 0.5}, "0.75 m tighter"), ({"speed": 9.0}, "1.4 m/s"), ({"speed": -1.0}, "above 0"),
    ({"speed": math.nan}, "speed"), ({"radius": math.inf}, "radius"), ({"diameter": 3.0}, "diameter"),
    ({"speed": True}, "True"), ({"speed": "fast"}, "'fast'"), ({"ends_deg": 1.0}, "ends_deg"),
    ({"coupling": -1.0}, "at least 0"),
])
def test_bad_overrides_are_refused_and_nothing_moves(overrides, words):
    yard = small_yard()
    answer = yard.begin("corner", **overrides)
    assert not answer.ok and words in answer.text
    assert yard.coordinator.state is State.IDLE and yard.coordinator.commands(0.0) is None


def test_what_is_refused_while_planning_leaves_the_fleet_idle_and_free():
    yard = fleets.Yard(carts(2, response=LATE), abreast(2, 1.6), {"corner": EqualRadius()}, fleets.settings())
    answer = yard.begin("corner")
    assert not answer.ok and "stand 0.80 m apart" in answer.text
    yard.run(0.3)
    assert yard.coordinator.state is State.IDLE and not yard.sent


def test_unknown_manoeuvres_missing_poses_and_robots_that_are_not_ready_are_refused():
    yard = small_yard()
    yard.hidden = {"cart_2"}
    assert "'waltz' is not a manoeuvre" in yard.begin("waltz").text
    assert "no fresh pose of cart_2" in yard.begin("corner").text and not yard.answers[-1].ok
    yard.hidden, yard.not_ready = set(), frozenset({"cart_1"})
    assert "cart_1 not ready" in yard.begin("corner").text
    yard.not_ready = frozenset()
    assert yard.begin("corner").ok


@pytest.mark.parametrize("spoilt", [
    PoseSample(0.0, math.nan, 0.0, 0.0), PoseSample(0.0, 0.0, math.inf, 0.0), PoseSample(0.0, 0.0, 0.0, math.nan),
    PoseSample(-5.0, 0.0, 0.0, 0.0), PoseSample(3.0, 0.0, 0.0, 0.0), PoseSample(math.nan, 0.0, 0.0, 0.0),
])
def test_poses_that_cannot_be_believed_are_no_poses(spoilt):
    yard, answers = small_yard(), []
    good = yard.snapshot().poses["cart_2"]
    snapshot = Snapshot(0.0, {"cart_1": spoilt, "cart_2": good, "stranger": good})
    yard.coordinator.begin("corner", snapshot, answered=answers.append)
    assert not answers[0].ok and "no fresh pose of cart_1" in answers[0].text


def test_nothing_is_resumed_or_abandoned_in_motion():
    yard = under_way()
    assert not yard.resume().ok
    assert not yard.coordinator.abandon(yard.now).ok
    yard.run(0.5)
    assert yard.coordinator.state is State.MOVING and kept_its_limits(yard)


# Halting


def test_halting_while_planning_answers_the_request_and_drops_what_comes_late():
    yard = small_yard()
    yard.coordinator.begin("corner", yard.snapshot(), answered=yard.answers.append)
    jobs = yard.coordinator.jobs()
    assert yard.coordinator.halt(0.0, "halted by a person").ok
    assert [answer.ok for answer in yard.answers] == [False]
    for job in jobs:
        yard.coordinator.deliver(job(), 0.0)
    yard.run(0.5)
    assert yard.coordinator.state is State.IDLE and not yard.sent and len(yard.answers) == 1


def test_halt_hold_resume_and_arrive():
    yard = under_way()
    answer = yard.coordinator.halt(yard.now, "halted by a person")
    assert answer.ok and "stopping in step" in answer.text
    assert yard.coordinator.state is State.STOPPING
    assert yard.coordinator.halt(yard.now, "again").ok and not yard.begin("led").ok
    yard.run_to(State.HELD)
    yard.run(1.0)
    assert yard.standing() and "halted by a person" in yard.coordinator.decision.reason
    assert not yard.coordinator.decision.completed and not yard.begin("led").ok
    assert (yard.coordinator.commands(yard.now)["cart_1"].speed, yard.coordinator.state) == (0.0, State.HELD)
    assert yard.resume().ok
    yard.run_to(State.ENDED)
    assert yard.coordinator.decision.completed and kept_its_limits(yard)
    assert yard.machines.poses()[:, 2] == pytest.approx(math.radians(60.0), abs=0.01)
    assert yard.machines.poses() == pytest.approx(yard.coordinator.ends, abs=0.02)


@pytest.mark.parametrize("seconds", [4.5, 5.1, 5.3])
def test_resumed_close_to_its_end_it_creeps_there_instead_of_going_round(seconds):
    """Centimetres from the end, and by noise a little beside the way: the shortest drivable way is a full circle."""
    yard = small_yard(pose_noise_xy=0.02, pose_noise_heading_deg=0.5)
    yard.begin("corner")
    yard.run(seconds)
    yard.coordinator.halt(yard.now, "halted")
    yard.run_to(State.HELD)
    assert yard.resume().ok
    if yard.coordinator.state is not State.ENDED:  # nothing is left to drive when it is there already
        assert max(fleets.length(yard.coordinator.reference, k) for k in range(2)) < 0.5
        yard.run_to(State.ENDED)
    assert yard.coordinator.state is State.ENDED
    off = yard.machines.poses() - yard.coordinator.ends
    assert np.hypot(off[:, 0], off[:, 1]).max() < 0.10 and np.degrees(np.abs(off[:, 2])).max() < 3.0


def test_a_robot_pushed_off_its_way_finds_a_new_one():
    yard = under_way(3.0, "placed")
    yard.coordinator.halt(yard.now, "halted")
    yard.run_to(State.HELD)
    yard.moved["cart_1"] = (0.0, 0.8)
    yard.run(0.5)
    assert yard.coordinator.state is State.HELD and yard.resume().ok
    yard.run_to(State.ENDED)
    seen = yard.machines.poses() + np.array([[0.0, 0.8, 0.0], [0.0, 0.0, 0.0]])
    assert seen == pytest.approx(yard.coordinator.ends, abs=0.03) and kept_its_limits(yard)


def test_a_halt_takes_a_resume_back():
    yard, resumed = under_way(), []
    yard.coordinator.halt(yard.now, "halted")
    yard.run_to(State.HELD)
    yard.coordinator.resume(yard.snapshot(), resumed.append)
    jobs = yard.coordinator.jobs()
    yard.coordinator.halt(yard.now, "halted again")
    assert [answer.ok for answer in resumed] == [False]
    for job in jobs:
        yard.coordinator.deliver(job(), yard.now)
    yard.run(0.5)
    assert yard.coordinator.state is State.HELD and yard.standing()
    assert yard.resume().ok


def test_a_held_fleet_that_is_abandoned_is_free():
    yard = under_way()
    yard.coordinator.halt(yard.now, "halted")
    yard.run_to(State.HELD)
    assert yard.coordinator.abandon(yard.now).ok
    assert yard.coordinator.state is State.IDLE and yard.coordinator.commands(yard.now) is None
    assert not yard.resume().ok
    yard.run(0.5)
    assert yard.begin("led").ok


def test_a_halt_keeps_the_fleet_on_its_curves():
    yard = under_way()
    made = yard.coordinator.reference
    yard.coordinator.halt(yard.now, "halted")
    halted = yard.now
    yard.run_to(State.HELD)
    curve = made.states(np.linspace(0.0, made.end, 3001))[:, :, :2]
    for time, poses in yard.track:
        if time >= halted:
            off = [np.linalg.norm(curve[k] - poses[k, :2], axis=1).min() for k in range(2)]
            assert max(off) < 0.02
    # Within v t_r + v^2/(2 a): 1 m/s, a brake of 1 m/s^2, and 0.4 s of delay and lag (shared/checks.md section 6).
    before = next(poses for time, poses in yard.track if time >= halted)
    rolled = np.linalg.norm(yard.machines.poses()[:, :2] - before[:, :2], axis=1)
    assert rolled.max() < 1.0 * 0.4 + 1.0 / (2 * 0.95) + 0.05


def test_a_motion_begins_with_a_fresh_decision():
    """The node halts a moving fleet without decisions; the last one before the motion may be of long ago."""
    yard = small_yard()
    yard.now = 1000.0
    yard.machines.advance(1000.0)
    answers = []
    yard.coordinator.begin("corner", yard.snapshot(), answered=answers.append)
    for job in yard.coordinator.jobs():
        yard.coordinator.deliver(job(), 1000.5)
    assert answers[0].ok and yard.coordinator.state is State.MOVING
    assert yard.coordinator.decision.time == 1000.5


def test_halting_an_idle_fleet_is_no_error():
    yard = small_yard()
    assert yard.coordinator.halt(0.0, "halted").ok and yard.coordinator.state is State.IDLE


# What stops the fleet


STOPS = {
    "pose old": lambda yard: yard.hidden.add("cart_2"),
    "robot not ready": lambda yard: setattr(yard, "not_ready", frozenset({"cart_2"})),
    "pose jumped": lambda yard: yard.moved.update(cart_2=(0.0, -0.9)),
    "robot not following": lambda yard: yard.machines.slow("cart_2", 0.0),
}


@pytest.mark.parametrize("code", STOPS)
def test_trouble_stops_everybody_and_says_why(code):
    yard = under_way(1.5)
    STOPS[code](yard)
    yard.run_to(State.HELD)
    found = [c for d in yard.decisions for c in d.warnings if c.code == code and c.level is not Level.WARN]
    assert found and found[0].subject == "cart_2"
    assert "cart_2" in yard.coordinator.decision.reason and "site's operating rules" in found[0].text
    assert yard.standing() and kept_its_limits(yard)


def test_a_robot_that_slips_aside_is_warned_of_by_name_and_nobody_else():
    yard = under_way(1.5)
    yard.run(1.0)
    assert "robot astray" not in yard.codes()

    def slip(here):  # by 0.2 m/s, a tick lasts 0.1 s
        x, y = here.moved.get("cart_2", (0.0, 0.0))
        here.moved["cart_2"] = (x, y + 0.02)

    yard.run(2.0, slip)
    found = {c.subject for d in yard.decisions for c in d.warnings if c.code == "robot astray"}
    assert found == {"cart_2"}


def test_only_a_persons_call_moves_a_stopped_robot_again():
    yard = under_way()
    yard.not_ready = frozenset({"cart_2"})
    yard.run_to(State.HELD)
    assert not yard.resume().ok and "cart_2 not ready" in yard.answers[-1].text
    yard.not_ready = frozenset()
    yard.run(3.0)
    assert yard.coordinator.state is State.HELD and yard.standing()
    assert yard.resume().ok
    yard.run_to(State.ENDED)


def test_a_robot_held_up_for_a_while_slows_all_and_stops_none():
    yard = under_way(2.0)
    yard.machines.slow("cart_2", 0.3)
    yard.run(2.0)
    assert yard.coordinator.decision.progress_rate < 0.8
    yard.machines.slow("cart_2", 1.0)
    yard.run_to(State.ENDED)
    assert yard.coordinator.decision.completed
    assert kept_its_limits(yard)
    assert yard.machines.poses() == pytest.approx(yard.coordinator.ends, abs=0.02)


# Changes in mid-turn


def changed(yard, **groups):
    settings = yard.settings
    for group, values in groups.items():
        settings = attrs.evolve(settings, **{group: attrs.evolve(getattr(settings, group), **values)})
    return settings


def test_another_coupling_takes_force_in_mid_turn_without_a_jump():
    yard = under_way(2.0, "led")
    assert yard.coordinator.decision.coupling == 2.0
    yard.coordinator.change(yard.now, settings=changed(yard, coupling={"strength": 8.0}))
    yard.work()
    assert yard.coordinator.decision.coupling == 2.0
    yard.run(1.5)
    assert yard.coordinator.decision.coupling == 8.0
    yard.run_to(State.ENDED)
    assert yard.coordinator.decision.completed and kept_its_limits(yard) and not yard.codes()


def test_other_neighbours_take_force_in_mid_turn():
    yard = under_way(2.0, "led")
    assert len(yard.coordinator.reference.graph.edges) == 1
    settings = yard.settings
    apart = attrs.evolve(settings, coupling=attrs.evolve(settings.coupling, may_split=True))
    yard.coordinator.change(yard.now, settings=apart, graph=NeighbourGraph(yard.fleet.names, ()))
    yard.run(1.5)
    assert yard.coordinator.reference.graph.edges == ()
    assert {"graph changed", "graph split"} <= {c.code for d in yard.decisions for c in d.warnings}
    yard.run_to(State.ENDED)
    assert kept_its_limits(yard)
    assert yard.machines.poses()[0, 2] == pytest.approx(math.radians(60.0), abs=0.01)


def test_a_graph_that_falls_apart_stops_the_fleet_unless_the_file_allows_it():
    yard = under_way(2.0, "led")
    yard.coordinator.change(yard.now, graph=NeighbourGraph(yard.fleet.names, ()))
    yard.run_to(State.HELD)
    assert "falls into 2 parts" in yard.coordinator.decision.reason and yard.standing()


def test_a_lower_speed_limit_is_kept_from_the_moment_at_which_the_brake_can_keep_it():
    yard = under_way(2.5)
    slower = carts(2, attrs.evolve(fleets.LIMITS, max_speed=0.5), LATE)
    at, fast = yard.now, yard.machines.speeds().max()
    yard.coordinator.change(at, fleet=slower)
    yard.run_to(State.ENDED)
    needed = (max(fast, 1.1) - 0.5) / slower.limit("max_braking").max() + 0.1
    assert kept_its_limits(yard, slower, since=at + needed)
    changes = yard.breaches(slower, since=at - 0.2)
    assert max(changes[name] for name in ("max_acceleration", "max_braking", "max_curvature_rate")) < 1e-6
    assert yard.coordinator.decision.completed
    assert yard.machines.poses() == pytest.approx(yard.coordinator.ends, abs=0.03)


def test_a_change_that_cannot_be_kept_stops_the_fleet_and_says_so():
    yard = under_way(2.0)
    yard.coordinator.change(yard.now, settings=changed(yard, site_rules={"min_clearance": 1.6}))
    yard.run_to(State.HELD)
    assert yard.codes() & {"change refused", "clearance breached"} and yard.standing()
    assert kept_its_limits(yard)


def test_a_change_while_a_reference_is_made_takes_force_on_the_way():
    yard = small_yard()
    yard.coordinator.begin("corner", yard.snapshot(), answered=yard.answers.append)
    jobs = yard.coordinator.jobs()
    yard.coordinator.change(0.0, settings=changed(yard, coupling={"strength": 9.0}))
    for job in jobs:
        yard.coordinator.deliver(job(), 0.0)
    yard.work()
    yard.run(2.0)
    assert yard.coordinator.decision.coupling == 9.0


def test_a_change_while_idle_counts_for_the_next_manoeuvre():
    yard = small_yard()
    yard.coordinator.change(0.0, settings=changed(yard, coupling={"strength": 5.0}))
    yard.begin("corner")
    assert yard.coordinator.reference.task.coupling == 5.0


# Numbers


def test_the_same_seed_has_the_same_numbers():
    runs = []
    for _ in range(2):
        yard = small_yard(pose_noise_xy=0.02, pose_noise_heading_deg=0.5, seed=5)
        yard.begin("corner")
        yard.run(4.0)
        runs.append(np.stack([values for _, values in yard.sent]))
    assert np.array_equal(*runs)


def test_noise_brings_no_command_outside_a_limit_and_ends_near_the_end():
    yard = small_yard(pose_noise_xy=0.02, pose_noise_heading_deg=0.5, seed=11)
    yard.begin("corner")
    yard.run_to(State.ENDED)
    assert kept_its_limits(yard)
    off = yard.machines.poses() - yard.coordinator.ends
    assert np.hypot(off[:, 0], off[:, 1]).max() < 0.10 and np.degrees(np.abs(off[:, 2])).max() < 3.0


def test_decisions_say_what_is_planned():
    decision = under_way().coordinator.decision
    assert decision.manoeuvre == "corner" and decision.state is State.MOVING and 0.0 < decision.progress < 1.0
    assert decision.plan_poses.shape == (2, len(decision.plan_times), 3) and decision.plan_times[0] > decision.time
    assert decision.clearance >= 0.85 and decision.clearance_pair == ("cart_1", "cart_2")
    assert np.isfinite(decision.poses).all() and np.abs(decision.lag).max() < 0.1
