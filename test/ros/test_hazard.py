# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A hazard over real DDS: in motion everyone stops, armed they turn away, standing nothing moves, junk is ignored."""

from __future__ import annotations

import math
from typing import Any

import pytest
from conftest import SITE
from geometry_msgs.msg import PointStamped
from hand import ACTIVATE, CONFIGURE, Hand

from coord_planner.ros.processes import NodeProcess

NAMES = "names: [corner_left, corner_right, nudge]"
MORE = """\
      ahead: {kind: to_ends, speed: 1.0, ends_deg: ["left pose 20 6 0", "middle pose 20 3 0", "right pose 20 0 0"]}
      away: {kind: turn_away, after: 5.0}
"""


@pytest.fixture(scope="module")
def planner(site: Any, hand: Hand) -> NodeProcess:
    named = SITE.replace(NAMES, NAMES.replace("nudge", "nudge, ahead, away"))
    text = named.replace("    simulation:", MORE + "    simulation:")
    file = site.folder / "hazard.yaml"
    file.write_text(text + "    hazard: {sight: 7.0, expires: 4.0}\n")
    site.start("simulator_node", params=file)
    node: NodeProcess = site.start("planner_node", params=file)
    assert hand.transition(CONFIGURE) and hand.transition(ACTIVATE)
    hand.until_heard()
    return node


def point(hand: Hand, x: float, y: float, frame: str = "map") -> PointStamped:
    message = PointStamped()
    message.header.frame_id, message.header.stamp = frame, hand.node.get_clock().now().to_msg()
    message.point.x, message.point.y = x, y
    return message


def test_junk_is_ignored_and_a_standing_fleet_is_not_moved(hand: Hand, planner: NodeProcess) -> None:
    for message in (point(hand, 4.0, 6.0, "odom"), point(hand, math.nan, 6.0)):
        hand.publish("hazard", message)
    hand.until(lambda: hand.values("/planner: hazard messages").get("ignored") == "2")
    hand.publish("hazard", point(hand, 4.0, 6.0))
    hand.until(lambda: hand.values("/planner: hazard messages").get("used") == "1")
    hand.spin(0.5)
    assert hand.status["state"] == "idle" and not any(hand.commands.values())
    hand.spin(4.5)  # it is forgotten


def test_not_armed_everyone_stops_for_what_they_could_come_near(hand: Hand, planner: NodeProcess) -> None:
    hand.begin("ahead", to=0.15)
    hand.publish("hazard", point(hand, 500.0, 0.0))
    hand.spin(0.5)
    assert hand.status["state"] == "moving", "nobody comes near it"
    hand.publish("hazard", point(hand, 10.0, 6.5))
    hand.until_state("held")
    assert "hazard at (10.0, 6.5)" in hand.status["reason"]
    assert hand.trigger("abandon").success
    hand.spin(4.5)


def test_armed_the_fleet_turns_away(hand: Hand, planner: NodeProcess) -> None:
    assert not hand.trigger("begin/away").success, "from nothing"
    assert hand.trigger("arm/away").success
    hand.begin("ahead", to=0.15)
    hand.publish("hazard", point(hand, 13.5, 6.5))
    hand.until(lambda: hand.status["manoeuvre"] == "away", what="turning away")
    hand.until_state("ended")
    assert hand.status["completed"] == "true"
    hand.until_state("idle")
    assert planner.status is None
