# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A whole turn over real DDS: begun by service and by request, changed on the way, refused, halted, resumed."""

from __future__ import annotations

import json
from typing import Any

import pytest
from hand import ACTIVATE, CLEANUP, CONFIGURE, DEACTIVATE, Hand
from lifecycle_msgs.msg import Transition
from std_msgs.msg import Empty, String

from coord_planner.ros import qos
from coord_planner.ros.processes import NodeProcess


@pytest.fixture(scope="module")
def planner(site: Any, hand: Hand) -> NodeProcess:
    site.start("simulator_node")
    node = site.start("planner_node")
    assert not hand.transition(ACTIVATE), "an unconfigured node cannot be activated, and says so"
    assert hand.transition(CONFIGURE)
    return node


def test_nothing_begins_before_the_planner_is_active(hand: Hand, planner: NodeProcess) -> None:
    answer = hand.trigger("begin/corner_left")
    assert not answer.success
    assert "activate" in answer.message
    assert hand.transition(ACTIVATE)
    hand.until_heard()
    assert not any(hand.commands.values()), "activation moves nothing"


def test_a_turn_begun_by_its_service_is_completed(hand: Hand, planner: NodeProcess) -> None:
    answer = hand.trigger("begin/corner_left")
    assert answer.success, answer.message
    hand.until_state("moving")
    hand.until_state("ended")
    assert hand.status["completed"] == "true"
    last = hand.commands["left"][-1]
    hand.until_state("idle")
    hand.spin(0.5)
    assert hand.standing
    silent_since = hand.commands["left"][-1][0]
    assert 0.5 < silent_since - last[0] < 2.0, "zeros for a second, then nothing, so that people can drive"


def test_coupling_changed_in_mid_turn_takes_force_and_says_when(hand: Hand, planner: NodeProcess) -> None:
    hand.request(id="again", manoeuvre="corner_left", overrides={"speed": 0.8})
    assert hand.answer_to("again")["request_ok"] == "true"
    hand.until(lambda: float(hand.status.get("progress", 0)) > 0.2)
    assert float(hand.status["coupling"]) == 1.0

    refused = hand.set(coupling__strength=-3.0)
    assert not refused.successful
    refused = hand.set(coupling__strength=4.0, robots__left__max_speed=-1.0)
    assert not refused.successful, "together or not at all"
    refused = hand.set(robots__left__footprint_length=2.0)
    assert not refused.successful, "read-only"
    assert float(hand.status["coupling_asked"]) == 1.0

    taken = hand.set(coupling__strength=4)  # a whole number is taken for a real
    assert taken.successful, taken.reason
    hand.until(lambda: float(hand.status["coupling"]) == 4.0, what="the new coupling in force")
    assert hand.status["state"] == "moving"
    assert hand.status["change_in_force"] == "true"
    assert "coupling.strength = 4" in hand.status["change"]
    waiting = [status for status in hand.statuses if status["coupling_asked"] == "4" and status["coupling"] == "1"]
    assert waiting, "asked for first, in force later"
    hand.until_state("ended")
    assert hand.status["completed"] == "true"


def test_what_comes_next_is_put_in_its_place_and_changed_before_it_begins(hand: Hand, planner: NodeProcess) -> None:
    hand.until_state("idle")
    hand.request(id="early", manoeuvre="nudge", when="next")
    assert hand.answer_to("early")["request_ok"] == "false", "nothing is under way"
    hand.request(id="first", manoeuvre="corner_left")
    assert hand.answer_to("first")["request_ok"] == "true"
    hand.until_state("moving")
    for request_id, manoeuvre, ok in (("second", "corner_right", "true"), ("tight", "tight", "false"),
                                      ("instead", "nudge", "true")):
        overrides = {"radius": 0.4} if manoeuvre == "tight" else {}
        hand.request(id=request_id, manoeuvre="corner_right" if overrides else manoeuvre, overrides=overrides,
                     when="next")
        answer = hand.answer_to(request_id)
        assert answer["request_ok"] == ok, answer["request_text"]
    heard = len(hand.statuses)
    hand.until(lambda: hand.status["manoeuvre"].endswith("nudge"), what="the next one")
    hand.until_state("ended", "held")
    assert hand.status["state"] == "ended" and hand.status["completed"] == "true"
    driven = [status["manoeuvre"] for status in hand.statuses[heard:] if status["state"] == "moving"]
    assert driven[0].endswith("corner_left") and driven[-1].endswith("nudge")
    assert not any(name.endswith("corner_right") for name in driven)


def test_refusals_come_with_a_reason_and_move_nothing(hand: Hand, planner: NodeProcess) -> None:
    hand.until_state("idle")
    hand.spin(0.3)
    sent = len(hand.commands["left"])
    hand.request(id="unknown", manoeuvre="pirouette")
    assert hand.answer_to("unknown")["request_ok"] == "false"
    hand.request(id="tight", manoeuvre="corner_left", overrides={"radius": 0.4})
    answer = hand.answer_to("tight")
    assert answer["request_ok"] == "false"
    assert "radius" in answer["request_text"]
    hand.spin(0.5)
    assert len(hand.commands["left"]) == sent


def test_neighbours_in_force_are_told(hand: Hand, planner: NodeProcess) -> None:
    told: list[dict[str, Any]] = []
    hand.node.create_subscription(
        String, "planner/neighbours_in_force", lambda message: told.append(json.loads(message.data)), qos.NEWEST_LATCHED
    )
    hand.until(lambda: bool(told))
    assert told[0]["edges"] == [["left", "middle", 1.0], ["middle", "right", 1.0]]
    edges = [["left", "right", 2.0], ["right", "middle"], ["left", "middle"]]
    wanted = {"version": 1, "stamp": hand.now(), "edges": edges}
    hand.publish("neighbours", String(data=json.dumps(wanted)), qos.NEWEST_LATCHED)
    in_force = [["left", "right", 2.0], ["right", "middle", 1.0], ["left", "middle", 1.0]]
    hand.until(lambda: told[-1]["edges"] == in_force)


def test_a_disabled_robot_is_not_driven(hand: Hand, planner: NodeProcess) -> None:
    if hand.status["state"] != "idle":
        hand.until_state("idle")
    assert hand.set(robots__middle__enabled=False).successful
    sent = len(hand.commands["middle"])
    answer = hand.trigger("begin/corner_left")
    assert answer.success, answer.message
    hand.until_state("moving")
    hand.until_state("ended")
    assert hand.status["completed"] == "true"
    assert len(hand.commands["middle"]) == sent
    hand.until_state("idle")
    assert hand.set(robots__middle__enabled=True).successful


def test_deactivation_in_motion_is_refused_and_halts(hand: Hand, planner: NodeProcess) -> None:
    assert hand.trigger("begin/corner_right").success
    hand.until(lambda: float(hand.status.get("progress", 0)) > 0.2)
    assert not hand.transition(DEACTIVATE)
    assert hand.lifecycle() == "active"
    hand.until_state("held")
    hand.until(lambda: hand.standing, 3.0)
    assert hand.trigger("resume").success
    hand.until_state("moving")
    hand.publish("halt", Empty())
    hand.until_state("held")
    assert hand.trigger("abandon").success
    hand.until_state("idle")
    assert hand.transition(DEACTIVATE)
    assert planner.status is None


def test_a_second_life_that_ends_in_motion(hand: Hand, planner: NodeProcess) -> None:
    for transition in (CLEANUP, CONFIGURE, ACTIVATE):
        assert hand.transition(transition)
    hand.until_heard()
    assert hand.trigger("begin/corner_left").success
    hand.until(lambda: hand.status["state"] == "moving" and float(hand.status["progress"]) > 0.2)
    assert hand.transition(Transition.TRANSITION_ACTIVE_SHUTDOWN)
    hand.until(lambda: planner.status is not None, what="the end of the planner")
    assert planner.status == 0, "stopped in step first"
    hand.until(lambda: hand.standing, 2.0)
    assert hand.commands["left"][-1][1] == 0.0
    assert "Traceback" not in planner.output()
