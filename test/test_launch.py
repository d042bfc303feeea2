# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The launch files under the real launch and launch_ros, where these are installed (they are not on PyPI)."""

from __future__ import annotations

import importlib.util
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from test_packaging import find_installed, heard_from

pytestmark = pytest.mark.skipif(
    not all(importlib.util.find_spec(name) for name in ("launch", "launch_ros")),
    reason="launch and launch_ros are not installed",
)
# What `ros2 launch FILE NAME:=VALUE ...` does, without ros2cli.
RUN = """
import sys
from launch import LaunchDescription, LaunchService
from launch.actions import IncludeLaunchDescription
from launch.launch_description_sources import AnyLaunchDescriptionSource

given = [tuple(argument.split(":=", 1)) for argument in sys.argv[2:]]
included = IncludeLaunchDescription(AnyLaunchDescriptionSource(sys.argv[1]), launch_arguments=given)
service = LaunchService(noninteractive=False)
service.include_launch_description(LaunchDescription([included]))
sys.exit(service.run())
"""


@pytest.fixture
def share() -> Path:
    return find_installed() / "share" / "coord_planner"


@contextmanager
def launched(file: Path, *arguments: str) -> Iterator[subprocess.Popen[str]]:
    """A launch in a process group of its own, as a terminal would start it."""
    process = subprocess.Popen(
        [sys.executable, "-c", RUN, str(file), *arguments],
        stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, start_new_session=True,
    )
    try:
        yield process
    finally:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.communicate()


def ctrl_c(process: subprocess.Popen[str]) -> str:
    """What the launch printed until its end; the terminal sends the signal to everyone in the group."""
    os.killpg(process.pid, signal.SIGINT)
    output, _ = process.communicate(timeout=45)
    return output


@contextmanager
def listener() -> Iterator[Any]:
    import rclpy

    rclpy.init()
    try:
        yield rclpy.create_node("listener")
    finally:
        rclpy.shutdown()


def ask(node: Any, kind: type, name: str, request: Any) -> Any:
    """The answer of a service."""
    import rclpy

    client = node.create_client(kind, name)
    assert client.wait_for_service(timeout_sec=20.0), f"no service {name}"
    future = client.call_async(request)
    rclpy.spin_until_future_complete(node, future, timeout_sec=30.0)
    assert future.done(), f"no answer from {name}"
    return future.result()


def state_and_clock(node: Any, planner: str) -> tuple[str, bool]:
    """Lifecycle state of a planner and its use_sim_time."""
    from lifecycle_msgs.srv import GetState
    from rcl_interfaces.srv import GetParameters

    label = ask(node, GetState, f"{planner}/get_state", GetState.Request()).current_state.label
    request = GetParameters.Request(names=["use_sim_time"])
    return label, ask(node, GetParameters, f"{planner}/get_parameters", request).values[0].bool_value


@pytest.mark.parametrize("use_sim_time", ["false", "true"])
def test_fleet_waits_for_a_person(share: Path, use_sim_time: str) -> None:
    given = f"params:={share / 'config/solar_park.yaml'}", "namespace:=yard", f"use_sim_time:={use_sim_time}"
    with launched(share / "launch/fleet.launch.py", *given) as run:
        assert heard_from("/yard/planner")
        with listener() as node:
            assert state_and_clock(node, "/yard/planner") == ("unconfigured", use_sim_time == "true")
        output = ctrl_c(run)
    assert run.returncode == 0, output
    assert "process has finished cleanly" in output
    assert "escalating" not in output


def test_fleet_needs_a_parameter_file(share: Path) -> None:
    with launched(share / "launch/fleet.launch.py") as run:
        output, _ = run.communicate(timeout=30)
    assert run.returncode == 1
    assert "missing required argument 'params'" in output


def test_fleet_gets_its_time_to_stop(share: Path) -> None:
    """The planner is not hurried for as long as ``stop_time`` says: one that does not answer gets SIGTERM after it."""
    file = share / "config" / "solar_park.yaml"
    with launched(share / "launch/fleet.launch.py", f"params:={file}", "stop_time:=3.0") as run:
        assert heard_from("/planner")
        planner = child(run.pid, "planner_node")
        os.kill(planner, signal.SIGSTOP)
        began = time.monotonic()
        os.killpg(run.pid, signal.SIGINT)
        time.sleep(2.0)
        output = ""
        while "escalating to 'SIGTERM'" not in output and time.monotonic() - began < 20.0:
            assert run.stdout is not None
            output += run.stdout.readline()
        assert time.monotonic() - began >= 3.0
        os.kill(planner, signal.SIGCONT)
        run.communicate(timeout=30)
    assert "'3.0' seconds" in output


def test_rehearsal_turns_and_stops_in_step_at_ctrl_c(share: Path) -> None:
    from std_srvs.srv import Trigger

    with launched(share / "launch/rehearsal.launch.py", "namespace:=yard") as run:
        assert heard_from("/yard/planner")
        assert heard_from("/yard/simulator")
        with listener() as node:
            answer = begin_when_active(node, "/yard/planner/begin/corner_left", Trigger)
            assert state_and_clock(node, "/yard/planner") == ("active", True)
        assert answer.success, answer.message
        time.sleep(2.0)
        output = ctrl_c(run)
    assert run.returncode == 0, output
    assert output.count("process has finished cleanly") == 2, output
    assert "escalating" not in output
    assert "[ERROR]" not in output, output


def begin_when_active(node: Any, service: str, kind: type, patience: float = 20.0) -> Any:
    """The answer to a begin, asked again while the planner has no poses yet."""
    until = time.monotonic() + patience
    while True:
        answer = ask(node, kind, service, kind.Request())  # type: ignore[attr-defined]
        if answer.success or time.monotonic() > until:
            return answer
        time.sleep(0.5)


def child(parent: int, name: str) -> int:
    """Process id of a descendant whose command line holds ``name``."""
    for folder in Path("/proc").iterdir():
        if not folder.name.isdigit():
            continue
        try:
            words = (folder / "cmdline").read_bytes().split(b"\0")
            group = int((folder / "stat").read_text().rsplit(")", 1)[1].split()[2])
        except OSError:
            continue
        if group == parent and any(Path(word.decode()).name == name for word in words):
            return int(folder.name)
    raise AssertionError(f"no {name} was started")
