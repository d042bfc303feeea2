# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A planner that writes down its inner moments: python measured_planner.py planner_node --ros-args ...

The figures go to the file that MEASURED names, as JSON, when the planner ends.
"""

from __future__ import annotations

import json
import os
import runpy
import sys
import time
from pathlib import Path
from typing import Any

from coord_planner.core.coordinator import Coordinator
from coord_planner.core.messages import Decision, Snapshot, State
from coord_planner.ros.inbox import Inbox
from coord_planner.ros.outbox import Outbox

FIGURES: dict[str, list[float]] = {
    name: [] for name in ("pose_to_command", "pose_to_plan_less_solve", "plan_waits", "solve", "step", "command_run")
}


class Moments:
    """Seconds on a clock that never goes back. A plan is in force when the step that found it ends."""

    pose = 0.0  # when the newest pose had arrived
    planned = 0.0  # when the newest plan came into force; 0 once a command has been sent of it
    cpu = wall = 0.0  # when the motion began
    poses = 0


def wrap(owner: type, name: str, after: Any) -> None:
    """Let ``after`` see each call of a method: (began, result, arguments)."""
    inner = getattr(owner, name)

    def outer(self: Any, *args: Any, **kwargs: Any) -> Any:
        began = time.perf_counter()
        found = inner(self, *args, **kwargs)
        after(began, found, self, *args)
        return found

    setattr(owner, name, outer)


def on_pose(_began: float, *_rest: object) -> None:
    Moments.pose = time.perf_counter()
    Moments.poses += 1


def on_step(pose: float, began: float, decision: Decision) -> None:
    ended = time.perf_counter()
    if decision.state is not State.MOVING or not decision.solve_time:
        return
    if not Moments.wall:
        Moments.wall, Moments.cpu, Moments.poses = ended, time.process_time(), 0
    FIGURES["step"].append(ended - began)
    FIGURES["solve"].append(decision.solve_time)
    FIGURES["pose_to_plan_less_solve"].append(ended - pose - decision.solve_time)
    Moments.planned = ended


def on_send(began: float, *_rest: object) -> None:
    if not Moments.wall:
        return
    ended = time.perf_counter()
    FIGURES["pose_to_command"].append(ended - min(Moments.pose, began))
    FIGURES["command_run"].append(ended - began)
    if Moments.planned:
        FIGURES["plan_waits"].append(began - Moments.planned)
        Moments.planned = 0.0


def measured_step(step: Any) -> Any:
    def outer(self: Coordinator, snapshot: Snapshot) -> Decision:
        began, pose = time.perf_counter(), Moments.pose
        decision: Decision = step(self, snapshot)
        on_step(pose, began, decision)
        if Moments.wall and decision.state is not State.MOVING:
            save()
        return decision

    return outer


def save() -> None:
    """Once, when the motion is over."""
    wall = time.perf_counter() - Moments.wall
    Path(os.environ["MEASURED"]).write_text(json.dumps({
        **FIGURES, "wall": wall, "cpu": time.process_time() - Moments.cpu, "poses": Moments.poses,
    }), encoding="utf-8")
    Moments.wall = 0.0


wrap(Inbox, "_keep", on_pose)
wrap(Outbox, "send", on_send)
Coordinator.step = measured_step(Coordinator.step)  # type: ignore[method-assign]
module = sys.argv.pop(1)
runpy.run_module(f"coord_planner.ros.{module}", run_name="__main__")
