# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Real nodes as processes of their own, each group on a ROS domain of its own, and a hand that plays the person."""

from __future__ import annotations

import importlib.util
import os
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from coord_planner.ros import processes

if importlib.util.find_spec("rclpy") is None:
    collect_ignore_glob = ["test_*.py"]  # a machine without ROS: `make ros` says so instead of failing


def pytest_configure(config: pytest.Config) -> None:
    """Load ROS before anything is captured: its wheels start Python anew to find their libraries."""
    if importlib.util.find_spec("rclpy") is None:
        return
    os.environ.setdefault("AMENT_PREFIX_PATH", sys.prefix)
    os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] = "LOCALHOST"
    capture = config.pluginmanager.getplugin("capturemanager")
    with capture.global_and_fixture_disabled():
        import rclpy  # noqa: F401


# Three robots abreast, turning on a wide enough curve; invented. Small, so that ticks are short on a busy machine.
SITE = """
/**:
  ros__parameters:
    fleet: {name: test_yard, frame: map, listen_time: 0.2}
    robots:
      names: [left, middle, right]
      left: {start_x: 0.0, start_y: 6.0}
      middle: {start_x: 0.0, start_y: 3.0}
      right: {start_x: 0.0, start_y: 0.0}
    robot_defaults: {max_curvature: 0.8, max_curvature_rate: 0.8, max_speed: 1.4, max_acceleration: 0.8,
      max_braking: 1.0, speed_lag: 0.2, curvature_lag: 0.15, command_delay: 0.05, command_timeout: 0.5}
    graph: {edges: ["left middle", "middle right"]}
    coupling: {strength: 1.0}
    horizon: {intervals: 12, interval: 0.4, rate: 5.0, budget: 0.18, lead: 1.0}
    commands: {rate: 20.0}
    poses: {max_age: 1.0}
    site_rules: {min_clearance: 0.6, max_speed: 1.4}
    manoeuvres:
      names: [corner_left, corner_right, nudge]
      corner_left: {kind: equal_radius, angle_deg: 60.0, radius: 3.0, speed: 1.2}
      corner_right: {kind: equal_radius, angle_deg: -60.0, radius: 3.0, speed: 1.2}
      nudge: {kind: equal_radius, angle_deg: 5.0, radius: 3.0, speed: 0.6}
    simulation: {seed: 3, pose_noise_xy: 0.01, pose_noise_heading_deg: 0.3, pose_rate: 20.0}
"""


class Site:
    """Files and nodes of one test group.

    Attributes:
        domain: ROS domain that all of them talk on. folder: for logs and parameter files.
    """

    def __init__(self, folder: Path) -> None:
        self.folder, self.domain = folder, processes.free_domain()
        self._nodes: list[processes.NodeProcess] = []

    def params(self, more: str = "", *, each: str = "") -> Path:
        """The site's parameter file, with more lines at the level of its groups, and more keys for each robot."""
        file = self.folder / "site.yaml"
        text = SITE.replace("robot_defaults: {", f"robot_defaults: {{{each}, ") if each else SITE
        file.write_text(text + "".join(f"    {line}\n" for line in more.splitlines()))
        return file

    def start(self, module: str, *extra: str, params: Path | None = None, name: str = "", renamed: str = "",
              within: str = "", script: str = "", variables: dict[str, str] | None = None) -> processes.NodeProcess:
        """Start a node; what it says goes to a file in the folder.

        Args:
            extra: parameters, ``key:=value``. renamed, within: its node's name and namespace.
            script: of this folder, to run it with.
        """
        log = self.folder / f"{name or renamed or module}.log"
        options = [word for item in extra for word in ("-p", item)]
        options += ["-r", f"__node:={renamed}"] if renamed else []
        options += ["-r", f"__ns:={within}"] if within else []
        before = [str(Path(__file__).with_name(script))] if script else []
        node = processes.NodeProcess(module, [params or self.params()], self.domain, log, extra=options,
                                     before=before, variables=variables)
        self._nodes.append(node)
        return node

    def close(self) -> None:
        for node in reversed(self._nodes):  # planners before their robots
            node.stop()


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Site]:
    made = Site(tmp_path_factory.mktemp("site"))
    yield made
    made.close()


@pytest.fixture(scope="module")
def hand(site: Site) -> Iterator[Any]:
    from hand import Hand

    made = Hand(site.domain)
    yield made
    made.close()
