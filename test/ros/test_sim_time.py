# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A simulated clock: not there yet, twice as fast as ours, and set back."""

from __future__ import annotations

import signal
import time
from pathlib import Path
from typing import Any

import pytest
from hand import Hand

from coord_planner.ros.processes import NodeProcess

# Every kind of pose and command that these machines' messages allow is met in this file.
KINDS = {
    " middle: {": " middle: {pose_source: pose_with_covariance, ",
    " right: {": " right: {pose_source: odometry, command_type: twist, ",
}
FAST = ("simulation.publish_clock:=true", "simulation.rate_factor:=2.0")


@pytest.fixture(scope="module")
def params(site: Any) -> Path:
    text = site.params().read_text()
    for plain, kind in KINDS.items():
        text = text.replace(plain, kind)
    file: Path = site.folder / "kinds.yaml"
    file.write_text(text)
    return file


@pytest.fixture(scope="module")
def planner(site: Any, params: Path, hand: Hand) -> NodeProcess:
    return site.start("planner_node", "use_sim_time:=true", "activate_on_start:=true", params=params)


def test_without_a_clock_nothing_begins(hand: Hand, planner: NodeProcess) -> None:
    hand.until(lambda: "/planner: fleet" in hand.diagnostics)
    assert "no clock yet" in hand.diagnostics["/planner: fleet"].message
    answer = hand.trigger("begin/corner_left")
    assert not answer.success
    assert "/clock" in answer.message
    assert not any(hand.commands.values())


def test_a_turn_faster_than_real_time(site: Any, params: Path, hand: Hand, planner: NodeProcess) -> None:
    simulator = site.start("simulator_node", *FAST, params=params)
    hand.until(lambda: len(hand.speeds) == 3)
    hand.until_heard()
    assert hand.trigger("begin/corner_left").success
    began, stamp = time.monotonic(), float(hand.status["stamp"])
    hand.until_state("ended")
    ratio = (float(hand.status["stamp"]) - stamp) / (time.monotonic() - began)
    assert 1.5 < ratio < 2.5
    assert hand.status["completed"] == "true"
    hand.until_state("idle")
    simulator.stop()


def test_a_clock_set_back_in_motion_is_a_new_beginning(
    site: Any, params: Path, hand: Hand, planner: NodeProcess
) -> None:
    first = site.start("simulator_node", *FAST, params=params, name="first")
    hand.until(lambda: "jumped back" in planner.output(), what="the new beginning of the clock")
    hand.until_heard()
    assert hand.trigger("begin/corner_right").success
    hand.until(lambda: hand.status["state"] == "moving" and float(hand.status["progress"]) > 0.2)
    first.signal(signal.SIGKILL)  # asked kindly, it would wait for its machines to stand
    hand.speeds.clear()
    # Everyone is back at the start, and so is the clock.
    site.start("simulator_node", *FAST, params=params, name="second")
    hand.until_state("idle")
    hand.until(lambda: hand.standing)
    hand.until_heard()
    assert hand.trigger("begin/corner_left").success, "poses from before the jump are forgotten"
    hand.until_state("moving")
    hand.trigger("halt")
    hand.until_state("held")
    assert "Traceback" not in planner.output()
