# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Speed along a way: speed up, hold, slow down."""

from __future__ import annotations

import math

import attrs
import numpy as np


@attrs.frozen
class SpeedProfile:
    """Three phases of constant acceleration.

    Attributes:
        speeds: at the beginning, in the middle phase, at the end, m/s.
        durations: of the phases, seconds.
    """

    speeds: tuple[float, float, float]
    durations: tuple[float, float, float]

    @property
    def duration(self) -> float:
        """Seconds from beginning to end."""
        return sum(self.durations)

    def speed(self, times: np.ndarray) -> np.ndarray:
        """Speed at seconds since the beginning; the first and last values hold outside."""
        first, middle, last = self.speeds
        return np.interp(times, np.cumsum([0.0, *self.durations]), [first, middle, middle, last])

    def distance(self, times: np.ndarray) -> np.ndarray:
        """Metres since the beginning; the way goes on at the last speed after the end."""
        first, middle, last = self.speeds
        up, hold, down = self.durations
        t = np.asarray(times, dtype=float)
        in_up, in_hold = np.clip(t, 0.0, up), np.clip(t - up, 0.0, hold)
        in_down, after = np.clip(t - up - hold, 0.0, down), np.maximum(t - self.duration, 0.0)
        gain = (middle - first) / up if up > 0 else 0.0
        loss = (middle - last) / down if down > 0 else 0.0
        rising = first * in_up + gain * in_up**2 / 2
        falling = middle * in_down - loss * in_down**2 / 2
        return rising + middle * in_hold + falling + last * after


def speed_profile(
    distance: float, first: float, asked: float, last: float, acceleration: float, braking: float
) -> SpeedProfile:
    """The quickest profile over a distance (metres) within the asked speed; a short way never reaches it.

    Where the way is too short even to come from the first speed to the last, the profile does so all the
    same and is longer than asked: whoever plans with it meets the limit and says so.
    """
    peak_squared = (2 * acceleration * braking * distance + braking * first**2 + acceleration * last**2) / (
        acceleration + braking
    )
    middle = max(min(asked, math.sqrt(peak_squared)), first, last)
    up, down = (middle - first) / acceleration, (middle - last) / braking
    used = (middle**2 - first**2) / (2 * acceleration) + (middle**2 - last**2) / (2 * braking)
    hold = max(distance - used, 0.0) / middle if middle > 0 else 0.0
    return SpeedProfile((first, middle, last), (up, hold, down))
