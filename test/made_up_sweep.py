# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A small made-up yard and sweeps of it: two carts, short horizons, half a second of work for each rehearsal."""

from __future__ import annotations

import os
import signal
from pathlib import Path
from typing import Any

import attrs
import yaml

from coord_planner.record.sweep_figures import figures
from coord_planner.trial.sweep.plan import Point
from coord_planner.trial.sweep.point import Record, carry_out

YARD = """\
# Two made-up carts turn together.
/**:
  ros__parameters:
    fleet: {name: test_yard, frame: map, invented: true}
    robots:
      names: [left, right]
      left: {start_x: 0.0, start_y: 2.5}
      right: {start_x: 0.0, start_y: 0.0}
    robot_defaults: {max_curvature: 0.8, max_curvature_rate: 0.8, max_speed: 1.4, max_acceleration: 0.8,
      max_braking: 1.0, speed_lag: 0.2, curvature_lag: 0.15, command_delay: 0.05, command_timeout: 0.5}
    graph: {edges: ["left right"]}
    coupling:
      strength: 1.0        # chi
    horizon: {intervals: 8, interval: 0.4, rate: 5.0, budget: 0.18, lead: 1.0}
    site_rules: {min_clearance: 0.6, max_speed: 1.4}
    manoeuvres:
      names: [corner, led]
      corner: {kind: equal_radius, angle_deg: 45.0, radius: 3.0, speed: 1.2}
      led: {kind: to_ends, ends_deg: ["left heading 45"], speed: 1.2, alignment: 2.0}
"""
ASKED: dict[str, Any] = {
    "params": "yard.yaml", "manoeuvre": "corner", "seeds": [1, 2],
    "objective": {"heading_spread_deg": 1.0, "duration_s": 0.1},
    "vary": {"coupling.strength": {"log": [0.5, 50], "count": 3}},
}


def sweep_file(folder: Path, **changes: Any) -> Path:
    """A sweep file beside its parameter file; keys changed, None takes a key away."""
    (folder / "yard.yaml").write_text(YARD, encoding="utf-8")
    asked = {key: value for key, value in {**ASKED, **changes}.items() if value is not None}
    file = folder / "asked.yaml"
    file.write_text(yaml.safe_dump(asked, sort_keys=False), encoding="utf-8")
    return file


def compared(row: Any) -> dict[str, Any]:
    """A row without the columns that differ from run to run."""
    return {key: value for key, value in row.items() if not key.startswith("time_")}


# Work for sweeps; at the top of a module, so that other processes find it.


def in_full(point: Point) -> Record:
    """What the command does."""
    return carry_out(point, figures)


def quick(point: Point) -> Record:
    """No rehearsal at all: what the environment of the process says."""
    return Record(point.key, {"point": point.number, "setting": point.setting, "status": "done", "reason": "",
                              "threads": os.environ.get("OMP_NUM_THREADS"), "process": os.getpid()})


def deadly(point: Point) -> Record:
    """Kills its process at the second seed of the first setting."""
    if point.number == 1:
        os.kill(os.getpid(), signal.SIGKILL)
    return quick(point)


def wrong(point: Point) -> Record:
    """A measurer with a mistake in it."""
    def measure(run: Any, configuration: Any) -> Any:
        raise ZeroDivisionError("a mistake")

    return carry_out(attrs.evolve(point), measure)
