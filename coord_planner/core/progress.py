# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How fast the group moves along its reference: everybody slows when one is held up."""

from __future__ import annotations

import numpy as np

from .settings import Progress


class GroupProgress:
    """Filters each robot's lag, then slows the group by the largest (a maximum over noise would be biased)."""

    def __init__(self, robots: int) -> None:
        self.pace = 1.0  # seconds of the reference per second of the clock
        self.lag = np.zeros(robots)  # filtered, metres, >= 0 behind

    def grow(self, robots: int) -> None:
        """Room for so many more robots, that are not behind."""
        self.lag = np.concatenate([self.lag, np.zeros(robots)])

    def update(
        self, elapsed: float, behind: np.ndarray, deficit: np.ndarray, settings: Progress, fastest_fall: float
    ) -> float:
        """New pace.

        Args:
            elapsed: seconds since the last update.
            behind: metres that each robot is behind its reference, shape (N,).
            deficit: m/s by which each robot is slower than asked, shape (N,), >= 0.
            fastest_fall: how fast the pace may fall, 1/s (what the weakest brake allows).
        """
        expected = behind + settings.look_ahead * deficit
        part = 1.0 - np.exp(-elapsed / settings.filter_time) if settings.filter_time > 0 else 1.0
        self.lag = self.lag + part * (expected - self.lag)
        over = np.clip((self.lag.max() - settings.dead_band) / settings.full_lag, 0.0, 1.0)
        wanted = 1.0 - (1.0 - settings.slowest) * over
        self.pace = float(np.clip(wanted, self.pace - fastest_fall * elapsed, self.pace + settings.recovery * elapsed))
        return self.pace
