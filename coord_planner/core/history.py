"""What the robots have been sent, as it takes effect on them."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable

import numpy as np

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
        self._times: deque[float] = deque(maxlen=_KEPT)
        self._values: deque[np.ndarray] = deque(maxlen=_KEPT)

    def add(self, time: float, values: np.ndarray) -> None:
        """Remember what was sent: speeds and curvatures, shape (N, 2)."""
        self._times.append(time)
        self._values.append(np.array(values, dtype=float))

    def clear(self) -> None:
        """Forget everything: nothing is in flight any more."""
        self._times.clear()
        self._values.clear()

    def grow(self, command_delays: np.ndarray, period: float) -> None:
        """Room for robots that come last from now on; they have been sent zeros. Delays of all, shape (N,)."""
        more = np.zeros((len(command_delays) - len(self.effect_delay), 2))
        self._values = deque((np.concatenate([each, more]) for each in self._values), maxlen=_KEPT)
        self.effect_delay = np.asarray(command_delays, dtype=float) + period / 2

    def forget(self, rows: list[int]) -> None:
        """Some robots were let go: whatever they were sent no longer counts."""
        for each in self._values:
            each[rows] = 0.0

    @property
    def last(self) -> tuple[float, np.ndarray] | None:
        """Moment and values of the last sending."""
        return (self._times[-1], self._values[-1]) if self._times else None

    def in_effect(self, times: np.ndarray, planned: Planned | None) -> np.ndarray:
        """Speeds and curvatures in effect at moments of each robot's own, shape (N, K) -> (N, K, 2).

        What was sent counts as far as it reaches; beyond it the plan does, or, without one, the last value.
        """
        found = np.zeros(times.shape + (2,)) if planned is None else planned(times)
        if not self._times:
            return found
        sent, values = np.array(self._times), np.stack(self._values)
        for k in range(len(times)):
            effect = sent + self.effect_delay[k]
            known = slice(None) if planned is None else times[k] <= effect[-1]
            for column in range(2):
                found[k, known, column] = np.interp(times[k, known], effect, values[:, k, column])
        return found
