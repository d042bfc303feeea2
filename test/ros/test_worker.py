# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The threads beside the executor, with a stand-in for the coordinator."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Any

from coord_planner.core.messages import Decision, Snapshot, State
from coord_planner.ros.worker import Worker


class StandIn:
    """A coordinator whose steps take as long as the test lets them."""

    def __init__(self) -> None:
        self.go, self.steps, self.delivered = threading.Event(), 0, []
        self.waiting: list[Callable[[], Any]] = []

    def step(self, snapshot: Snapshot) -> Decision:
        self.steps += 1
        assert self.go.wait(5.0)
        if snapshot.time < 0.0:
            raise ZeroDivisionError("a mistake")
        return Decision(snapshot.time, State.IDLE)

    def jobs(self) -> list[Callable[[], Any]]:
        jobs, self.waiting = self.waiting, []
        return jobs

    def deliver(self, outcome: Any, now: float) -> None:
        self.delivered.append((outcome, now))


class Bench:
    def __init__(self) -> None:
        self.coordinator, self.time = StandIn(), 1.0
        self.decisions: list[Decision] = []
        self.failures: list[str] = []
        self.worker = Worker(
            self.coordinator,  # type: ignore[arg-type]
            snapshot=lambda: Snapshot(self.time, {}) if self.time else None, now=lambda: 7.0,
            decided=lambda decision, _ms: self.decisions.append(decision),
            failed=lambda words, details: self.failures.append(f"{words}\n{details}"),
        )

    def until(self, done: Callable[[], bool]) -> None:
        end = time.monotonic() + 5.0
        while not done():
            assert time.monotonic() < end
            time.sleep(0.001)


def test_a_tick_that_comes_too_early_is_left_out_and_counted() -> None:
    bench = Bench()
    bench.worker.tick()
    bench.until(lambda: bench.coordinator.steps == 1)
    bench.worker.tick()
    bench.worker.tick()
    assert bench.worker.overruns == 2
    bench.coordinator.go.set()
    bench.until(lambda: len(bench.decisions) == 1)
    bench.worker.close()
    assert bench.worker.join(5.0)
    assert bench.coordinator.steps == 1


def test_what_a_step_or_a_job_raises_is_told_and_outlived() -> None:
    bench = Bench()
    bench.coordinator.go.set()
    bench.time = -1.0
    bench.worker.tick()
    bench.until(lambda: len(bench.failures) == 1)
    assert "a tick failed: a mistake" in bench.failures[0]
    assert "ZeroDivisionError" in bench.failures[0]
    bench.coordinator.waiting = [lambda: 1 // 0]
    bench.worker.collect()
    bench.until(lambda: len(bench.failures) == 2)
    assert "making a reference failed" in bench.failures[1]
    bench.coordinator.waiting = [lambda: "found"]
    bench.worker.collect()
    bench.until(lambda: bench.coordinator.delivered == [("found", 7.0)])
    bench.time = 2.0
    bench.until(lambda: bench.worker.tick() is None and bool(bench.decisions))
    bench.worker.close()
    assert bench.worker.join(5.0)


def test_of_waiting_work_only_the_newest_is_done() -> None:
    bench = Bench()
    going, release, done = threading.Event(), threading.Event(), []
    bench.coordinator.waiting = [lambda: (going.set(), release.wait(5.0))]
    bench.worker.collect()
    assert going.wait(5.0)
    for number in range(100):
        bench.coordinator.waiting = [lambda number=number: done.append(number)]  # type: ignore[misc]
        bench.worker.collect()
    release.set()
    bench.until(lambda: len(bench.coordinator.delivered) == 2)
    assert done == [99]
    bench.worker.close()
    assert bench.worker.join(5.0)


def test_after_its_end_nothing_is_delivered_any_more() -> None:
    bench = Bench()
    release = threading.Event()
    bench.coordinator.waiting = [lambda: release.wait(5.0)]
    bench.worker.collect()
    bench.worker.tick()
    bench.until(lambda: bench.coordinator.steps == 1)
    bench.worker.close()
    release.set()
    bench.coordinator.go.set()
    assert bench.worker.join(5.0)
    assert not bench.decisions
    assert not bench.coordinator.delivered


def test_without_a_clock_nothing_is_stepped() -> None:
    bench = Bench()
    bench.time = 0.0
    bench.worker.tick()
    bench.worker.close()
    assert bench.worker.join(5.0)
    assert bench.coordinator.steps == 0
