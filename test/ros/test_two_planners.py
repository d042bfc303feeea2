# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Two planners on one fleet: the second does not become active; should both be active, both stop."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from pathlib import Path

import pytest
from conftest import Site
from hand import ACTIVATE, DEACTIVATE, Hand
from std_msgs.msg import String

from coord_planner.ros import messages
from coord_planner.ros.processes import NodeProcess

TURN = "corner_left"


@pytest.fixture(scope="module")
def params(site: Site) -> Path:
    """They listen as long as they do in the field."""
    text = site.params("activate_on_start: true").read_text()
    assert "listen_time: 0.2" in text
    file: Path = site.folder / "listening.yaml"
    file.write_text(text.replace(", listen_time: 0.2", ""))
    return file


@pytest.fixture(scope="module")
def planner(site: Site, hand: Hand, params: Path) -> NodeProcess:
    site.start("simulator_node", params=params)
    node = site.start("planner_node", params=params)
    hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
    return node


@pytest.fixture(scope="module")
def second_hand(site: Site) -> Iterator[Hand]:
    made = Hand(site.domain, planner="second", name="second_hand")
    yield made
    made.close()


@pytest.fixture(scope="module")
def second(site: Site, params: Path, planner: NodeProcess, second_hand: Hand) -> NodeProcess:
    """By another name, told to become active when it starts."""
    node = site.start("planner_node", params=params, renamed="second")
    second_hand.until(lambda: "not activated" in node.output(), what="a refusal")
    return node


def test_the_second_one_does_not_become_active(hand: Hand, second: NodeProcess, second_hand: Hand) -> None:
    assert second_hand.lifecycle() == "inactive"
    assert not second_hand.transition(ACTIVATE)
    assert "/planner (fleet test_yard" in second.output(), "it says whom it heard"
    assert second_hand.diagnostics["/second: fleet"].level == b"\x01"
    hand.complete()


def test_a_second_one_of_the_same_name_does_not_become_active(
    site: Site, params: Path, hand: Hand, planner: NodeProcess
) -> None:
    node = site.start("planner_node", params=params, name="same")
    hand.until(lambda: "not activated" in node.output(), what="a refusal")
    node.stop()
    hand.complete()


def test_when_both_drive_both_stop(
    hand: Hand, planner: NodeProcess, second: NodeProcess, second_hand: Hand
) -> None:
    """The first hangs, the second takes over, the first wakes up: no robot that stood is driven on by it."""
    hand.begin(TURN)
    planner.signal(signal.SIGSTOP)
    hand.until(lambda: hand.standing, what="robots that stop by themselves")
    hand.spin(1.5)
    assert second_hand.transition(ACTIVATE)
    second_hand.until_heard()
    second_hand.begin(TURN, to=0.2)
    hand.statuses.clear()
    planner.signal(signal.SIGCONT)
    second_hand.until_state("held")
    assert ("other planner heard", "") in second_hand.warnings()
    hand.until(lambda: bool(hand.statuses) and hand.status["state"] == "idle", what="the first one's new beginning")
    assert "held up" in hand.status["reason"]
    hand.until(lambda: ("other planner heard", "") in hand.warnings(), what="a warning of the first one")
    hand.until(lambda: hand.standing)
    for person in (hand, second_hand):
        refused = person.trigger("resume" if person is second_hand else f"begin/{TURN}")
        assert not refused.success
        assert "drives this fleet too" in refused.message
    assert second_hand.trigger("abandon").success
    assert second_hand.transition(DEACTIVATE)
    hand.until(lambda: hand.status["warnings"] == "[]", what="silence")
    hand.complete()
    assert "Traceback" not in planner.output() + second.output()


def test_a_heartbeat_in_motion_stops_the_fleet(hand: Hand, planner: NodeProcess) -> None:
    hand.statuses.clear()
    hand.begin(TURN)
    for text in ("nonsense", "{}", '{"version": 1, "fleet": "test_yard", "run": 7}', "[" * 90_000):
        hand.publish("planner/heartbeat", String(data=text))
    elsewhere = messages.Beat("test_yard", "elsewhere", "/other/planner", frozenset({"/other/left/cmd_vel"}))
    for _ in range(5):
        hand.publish("planner/heartbeat", String(data=messages.heartbeat_text(elsewhere)))
        hand.spin(0.1)
    assert hand.status["state"] == "moving", "junk, and a planner of other robots"
    assert hand.values("/planner: heartbeat messages")["ignored"] != "0"
    stranger = messages.heartbeat_text(messages.Beat("test_yard", "stranger"))
    for _ in range(10):
        hand.publish("planner/heartbeat", String(data=stranger))
        hand.spin(0.1)
    hand.until_state("held")
    assert ("other planner heard", "") in hand.warnings()
    assert hand.trigger("abandon").success
    hand.spin(1.2)
    hand.complete()
