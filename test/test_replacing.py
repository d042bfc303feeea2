# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A manoeuvre that replaces the running one: no jump in any command, nothing lost."""

import attrs
import numpy as np
import pytest
from fleets import small_yard

from coord_planner.core.messages import State


def turning(**imperfect):
    """Two carts that have begun a corner of 60 degrees to the left."""
    yard = small_yard(**imperfect)
    assert yard.begin("corner").ok
    yard.run(2.5)
    assert yard.coordinator.state is State.MOVING
    return yard


def kept(yard):
    """The largest excess over any limit, rates of the commands included."""
    return max(yard.breaches().values())


NOISY = {"pose_noise_xy": 0.02, "pose_noise_heading_deg": 0.5}


@pytest.mark.parametrize("imperfect", [{}, NOISY], ids=["true", "noisy"])
def test_the_other_way_round_in_mid_turn(imperfect):
    yard = turning(**imperfect)
    heading = yard.machines.poses()[0, 2]
    answer = yard.begin("corner", angle_deg=-60.0)
    assert answer.ok and "in 1.0 s corner takes" in answer.text
    yard.run_to(State.ENDED)
    ends = yard.coordinator.ends
    assert heading > 0.1 and -1.0 < ends[0, 2] < 0.6, "it turned back by 60 degrees from where it took over"
    assert np.abs(yard.machines.poses() - ends).max() < 0.06
    assert kept(yard) < 1e-6 and all(decision.reason in ("", "completed") for decision in yard.decisions)
    names = [decision.manoeuvre for decision in yard.decisions]
    assert names.count("corner") > 40


def test_nobody_is_behind_or_ahead_because_of_a_change_over():
    """A reference is looked at from some moments before its first node on."""
    yard = turning()
    assert yard.begin("corner", angle_deg=-60.0).ok
    yard.run(2.5)
    lags = np.array([decision.lag for decision in yard.decisions[20:]])
    assert yard.coordinator.taken_over == 1 and np.abs(lags).max() < 0.05  # 0.2 s at 1 m/s would be 0.2 m


def test_another_kind_takes_over_and_shows_on_the_way():
    yard = turning()
    assert yard.begin("placed").ok
    yard.run(0.5)
    assert yard.decisions[-1].manoeuvre == "corner"
    yard.run(1.0)
    assert yard.decisions[-1].manoeuvre == "placed" and 0.0 <= yard.decisions[-1].progress < 0.3
    yard.run_to(State.ENDED)
    np.testing.assert_allclose(yard.machines.poses()[:, :2], [[6.0, 8.0], [9.0, 8.0]], atol=0.05)
    assert kept(yard) < 1e-6


def test_what_is_refused_leaves_the_running_one_as_it_was():
    yard, calm = turning(), turning()
    answer = yard.begin("corner", radius=0.5)
    assert not answer.ok and "radius of 0.5 m" in answer.text and "goes on" in answer.text
    for each in (yard, calm):
        each.run_to(State.ENDED)
    assert yard.now == calm.now
    np.testing.assert_array_equal(yard.machines.poses(), calm.machines.poses())


def test_the_last_wish_counts_and_everyone_is_answered():
    yard = turning()
    for name in ("led", "placed"):
        yard.coordinator.begin(name, yard.snapshot(), request_id=name, answered=yard.answers.append)
    yard.work()
    assert [(answer.request_id, answer.ok) for answer in yard.answers[1:]] == [("led", False), ("placed", True)]
    assert "placed was asked for instead" in yard.answers[1].text
    yard.run(0.3)
    assert yard.begin("corner").ok  # placed has not begun to be driven: it never will
    yard.run_to(State.ENDED)
    assert "placed" not in {decision.manoeuvre for decision in yard.decisions} or yard.coordinator.ends[0, 0] != 6.0
    assert kept(yard) < 1e-6


def test_a_change_and_a_replacement_at_once_are_both_followed():
    yard = turning()
    stronger = attrs.evolve(yard.settings, coupling=attrs.evolve(yard.settings.coupling, strength=7.0))
    yard.coordinator.change(yard.now, settings=stronger)
    assert yard.begin("placed").ok
    yard.coordinator.change(yard.now, settings=attrs.evolve(stronger, coupling=attrs.evolve(
        stronger.coupling, strength=9.0)))
    yard.work()
    yard.run(3.0)
    assert yard.decisions[-1].manoeuvre == "placed" and yard.decisions[-1].coupling == 9.0
    # one that is refused must not swallow the change that was under way
    yard.coordinator.change(yard.now, settings=stronger)
    assert not yard.begin("corner", radius=0.5).ok
    yard.work()
    yard.run(2.0)
    assert yard.decisions[-1].coupling == 7.0
    yard.run_to(State.ENDED)
    assert kept(yard) < 1e-6


def test_a_stop_answers_whoever_waited_and_what_was_to_come_does_not():
    yard = turning()
    yard.coordinator.begin("placed", yard.snapshot(), answered=yard.answers.append)
    jobs = yard.coordinator.jobs()
    yard.coordinator.halt(yard.now, "somebody called")
    assert not yard.answers[-1].ok and "stopped" in yard.answers[-1].text
    for job in jobs:
        yard.coordinator.deliver(job(), yard.now)
    assert yard.run_to(State.HELD) is State.HELD
    assert yard.decisions[-1].manoeuvre == "corner" and not yard.begin("placed").ok
    assert yard.resume().ok
    yard.run_to(State.ENDED)
    assert kept(yard) < 1e-6


def test_one_that_comes_as_the_running_one_ends_still_begins():
    yard = small_yard()
    assert yard.begin("corner").ok
    yard.run(yard.coordinator.reference.end - 0.4)
    assert yard.coordinator.state is State.MOVING
    assert yard.begin("corner").ok
    yard.run(2.0)
    assert yard.coordinator.state is State.MOVING and yard.decisions[-1].progress < 0.5
    yard.run_to(State.ENDED)
    assert yard.machines.poses()[0, 2] == pytest.approx(np.radians(120.0), abs=0.05) and kept(yard) < 1e-6
