# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Nodes as processes of their own, on a ROS domain of their own, and always brought to an end."""

from __future__ import annotations

import contextlib
import os
import random
import shutil
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Optional

_DOMAINS = range(1, 102)  # above 101 the ports would meet those that Linux hands out by itself
_LONGEST_LIFE = 600.0  # seconds; should whoever started a node die without a word
_GRACE = 15.0  # seconds between asking a node to end and killing it; a planner may have a fleet to stop first


def free_domain(seed: Optional[int] = None) -> int:
    """A ROS domain on which nobody on this machine listens.

    The first participant of domain d takes UDP port 7410 + 250 d (RTPS 2.3, 9.6.1.1, from memory).
    """
    candidates = list(_DOMAINS)
    random.Random(os.getpid() if seed is None else seed).shuffle(candidates)
    for domain in candidates:
        with contextlib.suppress(OSError), socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as probe:
            probe.bind(("", 7410 + 250 * domain))
            return domain
    raise RuntimeError("every ROS domain from 1 to 101 is in use on this machine; end some ROS programs")


def environment(domain: int) -> dict[str, str]:
    """Environment for ROS programs that talk on one domain and never leave this machine."""
    return {
        "AMENT_PREFIX_PATH": os.environ.get("AMENT_PREFIX_PATH") or sys.prefix,
        "ROS_DOMAIN_ID": str(domain), "ROS_AUTOMATIC_DISCOVERY_RANGE": "LOCALHOST",
        # Small matrices: more threads would only take the cores from each other.
        "OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1", "PYTHONUNBUFFERED": "1",
    }


class NodeProcess:
    """One node, ``python -m coord_planner.ros.<module>``, in a process group of its own; its output goes to a file.

    Args:
        extra: more ROS arguments. before: arguments of Python in the place of ``-m coord_planner.ros``, a script
            that runs the module that it is given.
    """

    def __init__(self, module: str, params: Sequence[Path], domain: int, log: Path, *, extra: Sequence[str] = (),
                 before: Sequence[str] = (), variables: Mapping[str, str] | None = None) -> None:
        self.name, self.log = module, log
        started = [*before, module] if before else ["-m", f"coord_planner.ros.{module}"]
        command = [sys.executable, *started, "--ros-args"]
        for file in params:
            command += ["--params-file", str(file)]
        command += extra
        guard = shutil.which("timeout")  # a node that hangs may ignore SIGTERM
        if guard:
            command = [guard, "-k", f"{_GRACE:g}", f"{_LONGEST_LIFE:g}", *command]
        log.parent.mkdir(parents=True, exist_ok=True)
        with log.open("wb") as output:
            self._process = subprocess.Popen(
                command, stdin=subprocess.DEVNULL, stdout=output, stderr=subprocess.STDOUT, start_new_session=True,
                env={**os.environ, **environment(domain), **(variables or {})},
            )

    @property
    def status(self) -> Optional[int]:
        """Exit status, or None while it runs."""
        return self._process.poll()

    def signal(self, number: int) -> None:
        """Send a signal to the whole group."""
        with contextlib.suppress(ProcessLookupError):
            os.killpg(self._process.pid, number)

    def wait(self, seconds: float) -> Optional[int]:
        """Exit status, or None if it still runs after so many seconds."""
        with contextlib.suppress(subprocess.TimeoutExpired):
            return self._process.wait(seconds)
        return None

    def stop(self, seconds: float = _GRACE) -> Optional[int]:
        """Ask it to end, wait, kill it if it must be; its exit status."""
        if self.status is None:
            self.signal(signal.SIGTERM)
            if self.wait(seconds) is None:
                self.signal(signal.SIGKILL)
                self.wait(_GRACE)
        return self.status

    def output(self) -> str:
        """What it has said so far."""
        return self.log.read_text(errors="replace")

    def __enter__(self) -> NodeProcess:
        return self

    def __exit__(self, _kind: Optional[type[BaseException]], _error: Optional[BaseException],
                 _trace: Optional[TracebackType]) -> None:
        self.stop()


@contextlib.contextmanager
def ending_on_signals() -> Iterator[None]:
    """Turn SIGTERM into KeyboardInterrupt, so that what was started is ended on the way out."""
    def interrupt(_number: int, _frame: object) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
