# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Faults in mid-turn over real processes. After each the node is alive, answers, and finishes a new manoeuvre."""

from __future__ import annotations

import math
import signal
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from conftest import Site
from geometry_msgs.msg import Vector3
from hand import ACTIVATE, CLEANUP, CONFIGURE, DEACTIVATE, ROBOTS, Hand
from std_msgs.msg import Bool

from coord_planner.ros.processes import NodeProcess

TURN = "corner_left"


@pytest.fixture(scope="module")
def params(site: Site) -> Path:
    return site.params(each="ready_required: true")


@pytest.fixture(scope="module")
def simulators(site: Site, params: Path) -> list[NodeProcess]:
    return [site.start("simulator_node", params=params)]


@pytest.fixture(scope="module")
def planner(site: Site, params: Path, hand: Hand, simulators: list[NodeProcess]) -> NodeProcess:
    node = site.start("planner_node", "activate_on_start:=true", params=params)
    hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
    return node


@pytest.fixture(autouse=True)
def outlived(hand: Hand, planner: NodeProcess) -> Iterator[None]:
    """After each test a new manoeuvre is finished."""
    hand.statuses[:-1] = []
    yield
    if planner.status is not None:
        return  # it was killed; the test itself has seen to its successor
    if hand.status["state"] == "held":
        assert hand.trigger("abandon").success
    hand.complete()
    assert hand.lifecycle() == "active"
    assert planner.status is None
    assert "Traceback" not in planner.output()


def until_stopped(hand: Hand, code: str, robot: str = "") -> None:
    """Until the fleet has been stopped for a reason that is told, and stands."""
    hand.until_state("stopping", "held")
    hand.until_state("held")
    assert (code, robot) in hand.warnings()
    hand.until(lambda: hand.standing, what="standing robots")


def shift(hand: Hand, x: float, *names: str) -> None:
    for name in names:
        hand.publish(f"{name}/simulated_pose_shift", Vector3(x=x))


def test_a_robot_that_is_not_ready_stops_the_fleet_and_keeps_it(hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN)
    hand.publish("middle/simulated_ready", Bool(data=False))
    until_stopped(hand, "robot not ready", "middle")
    refused = hand.trigger("resume")
    assert not refused.success
    assert "middle" in refused.message
    hand.publish("middle/simulated_ready", Bool(data=True))
    hand.until(lambda: hand.diagnostics["/planner: readiness of middle"].level == b"\x00", what="a ready robot")
    hand.spin(0.5)
    assert hand.standing, "only a person moves a stopped fleet again"
    assert hand.trigger("resume").success
    hand.until_state("ended")
    assert hand.status["completed"] == "true"
    hand.until_state("idle")


def test_one_pose_jumps(hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN)
    shift(hand, 2.0, "left")
    until_stopped(hand, "pose jumped", "left")
    shift(hand, 0.0, "left")
    hand.spin(0.3)


def test_all_poses_jump(hand: Hand, planner: NodeProcess) -> None:
    """As when localisation corrects its map; the shift stays, and the fleet goes on in the map as it is now."""
    hand.begin(TURN)
    shift(hand, -3.0, *ROBOTS)
    hand.until_state("held")
    assert any(code == "pose jumped" for code, _ in hand.warnings())
    hand.until(lambda: hand.standing)


NONSENSE: list[dict[str, Any]] = [
    {"coupling__strength": math.nan}, {"coupling__strength": -1.0}, {"coupling__strength": "strong"},
    {"coupling__strength": math.inf}, {"coupling__strength": [1.0, 2.0]}, {"coupling__strength": True},
    {"robots__left__max_speed": -1.0}, {"robots__left__min_speed": 9.0}, {"robots__left__enabled": 7},
    {"prices__end": 0.0}, {"site_rules__min_clearance": math.nan},
    {"poses__max_age": 0.0}, {"robots__names": ["left"]}, {"horizon__intervals": 10**12},
    {"fleet__frame": "elsewhere"}, {"use_sim_time": True}, {"use_sim_time": 1.5}, {"no__such__key": 1.0},
    {"coupling__strength": 2.0, "robots__right__max_braking": -1.0},
]


def test_nonsense_parameters_change_nothing(hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN, to=0.1)
    for values in NONSENSE:
        result = hand.set(**values)
        assert not result.successful, values
        assert result.reason, values
        assert len(result.reason) < 2000, values
    assert hand.status["state"] == "moving"
    assert float(hand.status["coupling_asked"]) == 1.0
    hand.until_state("ended", "held")
    assert hand.status["completed"] == "true"


def test_transitions_in_the_wrong_order_change_nothing(hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN, to=0.1)
    for transition in (CONFIGURE, ACTIVATE, CLEANUP, 99):
        assert not hand.transition(transition), transition
    assert hand.lifecycle() == "active"
    assert hand.status["state"] == "moving"
    assert not hand.transition(DEACTIVATE), "refused in motion, and halts"
    hand.until_state("held")
    assert hand.transition(DEACTIVATE)
    for transition in (DEACTIVATE, CONFIGURE, 99):
        assert not hand.transition(transition), transition
    sent = {name: len(hand.commands[name]) for name in ROBOTS}
    assert hand.transition(CLEANUP)
    assert not hand.transition(ACTIVATE)
    for transition in (CONFIGURE, ACTIVATE):
        assert hand.transition(transition)
    hand.spin(0.5)
    assert sent == {name: len(hand.commands[name]) for name in ROBOTS}, "activation moves nothing"


def test_one_who_joins_late_knows_how_things_are(site: Site, hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN)
    late = Hand(site.domain, name="late")
    try:
        late.until(lambda: late.status.get("manoeuvre") == TURN and late.status["state"] == "moving")
        assert late.trigger("halt").success
        late.until_state("held")
    finally:
        late.close()
    hand.until_state("held")


def test_the_robots_vanish(site: Site, params: Path, hand: Hand, planner: NodeProcess,
                           simulators: list[NodeProcess]) -> None:
    hand.begin(TURN)
    simulators[-1].signal(signal.SIGKILL)
    hand.until_state("held")
    told = hand.warnings()
    assert {code for code, _ in told} & {"pose old", "robot silent"}
    refused = hand.trigger("resume")
    assert not refused.success
    hand.until(lambda: hand.diagnostics["/planner: readiness of left"].level == b"\x03", what="a silent robot")
    # They come back somewhere else.
    simulators.append(site.start("simulator_node", params=params, name="second_simulator"))
    hand.until_heard()
    hand.until(lambda: hand.diagnostics["/planner: readiness of left"].level == b"\x00", what="a ready robot")


# The last one: until its lease ends, what is left of the killed node seems to offer services.
def test_the_planner_is_killed_and_started_anew(site: Site, params: Path, hand: Hand, planner: NodeProcess) -> None:
    hand.begin(TURN)
    planner.signal(signal.SIGKILL)
    hand.until(lambda: hand.standing, what="robots that stop by themselves")
    sent = {name: len(hand.commands[name]) for name in ROBOTS}
    second = site.start("planner_node", "activate_on_start:=true", params=params, name="second_planner")
    fresh = Hand(site.domain, name="fresh")
    try:
        fresh.until(lambda: fresh.status.get("active") == "true", what="an active planner")
        fresh.spin(1.0)
        assert fresh.status["state"] == "idle"
        assert not any(fresh.commands.values()), "it moves nothing until it is told to"
        assert sent == {name: len(hand.commands[name]) for name in ROBOTS}
        fresh.complete()
        assert second.status is None
        assert "Traceback" not in second.output()
    finally:
        fresh.close()
