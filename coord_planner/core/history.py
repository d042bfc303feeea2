# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the robots have been sent, as it takes effect on them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from .schedule import Schedule

_KEPT = 200  # sendings; ten seconds at the usual rate

# Commands of the plan at moments of effect: times of shape (N, K) -> speeds and curvatures, shape (N, K, 2).
Planned = Callable[[np.ndarray], np.ndarray]


class CommandHistory:
    """Commands sent at common moments, and when each robot feels them.

    A command is held until the next one is sent, so on average it acts half a period later than the
    response delay alone; both are counted in ``effect_delay``.
    """

    def __init__(self, command_delays: np.ndarray, period: float) -> None:
        self.effect_delay = np.asarray(command_delays, dtype=float) + period / 2  # shape (N,), seconds
        self._sent = self._nothing = Schedule(np.zeros(0), np.zeros((len(self.effect_delay), 0, 2)))
        self._gear = np.zeros(len(self.effect_delay))
        self._driven = np.full(len(self.effect_delay), -np.inf)  # when a speed was last sent, seconds

    def add(self, time: float, values: np.ndarray) -> None:
        """Remember what was sent: speeds and curvatures, shape (N, 2)."""
        kept, values = self._sent, np.array(values, dtype=float)
        self._sent = Schedule(
            np.append(kept.times[1 - _KEPT :], time),
            np.concatenate([kept.values[:, 1 - _KEPT :], values[:, None]], axis=1),
        )
        moving = np.abs(values[:, 0]) > 0.0
        self._gear = np.where(moving, np.sign(values[:, 0]), self._gear)
        self._driven = np.where(moving, time, self._driven)

    def rolling(self, now: float, rest: np.ndarray) -> np.ndarray:
        """Which way each robot may still be moving: 1, -1, or 0 when it was told to stand for ``rest`` seconds."""
        return np.where(now - self._driven < rest - 1e-9, self._gear, 0.0)

    def clear(self) -> None:
        """Forget everything: nothing is in flight any more."""
        self._sent = self._nothing
        self._driven[:] = -np.inf

    def grow(self, command_delays: np.ndarray, period: float) -> None:
        """Room for robots that come last from now on; they have been sent zeros. Delays of all, shape (N,)."""
        more = len(command_delays) - len(self.effect_delay)
        self._sent, self._nothing = self._sent.grown(more), self._nothing.grown(more)
        self._gear, self._driven = np.append(self._gear, np.zeros(more)), np.append(self._driven, [-np.inf] * more)
        self.effect_delay = np.asarray(command_delays, dtype=float) + period / 2

    def forget(self, rows: list[int]) -> None:
        """Some robots were let go: whatever they were sent no longer counts."""
        self._sent = self._sent.stilled(rows)

    def shift(self, by: float) -> None:
        """The clock was set: what was sent was sent so many seconds later by it."""
        self._sent = Schedule(self._sent.times + by, self._sent.values)

    @property
    def last(self) -> tuple[float, np.ndarray] | None:
        """Moment and values of the last sending."""
        return (float(self._sent.times[-1]), self._sent.values[:, -1]) if len(self._sent.times) else None

    def in_effect(self, times: np.ndarray, planned: Planned | None) -> np.ndarray:
        """Speeds and curvatures in effect at moments of each robot's own, shape (N, K) -> (N, K, 2).

        What was sent counts as far as it reaches; beyond it the plan does, or, without one, the last value.
        """
        found = np.zeros(times.shape + (2,)) if planned is None else planned(times)
        if not len(self._sent.times):
            return found
        when = times - self.effect_delay[:, None]  # of sending
        sent = self._sent.at(when)
        return sent if planned is None else np.where((when <= self._sent.times[-1])[..., None], sent, found)
