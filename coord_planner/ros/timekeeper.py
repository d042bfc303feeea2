# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The planner's own time: it runs evenly, whatever happens to the clock that stamps messages."""

from __future__ import annotations

import time
from collections.abc import Callable

_NOTICED = 0.1  # seconds by which the clock may leave the steady one between two looks without a word
_SLIP = 0.05  # seconds by which a simulated clock may go back without being a new beginning
_FASTEST = 20.0  # as in simulation.rate_factor: a simulated clock runs at most so much faster than ours
_SLACK = 1.0  # seconds that a simulated clock may leap beyond that, when it was waited for
_UNSURE = 5e-4  # seconds between two readings of the steady clock; what was read in between is not compared
_STEP = 0.02  # seconds; what is less is followed smoothly, so that stamps stay as even as planner time
_SMOOTH = 0.05  # part of it that is followed at each look


class Timekeeper:
    """Planner time, seconds.

    In the field planner time runs with the steady clock. When the clock of the stamps is set, a schedule in
    hand therefore does not leap with it, and can still be brought to a stop in order. A simulated clock may
    run faster than ours or stand still, so planner time is what it says; when it jumps, everything begins anew.

    Args:
        stamp: reads the clock of the stamps, seconds; 0 while a simulated one has not begun.
        simulated: whether that is a simulated clock. steady: seconds, steady.
    """

    def __init__(self, stamp: Callable[[], float], simulated: bool,
                 steady: Callable[[], float] = time.monotonic) -> None:
        self._stamp, self._simulated, self._steady = stamp, simulated, steady
        self._seen, self._seen_at = stamp(), steady()
        self._anchor = self._seen - self._seen_at  # planner time less steady time, in the field
        self._shift = 0.0  # stamps less planner time, in the field

    @property
    def simulated(self) -> bool:
        """Whether the clock of the stamps is a simulated one."""
        return self._simulated

    def time(self) -> float:
        """Planner time now, from any thread; 0 while there is no clock."""
        return self._stamp() if self._simulated else self._steady() + self._anchor

    def stamp_of(self, time: float) -> float:
        """The stamp of a moment of planner time; evenly spaced moments have evenly spaced stamps."""
        return time if self._simulated else time + self._shift

    def look(self) -> float:
        """Compare the clocks, from one thread only; seconds by which the clock of the stamps has jumped since, or 0."""
        before = self._steady()
        stamp = self._stamp()
        now = self._steady()
        if now - before > _UNSURE:
            return 0.0  # held up between the readings; the next look will do
        if not self._simulated:
            return self._look_real(stamp, (before + now) / 2)
        jump = self._look_simulated(stamp, now)
        if stamp != self._seen:  # since when it stands still counts: whoever sends it may have been held up
            self._seen, self._seen_at = stamp, now
        return jump

    def _look_real(self, stamp: float, now: float) -> float:
        off = stamp - (now + self._anchor) - self._shift
        self._shift += off if abs(off) > _STEP else _SMOOTH * off
        return off if abs(off) > _NOTICED else 0.0

    def _look_simulated(self, stamp: float, now: float) -> float:
        if self._seen <= 0.0 or stamp <= 0.0:
            return 0.0
        step = stamp - self._seen
        leap = step > _FASTEST * (now - self._seen_at) + _SLACK
        return step if leap or step < -_SLIP else 0.0
