# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A sweep on this machine's cores: processes of their own, each with one thread for its linear algebra."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections import deque
from collections.abc import Callable, Generator, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager

from .plan import Point
from .point import Record, given_up

Work = Callable[[Point], Record]
# Small matrices: more threads only take the cores from each other. The names of OpenMP, OpenBLAS, MKL and BLIS.
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS")
_AHEAD = 2  # points handed out for each process


def cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0))


def run_here(points: Sequence[Point], work: Work, workers: int) -> Iterator[Record]:
    """Records as they come. A process that dies is replaced; a point that kills it twice is given up."""
    waiting = deque(points)
    while waiting:
        suspects = yield from _run(waiting, work, workers)
        for suspect in suspects:
            alone = deque([suspect])
            if (yield from _run(alone, work, 1)):
                yield given_up(suspect, "the process that rehearsed it died, twice (out of memory, or a crash)")


def _run(waiting: deque[Point], work: Work, workers: int) -> Generator[Record, None, list[Point]]:
    """Records until all is done or a process dies; returns the points that were handed out when it did."""
    before = set(multiprocessing.active_children())
    with _one_thread_each():
        pool = ProcessPoolExecutor(
            min(workers, len(waiting)), mp_context=multiprocessing.get_context("spawn"), initializer=_begin
        )
        under_way: dict[Future[Record], Point] = {}
        finished = False
        try:
            while waiting or under_way:
                while waiting and len(under_way) < _AHEAD * workers:
                    point = waiting.popleft()
                    try:
                        under_way[pool.submit(work, point)] = point
                    except BrokenProcessPool:
                        waiting.appendleft(point)
                        break
                if not under_way:  # it broke while nothing was handed out: the caller makes another
                    break
                done, _ = wait(under_way, return_when=FIRST_COMPLETED)
                lost = [future for future in done if isinstance(future.exception(), BrokenProcessPool)]
                for future in done - set(lost):
                    under_way.pop(future)
                    yield future.result()
                if lost:
                    finished = True
                    return list(under_way.values())
            finished = True
            return []
        finally:
            if not finished:  # interrupted: nobody waits for what is under way
                for process in set(multiprocessing.active_children()) - before:
                    process.terminate()
            pool.shutdown(wait=True, cancel_futures=True)


def _begin() -> None:
    """First thing in a new process: Ctrl-C is the parent's business, and without a parent there is nothing to do."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent,), daemon=True).start()


def _end_with(parent: multiprocessing.process.BaseProcess) -> None:
    parent.join()
    os._exit(1)


@contextmanager
def _one_thread_each() -> Iterator[None]:
    """Processes that are started inside find one thread each in their environment."""
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
