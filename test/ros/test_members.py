# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots join and leave a running turn, by the ordinary parameter tools, over real DDS."""

from __future__ import annotations

import time
from typing import Any

import pytest
from hand import ACTIVATE, CONFIGURE, Hand
from std_msgs.msg import Bool

WIDE = {"angle_deg": 150.0, "radius": 5.0, "speed": 0.6}


@pytest.fixture(scope="module")
def planner(site: Any, hand: Hand) -> None:
    file = site.params(each="ready_required: true")
    coarse = file.read_text().replace("intervals: 12, interval: 0.4", "intervals: 8, interval: 0.8")
    file.write_text(coarse)  # references are made sooner, also on a busy machine
    site.start("simulator_node", params=file)
    site.start("planner_node", "robots.right.enabled:=false", params=file)
    assert hand.transition(CONFIGURE) and hand.transition(ACTIVATE)
    hand.until_heard()


def begin(hand: Hand, request_id: str) -> None:
    hand.statuses.clear()
    hand.request(id=request_id, manoeuvre="corner_left", overrides=WIDE)
    assert hand.answer_to(request_id)["request_ok"] == "true"
    hand.until(lambda: hand.status["state"] == "moving" and float(hand.status["progress"]) > 0.02)


def until_ready(hand: Hand, words: str) -> None:
    name = "/planner: readiness of right"
    hand.until(lambda: name in hand.diagnostics and hand.diagnostics[name].message == words, what=words)


def ended(hand: Hand) -> None:
    hand.until_state("ended", "held")
    assert hand.status["state"] == "ended" and hand.status["completed"] == "true"
    assert {code for code, _ in hand.warnings()} <= {"graph changed", "plan late", "robot not following"}
    hand.until_state("idle")


def test_one_that_was_absent_from_the_start_joins_in_mid_turn(hand: Hand, planner: None) -> None:
    begin(hand, "joined")
    assert not hand.commands["right"] and hand.status["outside"] == ""
    hand.publish("right/simulated_ready", Bool(data=False))
    until_ready(hand, "not ready to be driven")
    refused = hand.set(robots__right__enabled=True)
    assert not refused.successful and "right is not ready" in refused.reason
    hand.publish("right/simulated_ready", Bool(data=True))
    until_ready(hand, "ready to be driven")

    taken = hand.set(robots__right__enabled=True)
    assert taken.successful, taken.reason
    hand.until(lambda: hand.status["outside"] == "right", what="a robot that waits to join")
    hand.until(lambda: hand.status["outside"] == "" and hand.speeds["right"] > 0.1, what="a robot that joined")
    assert hand.status["change_in_force"] == "true" and hand.status["state"] == "moving"
    ended(hand)


def test_one_leaves_in_mid_turn_and_people_may_drive_it(hand: Hand, planner: None) -> None:
    begin(hand, "left")
    assert hand.set(robots__left__enabled=False).successful
    hand.until(lambda: hand.status["outside"] == "left" and abs(hand.speeds["left"]) < 0.01, what="one that left")
    hand.until(lambda: time.monotonic() - hand.commands["left"][-1][0] > 0.5, what="silence towards one that left")
    assert hand.status["state"] == "moving" and hand.speeds["middle"] > 0.1
    sent = len(hand.commands["left"])
    hand.publish("left/simulated_ready", Bool(data=False))  # somebody drives it by hand
    ended(hand)
    answer = hand.trigger("begin/nudge")
    assert answer.success, answer.message
    hand.until_state("ended")
    assert len(hand.commands["left"]) == sent
