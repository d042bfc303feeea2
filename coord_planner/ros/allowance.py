# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How often something may be done: keeps a flood out of the log and off the network."""

from __future__ import annotations

import time
from collections.abc import Callable


class Allowance:
    """So many times at once, and so many times a second after that.

    Args:
        burst: times at once. rate: times a second. clock: seconds, steady.
    """

    def __init__(self, burst: int, rate: float, clock: Callable[[], float] = time.monotonic) -> None:
        self._burst, self._rate, self._clock = float(burst), rate, clock
        self._left, self._when = float(burst), clock()

    def take(self) -> bool:
        """Whether it may be done once more now."""
        now = self._clock()
        self._left = min(self._burst, self._left + self._rate * (now - self._when))
        self._when = now
        if self._left < 1.0:
            return False
        self._left -= 1.0
        return True
