# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How soon poses turn into commands: python test/ros/measure_latency.py [ROBOTS] [POSES_A_SECOND]

Real nodes: a simulator that sends every robot's odometry, a planner that turns the line by 90 degrees. Printed, in
milliseconds, median and the value that 99 of 100 are below:

* pose to command: from the newest pose's arrival in the planner to the sending of commands to all robots;
* pose to plan, less the solve: from the newest pose's arrival to the plan made from it being in force, without the time
  that the solver itself took;
* plan waits: until the next command is sent, which has a beat of its own (plans are made for when they count);
* and the planner's processor time over the time that passed, all its threads together.
"""

from __future__ import annotations

import json
import os
import sys
import tempfile
import time
from pathlib import Path

os.environ.setdefault("AMENT_PREFIX_PATH", sys.prefix)
os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] = "LOCALHOST"

import numpy as np
from hand import Hand
from std_srvs.srv import Trigger

from coord_planner.ros import processes

HERE = Path(__file__).parent
SPACING = 3.0  # metres


def site(count: int, rate: float) -> str:
    """Robots side by side on an invented yard, each copying the one beside it."""
    names = [f"robot_{k + 1}" for k in range(count)]
    starts = "\n".join(
        f"      {name}: {{start_x: 0.0, start_y: {SPACING * (count - k)}}}" for k, name in enumerate(names)
    )
    edges = ", ".join(f'"{one} {other}"' for one, other in zip(names, names[1:]))
    return f"""
/**:
  ros__parameters:
    fleet: {{name: yard, invented: true, frame: map, listen_time: 0.2}}
    robots:
      names: [{", ".join(names)}]
{starts}
    robot_defaults: {{max_curvature: 0.8, max_curvature_rate: 0.6, max_speed: 1.4, max_acceleration: 0.6,
      max_braking: 1.0, speed_lag: 0.25, curvature_lag: 0.2, command_delay: 0.1, command_timeout: 0.5,
      pose_source: odometry, pose_topic: "{{name}}/odometry"}}
    graph: {{edges: [{edges}]}}
    site_rules: {{min_clearance: 0.6}}
    manoeuvres:
      names: [corner]
      corner: {{kind: equal_radius, angle_deg: 90.0, radius: 4.0, speed: 1.0}}
    simulation: {{seed: 1, pose_noise_xy: 0.02, pose_noise_heading_deg: 0.5, pose_rate: {rate}}}
"""


def measure(count: int, rate: float, folder: Path) -> dict[str, list[float]]:
    """The planner's figures over one manoeuvre."""
    params, out = folder / "site.yaml", folder / "measured.json"
    params.write_text(site(count, rate), encoding="utf-8")
    domain = int(os.environ.get("ROS_DOMAIN_ID") or processes.free_domain())
    simulator = processes.NodeProcess("simulator_node", [params], domain, folder / "simulator.log")
    planner = processes.NodeProcess(
        "planner_node", [params], domain, folder / "planner.log", extra=["-p", "activate_on_start:=true"],
        before=[str(HERE / "measured_planner.py")], variables={"MEASURED": str(out)},
    )
    hand = Hand(domain)
    try:
        hand.until(lambda: hand.status.get("active") == "true", what="an active planner")
        answer, end = _begun(hand), time.monotonic() + 60.0
        while not answer.success and time.monotonic() < end:
            hand.spin(1.0)
            answer = _begun(hand)
        assert answer.success, answer.message
        hand.until(out.exists, seconds=120.0, what="the end of the manoeuvre")
        hand.spin(0.5)
        assert hand.status["state"] != "held", hand.status
    finally:
        hand.close()
        planner.stop()
        simulator.stop()
    found: dict[str, list[float]] = json.loads(out.read_text(encoding="utf-8"))
    return found


def _begun(hand: Hand) -> Trigger.Response:
    """The answer to a begin; for many robots the reference takes its time on a busy machine."""
    future = hand.ask_later(Trigger, "planner/begin/corner", Trigger.Request())
    hand.until(future.done, seconds=400.0, what="an answer")
    return future.result()


def _say(line: str) -> None:
    sys.stdout.write(line + "\n")


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    rate = float(sys.argv[2]) if len(sys.argv) > 2 else 50.0
    with tempfile.TemporaryDirectory() as folder:
        found = measure(count, rate, Path(folder))
    share = found.pop("cpu") / (wall := found.pop("wall"))  # type: ignore[operator]
    arrived = found.pop("poses")
    _say(f"{count} robots, {arrived / wall:.0f} poses a second arrived, {wall:.1f} s in motion")  # type: ignore[operator]
    for name, seconds in found.items():
        values = 1e3 * np.array(seconds)
        middle, most = np.percentile(values, [50, 99])
        _say(f"{name.replace('_', ' '):26s} median {middle:6.2f} ms   99 % {most:6.2f} ms")
    _say(f"processor time of the planner: {share:.2f} of a core")


if __name__ == "__main__":
    main()
