# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots that leave the group or join it in mid-turn: no jump in any command, nobody held up by who is not driven."""

import re

import attrs
import numpy as np
import pytest
from fleets import LATE, Yard, abreast, carts, settings, small_yard

from coord_planner.core import bypass, outline
from coord_planner.core.area import Area
from coord_planner.core.graph import NeighbourGraph, path
from coord_planner.core.manoeuvre import Straight, work_out
from coord_planner.core.messages import Command, State
from coord_planner.core.plan import closest_along
from coord_planner.core.problem import POSE
from coord_planner.core.settings import SiteRules

ONE, TWO, THREE = "cart_1", "cart_2", "cart_3"
NOISY = {"pose_noise_xy": 0.02, "pose_noise_heading_deg": 0.5}
IN_FILE = np.array([[0.0, 0.0, 0.0], [-4.0, 0.0, 0.0]])
WALLS = tuple(Area(name, ((-9.0, y), (30.0, y), (30.0, y + 1.0), (-9.0, y + 1.0)))
              for name, y in (("hedge", 1.4), ("wall", -2.4)))


def turning(driven=(), manoeuvre="corner", seconds=2.5, **imperfect):
    """Three carts, some of them part of the group, that have begun to turn left."""
    yard = small_yard(3, driven=driven, **imperfect)
    yard.run(1.0)
    assert yard.begin(manoeuvre).ok
    yard.run(seconds)
    assert yard.coordinator.state is State.MOVING
    return yard


def kept(yard):
    """The largest excess over any limit, rates of the commands included."""
    return max(yard.breaches().values())


def last_told(yard, name):
    return max((time for time, names in yard.told if name in names), default=-1.0)


# Leaving


@pytest.mark.parametrize("imperfect", [{}, NOISY], ids=["true", "noisy"])
def test_one_that_leaves_brakes_stands_and_is_let_go_while_the_others_go_on(imperfect):
    yard = turning(**imperfect)
    asked, before = yard.now, yard.machines.poses()[2]
    yard.want(ONE, TWO)
    yard.run(0.2)
    assert yard.decisions[-1].outside == (THREE,)
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6 and yard.codes() <= {"graph changed"}
    ends, poses = yard.coordinator.ends, yard.machines.poses()
    assert np.abs(poses[:2] - ends[:2]).max() < 0.06 and np.isnan(ends[2]).all()
    # It takes a second to make the rest, at 1 m/s, then it brakes with 0.7 m/s^2 at the least.
    assert 0.5 < np.hypot(*(poses[2] - before)[:2]) < 1.0 * (1.0 + 0.6) + 1.0 / (2 * 0.7)
    let_go = last_told(yard, THREE)
    assert asked + 1.0 + 1.0 / 0.7 + 1.0 < let_go < asked + 5.0 and last_told(yard, ONE) > let_go + 0.5
    yard.run_to(State.IDLE)
    yard.run(0.2)
    assert yard.decisions[-1].names == (ONE, TWO) and yard.decisions[-1].completed
    assert yard.begin("corner").ok and len(yard.coordinator.ends) == 2


def test_nothing_that_is_wrong_with_one_that_left_stops_the_others():
    yard = turning()
    yard.want(ONE, TWO)
    yard.not_ready, yard.hidden = frozenset({THREE}), {THREE}
    yard.machines.slow(THREE, 0.0)  # it stands at once, whatever it is told
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and yard.codes() <= {"graph changed"} and kept(yard) < 1e-6


def test_people_drive_one_away_that_was_let_go():
    yard = turning(seconds=1.0)
    yard.want(ONE, TWO)
    yard.run(4.8)
    assert yard.coordinator.state is State.MOVING and last_told(yard, THREE) < yard.now - 0.1
    stood = yard.machines.poses()[2]
    yard.run(1.5, lambda each: each.machines.command(THREE, Command(-1.0, 0.3), each.now))
    seen = yard.decisions[-1].poses[2]
    assert np.hypot(*(seen - stood)[:2]) > 0.8 and np.abs(seen - yard.machines.poses()[2])[:2].max() < 0.15
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6


def test_one_that_left_is_an_obstacle_where_it_is_seen():
    yard = turning(seconds=1.0)
    yard.want(ONE, TWO)
    yard.run(4.8)
    assert last_told(yard, THREE) < yard.now - 0.1
    beside = yard.machines.poses()[1] - yard.machines.poses()[2]
    yard.moved[THREE] = (beside[0], beside[1] - 1.2)
    yard.run_to(State.HELD)
    assert "clearance" in yard.coordinator.decision.reason and kept(yard) < 1e-6


def in_file(walls=(), **imperfect):
    """Two carts, one 4 m behind the other, that drive straight on; the first leaves in front of the second."""
    rules = SiteRules(min_clearance=0.85, keep_out_clearance=0.0, keep_outs=walls)
    chosen = attrs.evolve(settings(horizon={"intervals": 16}), site_rules=rules)
    yard = Yard(carts(2, response=LATE), IN_FILE,
                {"on": Straight(distance=18.0)}, chosen, **imperfect)
    yard.run(1.0)
    assert yard.begin("on").ok
    yard.run(2.5)
    yard.want(TWO)
    return yard


@pytest.mark.parametrize("imperfect", [{}, NOISY], ids=["exactly in line", "noisy"])
def test_one_that_left_and_stands_in_the_way_is_gone_round(imperfect):
    yard = in_file(**imperfect)
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6 and yard.codes() <= {"graph changed"}
    assert np.abs(yard.machines.poses()[1] - yard.coordinator.ends[1]).max() < 0.1
    track = np.stack([poses for _, poses in yard.track], axis=1)
    gaps = outline.closest(outline.outlines(yard.fleet.corners(), track), outline.all_pairs(2))
    assert gaps[0] >= 0.85 and track[1, -1, 0] > track[0, -1, 0] + 8.0 and np.abs(track[1, :, 1]).max() > 1.5


@pytest.mark.parametrize("walls, sides", [((), {1.0, -1.0}), ((WALLS[0],), {-1.0}), (WALLS, set())])
def test_ways_lead_round_one_that_stands_by_every_side_that_has_room(walls, sides):
    rules = SiteRules(min_clearance=0.85, keep_out_clearance=0.0, keep_outs=walls)
    fleet, chosen = carts(2), attrs.evolve(settings(), site_rules=rules)
    further = IN_FILE + np.array([[4.0, 0.0, 0.0], [0.0, 0.0, 0.0]])  # the second comes to it in a straight line
    task = work_out("on", Straight(distance=18.0), fleet, chosen, further, 0.0, path(fleet.names).hops())
    task = attrs.evolve(task, stands=(0,))
    poses, speeds, bends = task.guess(np.arange(0.0, task.arrival, 0.25))
    guess = np.concatenate([poses, np.stack([bends, speeds, bends, speeds], axis=2)], axis=2)
    guess[0], guess[0, :, 3:] = guess[0, 0], 0.0
    assert bypass.in_the_way(task, fleet, chosen, guess)
    found = bypass.guesses(task, fleet, chosen, guess)
    assert {float(np.sign(each[1, np.argmax(np.abs(each[1, :, 1])), 1])) for each in found} == sides
    for each in found:
        assert closest_along(fleet, each[:, :, POSE])[0] >= 0.85 and each[0] == pytest.approx(guess[0])
        assert each[1, -1, POSE] == pytest.approx(guess[1, -1, POSE], abs=0.2)  # it is where solving begins, no plan
    clear = guess + np.array([0.0, 4.0, 0.0, 0.0, 0.0, 0.0, 0.0]) * np.array([0.0, 1.0])[:, None, None]
    assert not bypass.in_the_way(task, fleet, chosen, clear) and bypass.guesses(task, fleet, chosen, clear) == []


def test_one_that_left_and_cannot_be_gone_round_stops_the_others_with_figures():
    yard = in_file(WALLS, **NOISY)
    yard.run_to(State.HELD)
    assert re.search(r"cart_2.* \d\.\d\d m", yard.coordinator.decision.reason) and kept(yard) < 1e-6
    assert yard.standing()


def test_the_graph_of_those_that_stay_counts():
    yard = turning()
    yard.want(ONE, THREE)
    yard.run_to(State.HELD)
    assert "falls into 2 parts" in yard.coordinator.decision.reason and not yard.resume().ok
    yard.want(ONE, TWO, THREE)
    assert yard.resume().ok
    yard.run_to(State.ENDED)
    assert np.abs(yard.machines.poses() - yard.coordinator.ends).max() < 0.06 and kept(yard) < 1e-6


def test_nobody_goes_on_without_the_only_one_that_has_an_end():
    yard = turning(manoeuvre="led")
    yard.want(TWO, THREE)
    yard.run_to(State.HELD)
    assert "nobody who stays has an end" in yard.coordinator.decision.reason
    assert not yard.resume().ok and "nobody who stays has an end" in yard.answers[-1].text
    assert yard.coordinator.abandon(yard.now).ok
    yard.run(0.2)
    assert yard.decisions[-1].names == (TWO, THREE) and yard.begin("corner").ok


# Joining


@pytest.mark.parametrize("imperfect", [{}, NOISY], ids=["true", "noisy"])
def test_one_that_was_absent_from_the_start_joins_and_copies(imperfect):
    yard = turning(driven=(ONE, TWO), seconds=1.0, **imperfect)
    assert yard.coordinator.cannot_join(yard.part((ONE, TWO, THREE)), yard.graph) == ""
    yard.want(ONE, TWO, THREE)
    yard.run(0.3)
    assert yard.decisions[-1].names == (ONE, TWO, THREE) and yard.decisions[-1].outside == (THREE,)
    assert last_told(yard, THREE) < 0.0
    yard.run(1.5)
    assert yard.decisions[-1].outside == () and last_told(yard, THREE) > yard.now - 0.2
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6 and yard.codes() <= {"graph changed"}
    heading = yard.machines.poses()[:, 2]
    assert heading[2] > 0.3 * heading[1] and yard.standing()
    assert yard.begin("corner").ok and np.isfinite(yard.coordinator.ends).all()


def test_one_that_joins_goes_to_its_own_end_where_the_manoeuvre_names_one():
    yard = turning(manoeuvre="placed", seconds=0.8)
    yard.graph = NeighbourGraph(yard.fleet.names, ((ONE, TWO, 1.0), (ONE, THREE, 1.0)))
    yard.want(ONE, THREE)
    yard.run(5.0)
    assert yard.coordinator.state is State.MOVING and np.isnan(yard.coordinator.ends[1]).all()
    yard.want(ONE, TWO, THREE)
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6
    np.testing.assert_allclose(yard.machines.poses()[:2, :2], [[6.0, 8.0], [9.0, 8.0]], atol=0.06)


def unheard(yard):
    yard.hidden = {THREE}


def moving(yard):
    yard.run(1.0, lambda each: each.machines.command(THREE, Command(0.4, 0.0), each.now))


def not_ready(yard):
    yard.not_ready = frozenset({THREE})
    yard.run(0.2)


def stale(yard):
    yard.hidden = {THREE}
    yard.run(1.2)


def alone(yard):
    yard.graph = path((ONE, TWO))


@pytest.mark.parametrize("spoil, words", [
    (moving, "it must stand"), (not_ready, "not ready"), (stale, "s old"), (alone, "no edge"),
], ids=["moving", "not ready", "stale", "alone"])
def test_one_that_cannot_join_is_refused_in_words(spoil, words):
    yard = turning(driven=(ONE, TWO), seconds=1.0)
    spoil(yard)
    refused = yard.coordinator.cannot_join(yard.part((ONE, TWO, THREE)), yard.graph)
    assert THREE in refused and words in refused
    yard.run(0.2)
    assert yard.decisions[-1].names == (ONE, TWO)


def test_one_that_was_never_heard_is_refused():
    yard = small_yard(3, driven=(ONE, TWO))
    yard.hidden = {THREE}
    yard.run(0.5)
    assert yard.begin("corner").ok
    assert "no pose of cart_3" in yard.coordinator.cannot_join(yard.fleet, yard.graph)


@pytest.mark.parametrize("after", [0.2, 0.8])
def test_one_that_becomes_unfit_on_the_way_waits_until_the_fleet_is_idle(after):
    yard, calm = turning(driven=(ONE, TWO), seconds=1.0), turning(driven=(ONE, TWO), seconds=1.0)
    yard.want(ONE, TWO, THREE)
    yard.run(after)
    yard.not_ready = frozenset({THREE})
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and "robot not joined" in yard.codes() and last_told(yard, THREE) < 0.0
    calm.run_to(State.ENDED)
    assert np.abs(yard.machines.poses() - calm.machines.poses()).max() < 0.02
    yard.run_to(State.IDLE)
    assert not yard.begin("corner").ok and "cart_3 not ready" in yard.answers[-1].text
    yard.not_ready = frozenset()
    assert yard.begin("corner").ok and len(yard.coordinator.ends) == 3


def test_one_that_comes_as_the_manoeuvre_ends_joins_the_next():
    yard = turning(driven=(ONE, TWO))
    yard.run(yard.coordinator.reference.end - 2.5 - 0.8)
    assert yard.coordinator.state is State.MOVING
    yard.want(ONE, TWO, THREE)
    yard.run_to(State.ENDED)
    assert "robot not joined" in yard.codes() and yard.begin("corner").ok and len(yard.coordinator.ends) == 3


# Both, and in between


@pytest.mark.parametrize("pause", [0.1, 0.7, 1.6, 4.0], ids=["at once", "being made", "braking", "let go"])
def test_one_that_leaves_comes_back(pause):
    yard = turning(seconds=1.0)
    yard.want(ONE, TWO)
    yard.run(pause)
    yard.want(ONE, TWO, THREE)
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6
    assert yard.decisions[-1].outside == () or pause == 4.0
    assert np.abs(yard.machines.poses() - yard.coordinator.ends)[:2].max() < 0.06


def test_one_leaves_as_another_joins_and_the_coupling_changes():
    yard = turning(driven=(ONE, TWO), manoeuvre="led", seconds=1.5)
    both = NeighbourGraph(yard.fleet.names, ((ONE, TWO, 1.0), (ONE, THREE, 1.0)))
    stronger = attrs.evolve(yard.settings, coupling=attrs.evolve(yard.settings.coupling, strength=7.0))
    yard.coordinator.change(yard.now, fleet=yard.part((ONE, THREE)), graph=both, settings=stronger)
    yard.run(1.8)
    assert yard.decisions[-1].outside == (TWO,) and yard.decisions[-1].coupling == 7.0
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6
    assert yard.machines.poses()[0, 2] == pytest.approx(np.radians(60.0), abs=0.05)
    yard.run_to(State.IDLE)
    yard.run(0.2)
    assert yard.decisions[-1].names == (ONE, THREE)


@pytest.mark.parametrize("wanted", [(ONE, TWO), (ONE, TWO, THREE)], ids=["leaves", "joins"])
@pytest.mark.parametrize("after", [0.0, 0.5, 1.5], ids=["while held", "being made", "taken over"])
def test_a_halt_and_a_resume_in_the_middle_of_it(wanted, after):
    yard = turning(driven=() if len(wanted) == 2 else (ONE, TWO), seconds=1.5)
    if after:
        yard.want(*wanted)
        yard.run(after)
    yard.coordinator.halt(yard.now, "somebody called")
    yard.run_to(State.HELD)
    if not after:
        yard.want(*wanted)
    yard.run(1.0)
    assert yard.resume().ok
    yard.run(2.0)
    assert yard.coordinator.state is State.MOVING
    assert yard.decisions[-1].outside == ((THREE,) if len(wanted) == 2 else ())
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6
    assert np.abs(yard.machines.poses() - yard.coordinator.ends)[:2].max() < 0.06
    moved = np.hypot(*(yard.machines.poses()[2] - abreast(3)[2])[:2])
    assert moved > 1.0 if len(wanted) == 3 else last_told(yard, THREE) < yard.now - 1.0


def test_another_manoeuvre_takes_over_with_one_leaving_and_another_joining():
    yard = turning(seconds=1.0)
    yard.want(ONE, TWO)
    yard.run(2.5)
    assert yard.begin("corner", angle_deg=-60.0).ok
    yard.run(1.5)
    assert yard.coordinator.ends[0, 2] < 0.7 and yard.decisions[-1].outside == (THREE,)
    yard.want(ONE, TWO, THREE)
    assert yard.begin("placed").ok
    yard.run(2.5)
    assert yard.decisions[-1].manoeuvre == "placed" and yard.decisions[-1].outside == ()
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6
    np.testing.assert_allclose(yard.machines.poses()[:2, :2], [[6.0, 8.0], [9.0, 8.0]], atol=0.06)


def test_a_robot_that_leaves_and_one_that_joins_while_a_reference_is_made():
    yard = small_yard(3, driven=(ONE, TWO))
    yard.run(1.0)
    yard.coordinator.begin("led", yard.snapshot(), answered=yard.answers.append)
    jobs = yard.coordinator.jobs()
    yard.coordinator.change(
        yard.now, fleet=yard.part((ONE, THREE)), graph=NeighbourGraph(yard.fleet.names, ((ONE, THREE, 1.0),))
    )
    for job in jobs:
        yard.coordinator.deliver(job(), yard.now)
    assert yard.answers[-1].ok
    yard.run(2.5)
    assert yard.decisions[-1].outside == (TWO,)
    yard.run_to(State.ENDED)
    assert yard.decisions[-1].completed and kept(yard) < 1e-6 and yard.machines.poses()[2, 2] > 0.05
