# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How a planner ends in motion: asked once, asked twice, or killed."""

from __future__ import annotations

import signal
import time
from pathlib import Path

import pytest
from conftest import Site
from hand import ROBOTS, Hand

from coord_planner.ros.processes import NodeProcess

BRAKING = 1.0  # m/s^2, as in the site's parameters


@pytest.fixture(scope="module")
def simulator(site: Site, hand: Hand) -> NodeProcess:
    return site.start("simulator_node")


def moving_planner(site: Site, hand: Hand, name: str) -> NodeProcess:
    """A planner whose fleet is in the middle of a turn."""
    hand.statuses.clear()
    for commands in hand.commands.values():
        commands.clear()
    node = site.start("planner_node", params=site.params("activate_on_start: true"), name=name)
    hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
    hand.until_heard()
    answer = hand.trigger("begin/corner_left")
    assert answer.success, answer.message
    hand.until(lambda: hand.status["state"] == "moving" and float(hand.status["progress"]) > 0.25)
    assert min(hand.speeds.values()) > 0.2
    return node


def wait_for_end(hand: Hand, node: NodeProcess, seconds: float) -> int:
    hand.until(lambda: node.status is not None, seconds, "the end of the planner")
    assert node.status is not None
    return node.status


def fastest_braking(commands: list[tuple[float, float]]) -> float:
    """Largest fall of the commanded speed over a quarter of a second, m/s^2."""
    falls = [
        (first[1] - second[1]) / (second[0] - first[0])
        for first, second in zip(commands, commands[5:]) if second[0] > first[0]
    ]
    return max(falls, default=0.0)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_one_signal_ramps_a_stop_and_ends_well(
    site: Site, hand: Hand, simulator: NodeProcess, number: int
) -> None:
    node = moving_planner(site, hand, f"signal{int(number)}")
    node.signal(number)
    assert wait_for_end(hand, node, 30.0) == 0, node.output()
    hand.until(lambda: hand.standing, 2.0)
    for name in ROBOTS:
        assert hand.commands[name][-1][1] == 0.0, "the last word is zero"
        # Timed where they arrive, so a little more than the braking rate is let pass.
        assert 0.1 < fastest_braking(hand.commands[name][-60:]) < 1.3 * BRAKING
    assert "Traceback" not in node.output()


def test_a_second_signal_sends_zeros_at_once(site: Site, hand: Hand, simulator: NodeProcess) -> None:
    node = moving_planner(site, hand, "twice")
    node.signal(signal.SIGTERM)
    hand.until_state("stopping")
    hand.spin(0.35)  # signals that come together count once
    before = {name: hand.commands[name][-1][1] for name in ROBOTS}
    assert min(before.values()) > 0.05, "still ramping"
    began = time.monotonic()
    node.signal(signal.SIGTERM)
    assert wait_for_end(hand, node, 30.0) == 1
    assert time.monotonic() - began < 2.0
    hand.spin(0.3)
    assert all(hand.commands[name][-1][1] == 0.0 for name in ROBOTS)
    hand.until(lambda: hand.standing, 3.0)


def test_an_idle_planner_ends_at_once(site: Site, hand: Hand, tmp_path: Path) -> None:
    node = site.start("planner_node", name="idle")
    assert hand.lifecycle() == "unconfigured"
    began = time.monotonic()
    node.signal(signal.SIGTERM)
    assert node.wait(5.0) == 0
    assert time.monotonic() - began < 3.0


@pytest.mark.parametrize(("more", "words"), [
    ("coupling: {strenght: 1.0}", "coupling.strenght"),
    ("nonsense: [", "site.yaml"),
])
def test_bad_parameter_files_end_with_status_2(site: Site, more: str, words: str) -> None:
    text = site.params().read_text().replace("    coupling: {strength: 1.0}\n", "")
    file = site.folder / "bad_site.yaml"
    file.write_text(f"{text}    {more}\n")
    for module in ("planner_node", "simulator_node"):
        node = site.start(module, params=file, name=f"bad_{module}")
        assert node.wait(15.0) == 2, node.output()
        assert words in node.output()
        assert "Traceback" not in node.output()


# The last one: until its lease ends, what is left of the killed node seems to offer services.
def test_robots_stop_by_themselves_when_the_planner_falls_silent(
    site: Site, hand: Hand, simulator: NodeProcess
) -> None:
    node = moving_planner(site, hand, "killed")
    speed = max(hand.speeds.values())
    node.signal(signal.SIGKILL)
    node.wait(2.0)
    began = time.monotonic()
    assert not hand.standing
    hand.until(lambda: hand.standing, 5.0, "standing robots")
    timeout, lag = 0.5, 0.5
    assert time.monotonic() - began < timeout + speed / BRAKING + lag
    assert hand.commands["left"][-1][1] > 0.2, "no zeros were sent: it was the robots' own time-out"
