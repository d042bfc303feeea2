# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Messages that cannot be used are ignored, counted and told on /diagnostics; the last good value stays in force."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest
from hand import ACTIVATE, CONFIGURE, ROBOTS, Hand
from std_msgs.msg import String

from coord_planner.ros import qos
from coord_planner.ros.processes import NodeProcess

PLACES = {"left": 6.0, "middle": 3.0, "right": 0.0}


@pytest.fixture(scope="module")
def planner(site: Any, hand: Hand) -> NodeProcess:
    node = site.start("planner_node", "activate_on_start:=true", "commands.publish:=false")
    hand.until(lambda: bool(hand.diagnostics), what="diagnostics")
    return node


def poses_of(hand: Hand, name: str) -> dict[str, str]:
    return hand.values(f"/planner: poses of {name}")


def test_activates_itself_when_told_to(hand: Hand, planner: NodeProcess) -> None:
    assert hand.lifecycle() == "active"
    assert not hand.transition(CONFIGURE), "not from active"
    assert not hand.transition(ACTIVATE)
    assert planner.status is None, "a transition that is not allowed ends nothing"


def test_bad_poses_are_ignored_counted_and_told(hand: Hand, planner: NodeProcess) -> None:
    good = hand.pose(0.0, PLACES["left"])
    hand.publish("left/pose", good, qos.POSES)
    hand.until(lambda: poses_of(hand, "left").get("used") == "1")
    not_a_number = hand.pose(math.nan, 6.0)
    no_rotation = hand.pose(0.0, 6.0)
    no_rotation.pose.orientation.w = 0.0
    bad = {
        "not a number": not_a_number,
        "not a rotation": no_rotation,
        "wrong frame": hand.pose(0.0, 6.0, frame="left/odom"),
        "too old": hand.pose(0.0, 6.0, late=3.0),
        "from the future": hand.pose(0.0, 6.0, late=-3.0),
    }
    for why, message in bad.items():
        hand.publish("left/pose", message, qos.POSES)
        hand.until(lambda why=why: poses_of(hand, "left").get(f"ignored: {why}") == "1", what=why)  # type: ignore[misc]
    assert {("pose invalid", "left"), ("clock offset", "left")} <= hand.warnings()
    told = poses_of(hand, "left")
    assert (told["used"], told["ignored"]) == ("1", "5")
    assert "poses.max_future" in told["last_ignored"]
    assert hand.diagnostics["/planner: poses of left"].level == b"\x01"
    assert hand.diagnostics["/planner: poses of middle"].level == b"\x01", "nothing has come yet"


def test_last_good_pose_stays_in_force(hand: Hand, planner: NodeProcess) -> None:
    """Good poses, one in ten of them followed by a bad one, are enough to begin a manoeuvre."""
    future = None
    for step in range(60):
        for name in ROBOTS:
            hand.publish(f"{name}/pose", hand.pose(0.0, PLACES[name]), qos.POSES)
            if step % 10 == 9:
                hand.publish(f"{name}/pose", hand.pose(math.inf, 99.0), qos.POSES)
        if step == 10:
            from std_srvs.srv import Trigger

            future = hand.ask_later(Trigger, "planner/begin/corner_left", Trigger.Request())
        hand.spin(0.05)
        if future is not None and future.done():
            break
    assert future is not None and future.done()
    assert future.result().success, future.result().message
    hand.until_state("moving")
    hand.trigger("halt")
    hand.until_state("held")
    assert not any(hand.commands.values()), "commands.publish is false: planned, not driven"


def test_a_manoeuvre_without_poses_is_refused(hand: Hand, planner: NodeProcess) -> None:
    hand.until_state("held", seconds=10.0)
    hand.trigger("abandon")
    hand.spin(1.3)  # poses.max_age passes
    answer = hand.trigger("begin/corner_left")
    assert not answer.success
    assert all(name in answer.message for name in ROBOTS)


BAD_NEIGHBOURS = {
    "malformed": ["{", "[]", '{"version": 1, "stamp": 1.0}', '{"version": 1, "stamp": NaN, "edges": []}',
                  '{"version": 1, "stamp": 9e9, "edges": [["left", "left"]]}', "[" * 50_000],
    "unknown robot": ['{"version": 1, "stamp": 9e9, "edges": [["left", "nobody"]]}'],
    "unknown version": ['{"version": 7, "stamp": 9e9, "edges": []}'],
}


def test_bad_neighbours_leave_the_graph_as_it_was(hand: Hand, planner: NodeProcess) -> None:
    told: list[Any] = []
    hand.node.create_subscription(
        String, "planner/neighbours_in_force", lambda message: told.append(json.loads(message.data)), qos.NEWEST_LATCHED
    )
    hand.until(lambda: len(told) == 1)
    texts = [text for group in BAD_NEIGHBOURS.values() for text in group]
    for text in texts:
        hand.publish("neighbours", String(data=text), qos.LATCHED)
        hand.spin(0.05)
    hand.until(lambda: hand.values("/planner: neighbours messages").get("ignored") == str(len(texts)))
    values = hand.values("/planner: neighbours messages")
    for why, group in BAD_NEIGHBOURS.items():
        assert values[f"ignored: {why}"] == str(len(group))
    assert values["used"] == "0"
    assert len(told) == 1


@pytest.mark.parametrize("text", [
    "nonsense", '{"id": 1}', '{"id": 1, "manoeuvre": "corner_left", "overrides": {"speed": "fast"}}',
])
def test_malformed_requests_are_counted(hand: Hand, planner: NodeProcess, text: str) -> None:
    before = int(hand.values("/planner: request messages")["ignored"])
    hand.publish("planner/request", String(data=text))
    hand.until(lambda: int(hand.values("/planner: request messages")["ignored"]) == before + 1)
    assert planner.status is None
