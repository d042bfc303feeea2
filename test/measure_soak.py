# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""An hour of simulated operation, begun and ended a hundred times: what stays behind of memory, threads and files.

    python test/measure_soak.py            a hundred times 36 s; prints a line for each tenth of it
    python test/measure_soak.py 20 10      so many times so many seconds

One coordinator drives three simulated machines; references are made in threads of their own, as the node does it.
Exit status 1 when memory grows by 5 % or more from a tenth of the way on, or a thread or a file is left behind.
"""

from __future__ import annotations

import gc
import os
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from types import SimpleNamespace

import attrs
import fleets
import numpy as np

from coord_planner.core import graph as graphs
from coord_planner.core.coordinator import Coordinator
from coord_planner.core.fast.ticks import TickSolve
from coord_planner.core.manoeuvre import ToEnds
from coord_planner.core.messages import Snapshot, State
from coord_planner.trial.vehicle import SimulatedFleet

MOST_GROWTH = 0.05


@attrs.frozen
class Standing:
    """What the process holds: resident memory in MB, threads, open files."""

    memory: float
    threads: int
    files: int


def standing() -> Standing:
    gc.collect()
    pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
    return Standing(pages * os.sysconf("SC_PAGE_SIZE") / 2**20, threading.active_count(),
                    len(list(Path("/proc/self/fd").iterdir())))


def _ends(x: float, y: float, heading_deg: float) -> ToEnds:
    """Everyone turns round, to the left, and stands abreast again."""
    return ToEnds(speed=1.2, ends_deg=tuple(
        f"cart_{k + 1} pose {x} {start[1] + y} {heading_deg}" for k, start in enumerate(fleets.abreast(3))
    ))


class Operation:
    """One coordinator and its machines, for as long as one likes."""

    def __init__(self, seed: int = 0) -> None:
        fleet, poses = fleets.carts(3, response=fleets.LATE), fleets.abreast(3)
        self.coordinator = Coordinator(
            fleet, graphs.path(fleet.names), fleets.settings(horizon={"intervals": 12}),
            {"out": _ends(1.0, 6.0, 180.0), "back": _ends(0.0, 0.0, 0.0)}, 60.0, TickSolve(time.perf_counter),
        )
        starts = {name: tuple(pose) for name, pose in zip(fleet.names, poses)}
        noisy = fleets.PERFECT | {"pose_noise_xy": 0.02, "pose_noise_heading_deg": 0.5}
        self.machines = SimulatedFleet(
            fleet, starts, SimpleNamespace(**noisy), dict.fromkeys(fleet.names, 0.5), np.random.default_rng(seed)
        )
        self.now, self._beats, self._name = 0.0, 0, "back"

    def once(self, seconds: float) -> bool:
        """Begin, drive, end, and stand for the rest of the time; whether it was completed."""
        until, answers = self.now + seconds, []
        self._name = "back" if self._name == "out" else "out"
        self.coordinator.begin(self._name, Snapshot(self.now, self.machines.measure(self.now)), answered=answers.append)
        self._work()
        while self.now < until - 1e-9:
            if self._beats % 2 == 0:
                self.coordinator.step(Snapshot(self.now, self.machines.measure(self.now)))
                self._work()
            for name, command in (self.coordinator.commands(self.now) or {}).items():
                self.machines.command(name, command, self.now)
            self._beats += 1
            self.now = round(0.05 * self._beats, 9)
            self.machines.advance(self.now)
        return answers[0].ok and self.coordinator.decision.completed and self.coordinator.state is State.IDLE

    def _work(self) -> None:
        for job in self.coordinator.jobs():
            thread = threading.Thread(target=lambda job=job: self.coordinator.deliver(job(), self.now))
            thread.start()
            thread.join()


def soak(times: int, seconds: float) -> Iterator[tuple[int, Standing]]:
    """Operate, and say from time to time what the process holds; RuntimeError when a turn is not completed."""
    operation = Operation()
    for number in range(times):
        if not operation.once(seconds):
            raise RuntimeError(f"turn {number + 1} was not completed: {operation.coordinator.decision.reason}")
        if (number + 1) % max(1, times // 10) == 0:
            yield number + 1, standing()


def main(arguments: list[str]) -> int:
    times, seconds = (int(arguments[0]), float(arguments[1])) if len(arguments) == 2 else (100, 36.0)
    began, seen = time.perf_counter(), []
    for number, held in soak(times, seconds):
        seen.append(held)
        sys.stdout.write(
            f"{number:4d} turns, {number * seconds / 60:5.1f} simulated minutes, {time.perf_counter() - began:5.0f} s: "
            f"{held.memory:.1f} MB, {held.threads} threads, {held.files} files\n"
        )
        sys.stdout.flush()
    growth = seen[-1].memory / seen[0].memory - 1.0
    left = seen[-1].threads > seen[0].threads or seen[-1].files > seen[0].files
    sys.stdout.write(f"memory grew by {100 * growth:.1f} %{'; something was left behind' if left else ''}\n")
    return 1 if growth >= MOST_GROWTH or left else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
