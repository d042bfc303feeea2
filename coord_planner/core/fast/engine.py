# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What takes the steps of a tick: compiled kernels where numba is installed, numpy alone where it is not."""

from __future__ import annotations

import functools
import threading
from typing import Any, Optional, Protocol

import numpy as np

from .compiled import CompiledEngine
from .numbers import Numbers
from .plain import PlainEngine
from .point import Forces, Point
from .structure import Structure

Held = Any  # an engine's own: the factor of an active-set step


class Pointed(Protocol):
    """Commands with all that follows from them: cost, and by how much limits are passed at most, each in its unit."""

    @property
    def cost(self) -> float: ...

    @property
    def excess(self) -> float: ...

    @property
    def commands(self) -> tuple[np.ndarray, np.ndarray]: ...


class Trial(Protocol):
    """See active.Trial; ``left_over``: cost of what met rows still miss."""

    @property
    def point(self) -> Pointed: ...

    @property
    def forces(self) -> Forces: ...

    @property
    def changed(self) -> int: ...

    @property
    def left_over(self) -> float: ...


class Iterate(Protocol):
    """See interior.Iterate; ``open``: about the cost that is still to be saved."""

    @property
    def point(self) -> Pointed: ...

    @property
    def open(self) -> float: ...


class Engine(Protocol):
    """Steps on one problem; nothing in it changes."""

    def started(self, numbers: Numbers) -> Any: ...

    def point(self, curvature: np.ndarray, speed: np.ndarray) -> Any: ...

    def boxed(self, point: Any) -> tuple[Point, float]: ...

    def trial(self, point: Any, forces: Forces) -> Any: ...

    def hold(self, held: Optional[Any], trial: Any, near: float) -> Any: ...

    def active_step(self, held: Any, trial: Any) -> Any: ...

    def open(self, point: Any, forces: Forces, barrier: float, least: float) -> Any: ...

    def interior_step(self, x: Any) -> Any: ...

    def forces(self, x: Any) -> Forces: ...


def engine(numbers: Numbers, structure: Structure) -> Engine:
    """For one problem."""
    entries = kernels()
    return PlainEngine(numbers, structure) if entries is None else CompiledEngine(entries, numbers, structure)


_LOCK = threading.Lock()


def kernels() -> Optional[Any]:
    """The compiled functions, loaded or compiled at the first call (seconds); None without numba."""
    with _LOCK:
        return _kernels()[0]


def told() -> str:
    """How steps are taken, for people; loads what ``kernels`` loads."""
    with _LOCK:
        return _kernels()[1]


@functools.lru_cache(maxsize=1)
def _kernels() -> tuple[Optional[Any], str]:
    try:
        import numba
    except ImportError as error:
        missing = isinstance(error, ModuleNotFoundError)
        reason = "numba is not installed" if missing else f"numba cannot be loaded ({error})"
        return None, f"ticks are solved by numpy alone, several times slower: {reason}; pip install numba"
    if numba.config.DISABLE_JIT:
        return None, "ticks are solved by numpy alone, several times slower: NUMBA_DISABLE_JIT is set; unset it"
    from .kernels import entry

    return entry.entries(), f"ticks are solved by kernels that numba {numba.__version__} compiled"
