# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The demo on the small site: to its end, and interrupted."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from conftest import Site

from coord_planner.record.review import review

RUN = "import sys; from coord_planner.ros.demo import run_demo; sys.exit(run_demo(sys.argv[1], sys.argv[2]))"


def start(site: Site, out: Path) -> subprocess.Popen[str]:
    return subprocess.Popen(
        ["timeout", "-k", "5", "90", sys.executable, "-c", RUN, str(site.params()), str(out)],
        stderr=subprocess.PIPE, text=True, start_new_session=True,
    )


def nodes_of(site: Site) -> list[str]:
    """Command lines of processes that were given this site's parameter file as nodes."""
    found = []
    for file in Path("/proc").glob("[0-9]*/cmdline"):
        try:
            words = file.read_text().split("\0")
        except OSError:
            continue  # it has just ended
        if str(site.params()) in words and "--params-file" in words:
            found.append(" ".join(words))
    return found


def test_the_demo_completes_its_turn_in_spite_of_a_slowed_robot(site: Site, tmp_path: Path) -> None:
    demo = start(site, tmp_path / "out")
    _, words = demo.communicate(timeout=95)
    assert demo.returncode == 0, words
    assert "reaches only 30 % of its speed" in words
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert summary["completed"]
    assert (summary["contacts"], summary["limit_violations"]) == (0, 0)
    assert max(summary["end_error_m"].values()) <= 0.10
    assert (tmp_path / "out" / "page.html").stat().st_size > 10_000
    seen = review(tmp_path / "out" / "bag").figures
    assert seen["messages_read"] == seen["messages_expected"] > 1000 and seen["losses"] == []
    assert seen["min_clearance_m"] == pytest.approx(summary["min_clearance_m"], abs=1e-3)
    (turn,) = seen["turns"]
    for name, change in summary["heading_change_rad"].items():
        assert turn["heading_change_rad"][name] == pytest.approx(change, abs=0.01)
    assert nodes_of(site) == []


def test_an_interrupted_demo_leaves_nothing_running(site: Site, tmp_path: Path) -> None:
    demo = start(site, tmp_path / "out")
    assert demo.stderr is not None
    end = time.monotonic() + 30.0
    while "smallest" not in demo.stderr.readline():  # the turn is begun
        assert time.monotonic() < end
    assert len(nodes_of(site)) >= 2
    os.killpg(demo.pid, signal.SIGINT)
    demo.communicate(timeout=30)
    assert demo.returncode == 1
    assert nodes_of(site) == []
