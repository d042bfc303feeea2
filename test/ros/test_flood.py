# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A peer floods every input with junk: the planner outlives it, answers, and finishes a new manoeuvre afterwards."""

from __future__ import annotations

import math
import os
import subprocess
import sys
import time
from pathlib import Path

import pytest
from conftest import Site
from hand import ROBOTS, Hand

from coord_planner.ros import processes
from coord_planner.ros.processes import NodeProcess

JUNK, EVERYTHING = 5.0, 5.0  # seconds
TOP_SPEED = 1.4  # m/s, as in the site's parameters


@pytest.fixture(scope="module")
def planner(site: Site, hand: Hand) -> NodeProcess:
    params = site.params("activate_on_start: true", each="ready_required: true")
    site.start("simulator_node", params=params)
    node = site.start("planner_node", params=params)
    hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
    return node


def test_a_flood_is_outlived(site: Site, hand: Hand, planner: NodeProcess) -> None:
    hand.until_heard()
    hand.begin("corner_left", to=0.05)
    script = Path(__file__).with_name("flooding_peer.py")
    command = ["timeout", "-k", "5", "60", sys.executable, str(script), str(JUNK), str(EVERYTHING), *ROBOTS]
    environment = {**os.environ, **processes.environment(site.domain)}
    asked, longest, memory = 0, 0.0, _memory(site)
    with subprocess.Popen(command, env=environment, stdout=subprocess.PIPE, text=True) as peer:
        while peer.poll() is None:
            began = time.monotonic()
            assert hand.lifecycle() == "active"
            asked, longest = asked + 1, max(longest, time.monotonic() - began)
            hand.spin(0.2)
        told = peer.communicate()[0]
    assert peer.returncode == 0
    assert asked > 5, told
    assert planner.status is None
    hand.until_state("held", "idle", "ended", seconds=20.0)
    hand.until(lambda: hand.standing)
    for name in ROBOTS:
        assert all(math.isfinite(speed) and -0.01 < speed < TOP_SPEED + 0.01 for _, speed in hand.commands[name])
    for source in ("neighbours", "request", "heartbeat"):
        assert int(hand.values(f"/planner: {source} messages")["ignored"]) > 10, told
    assert int(hand.values("/planner: poses of left")["ignored"]) > 10, told
    if hand.status["state"] == "held":
        assert hand.trigger("abandon").success
    hand.until(lambda: all(hand.diagnostics[f"/planner: readiness of {name}"].level == b"\x00" for name in ROBOTS))
    hand.complete()
    assert "Traceback" not in planner.output()
    assert len(planner.output()) < 100_000, "the log is no flood"
    grown = _memory(site) - memory
    assert grown < 100.0, told
    sys.stderr.write(f"{told}longest answer {longest:.3f} s, {hand.status['ticks_left_out']} ticks left out, "
                     f"{grown:.0f} MB more memory\n")


def _memory(site: Site) -> float:
    """Resident memory of the planner, megabytes."""
    for folder in Path("/proc").glob("[0-9]*"):
        try:
            words = (folder / "cmdline").read_text().split("\0")
            pages = int((folder / "statm").read_text().split()[1])
        except OSError:
            continue  # it has just ended
        ours = any(word.startswith(str(site.folder)) for word in words)
        if words[1:3] == ["-m", "coord_planner.ros.planner_node"] and ours:  # not `timeout`, which started it
            return pages * os.sysconf("SC_PAGE_SIZE") / 1e6
    raise AssertionError("no planner")
