# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Threads beside the executor: one ticks, one makes references, so that no callback ever waits for a solver."""

from __future__ import annotations

import contextlib
import queue
import threading
import time
import traceback
from collections.abc import Callable
from typing import Optional

from ..core.coordinator import Coordinator, Job
from ..core.messages import Decision, Snapshot


class Worker:
    """Drives one coordinator's slow parts.

    Args:
        coordinator: what is driven.
        snapshot: gives what is known now; None while there is no clock.
        now: seconds on the clock of the stamps.
        decided: called in the ticking thread with each decision and the wall time of its tick in milliseconds.
        failed: called in either thread with words and a traceback when the coordinator raised.
    """

    def __init__(self, coordinator: Coordinator, *, snapshot: Callable[[], Optional[Snapshot]],
                 now: Callable[[], float], decided: Callable[[Decision, float], None],
                 failed: Callable[[str, str], None]) -> None:
        self._coordinator, self._snapshot, self._now = coordinator, snapshot, now
        self._decided, self._failed = decided, failed
        self._wanted, self._idle, self._closed = threading.Event(), threading.Event(), False
        self._idle.set()
        self._jobs: queue.SimpleQueue[Optional[Job]] = queue.SimpleQueue()
        self.overruns = 0  # ticks that were left out because the last one was still running
        self._threads = [
            threading.Thread(target=body, name=name, daemon=True)
            for name, body in (("ticks", self._tick_for_ever), ("references", self._work_for_ever))
        ]
        for thread in self._threads:
            thread.start()

    def tick(self) -> None:
        """Ask for one tick; left out and counted when the last one is still running."""
        if self._idle.is_set():
            self._idle.clear()
            self._wanted.set()
        else:
            self.overruns += 1

    def collect(self) -> None:
        """Take the coordinator's slow work; after every request."""
        for job in self._coordinator.jobs():
            self._jobs.put(job)

    def close(self) -> None:
        """Let the threads end after what they are doing; what they still find out is dropped."""
        self._closed = True
        self._wanted.set()
        self._jobs.put(None)

    def join(self, timeout: float) -> bool:
        """Wait for the threads, seconds in all; whether both have ended."""
        end = time.monotonic() + timeout
        for thread in self._threads:
            thread.join(max(0.0, end - time.monotonic()))
        return not any(thread.is_alive() for thread in self._threads)

    def _tick_for_ever(self) -> None:
        while True:
            self._wanted.wait()
            self._wanted.clear()
            if self._closed:
                return
            self._guarded("a tick failed", self._tick)
            self._idle.set()

    def _tick(self) -> None:
        snapshot = self._snapshot()
        if snapshot is None:
            return
        began = time.perf_counter()
        decision = self._coordinator.step(snapshot)
        self.collect()
        if not self._closed:
            self._decided(decision, 1e3 * (time.perf_counter() - began))

    def _work_for_ever(self) -> None:
        while True:
            job = self._newest_job()
            if job is None or self._closed:
                return
            self._guarded("making a reference failed", lambda job=job: self._work(job))  # type: ignore[misc]

    def _newest_job(self) -> Optional[Job]:
        """Wait for work. The coordinator waits for one outcome only, so what newer work has overtaken is dropped."""
        job = self._jobs.get()
        with contextlib.suppress(queue.Empty):
            while job is not None:
                job = self._jobs.get_nowait()
        return job

    def _work(self, job: Job) -> None:
        result = job()
        if not self._closed:
            self._coordinator.deliver(result, self._now())
            self.collect()

    def _guarded(self, words: str, body: Callable[[], None]) -> None:
        # The planner must outlive any mistake of its own, so that it can still bring the fleet to a stand.
        try:
            body()
        except Exception as error:
            if not self._closed:
                self._failed(f"{words}: {error}", traceback.format_exc())
