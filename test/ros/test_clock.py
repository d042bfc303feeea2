# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The system's clock is set while the fleet moves, ahead and back, for everyone and for the planner alone."""

from __future__ import annotations

from pathlib import Path

import pytest
from conftest import Site
from hand import ROBOTS, Hand

from coord_planner.ros.processes import NodeProcess

BRAKING = 1.0  # m/s^2, as in the site's parameters


class Clocks:
    """The clocks of planner and robots, as files with the seconds by which they are off."""

    def __init__(self, folder: Path) -> None:
        self.files = {name: folder / f"{name}.offset" for name in ("planner_node", "simulator_node")}
        self.set(0.0, *self.files)

    def set(self, offset: float, *names: str) -> None:
        for name in names:
            fresh = self.files[name].with_suffix(".new")
            fresh.write_text(str(offset))
            fresh.replace(self.files[name])  # at once, so that nobody reads half a number


@pytest.fixture(scope="module")
def clocks(site: Site) -> Clocks:
    return Clocks(site.folder)


@pytest.fixture(scope="module")
def planner(site: Site, hand: Hand, clocks: Clocks) -> NodeProcess:
    def start(module: str, *extra: str) -> NodeProcess:
        variables = {"CLOCK_OFFSET_FILE": str(clocks.files[module])}
        return site.start(module, *extra, script="set_clock.py", variables=variables)

    start("simulator_node")
    node = start("planner_node", "activate_on_start:=true")
    hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
    return node


@pytest.mark.parametrize(("jump", "names"), [
    (5.0, ("planner_node", "simulator_node")), (-5.0, ("planner_node", "simulator_node")), (-5.0, ("planner_node",)),
], ids=["ahead", "back", "planner alone"])
def test_the_clock_is_set_in_mid_turn(
    hand: Hand, planner: NodeProcess, clocks: Clocks, jump: float, names: tuple[str, ...]
) -> None:
    """The stop is the ordinary one: planner time did not jump. Then, with clocks that agree, a new manoeuvre."""
    hand.until_heard()
    hand.begin("corner_left")
    before = {name: len(hand.commands[name]) for name in ROBOTS}
    hand.statuses.clear()
    clocks.set(jump, *names)
    hand.until_state("held")
    told = [status["request_text"] for status in hand.statuses if status["state"] == "stopping"]
    assert any("stopping" in text for text in told)
    assert ("clock jumped", "") in hand.warnings()
    assert any("the clock jumped" in status["reason"] for status in hand.statuses)
    hand.until(lambda: hand.standing)
    for name in ROBOTS:
        speeds = [speed for _, speed in hand.commands[name][before[name] - 1:]]
        falls = [first - second for first, second in zip(speeds, speeds[1:])]
        assert max(falls) < 2.1 * BRAKING / 20.0, "ramped, 20 commands a second, one of which may be late"
        assert speeds[-1] == 0.0
    if len(names) == 1:
        hand.spin(1.3)  # poses.max_age passes
        refused = hand.trigger("resume")
        assert not refused.success
        assert "clocks" in refused.message
    assert hand.trigger("abandon").success
    clocks.set(0.0, *clocks.files)
    hand.until_heard()
    hand.complete()
    assert "Traceback" not in planner.output()
