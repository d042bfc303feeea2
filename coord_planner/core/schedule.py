# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands over time as they take effect: straight pieces between moments common to all robots."""

from __future__ import annotations

import attrs
import numpy as np

from .fast.engine import kernels
from .plan import Plan
from .problem import CURVATURE_COMMAND, SPEED_COMMAND


@attrs.frozen(eq=False)
class Schedule:
    """Speeds (m/s) and curvatures (1/m) in effect.

    Attributes:
        times: shape (K,), seconds, increasing. values: shape (N, K, 2). First and last values hold outside.
    """

    times: np.ndarray
    values: np.ndarray

    def at(self, times: np.ndarray) -> np.ndarray:
        """Values at moments of each robot's own: shape (N,) -> (N, 2), or (N, K) -> (N, K, 2)."""
        compiled = kernels()
        if compiled is None:
            return self._at(times)
        found: np.ndarray = compiled.at(self.times, self.values, times.reshape(len(times), -1))
        return found.reshape((*times.shape, 2))

    def _at(self, times: np.ndarray) -> np.ndarray:
        """The same without what is compiled."""
        robots = np.arange(len(self.values)).reshape((-1,) + (1,) * (times.ndim - 1))
        if len(self.times) == 1:
            return self.values[robots, np.zeros(times.shape, dtype=int)]
        i = np.clip(self.times.searchsorted(times, side="right") - 1, 0, len(self.times) - 2)
        before = self.times[i]
        width = np.maximum(self.times[i + 1] - before, 1e-12)  # two moments may be one
        part = np.clip((times - before) / width, 0.0, 1.0)[..., None]
        first = self.values[robots, i]
        found: np.ndarray = first + part * (self.values[robots, i + 1] - first)
        return found

    def moment(self, time: float) -> np.ndarray:
        """Values of all robots at one moment, shape (N, 2)."""
        return self.at(np.full(len(self.values), time))

    def grown(self, count: int) -> Schedule:
        """The same with so many more robots, that stand."""
        return Schedule(self.times, np.concatenate([self.values, np.zeros((count, len(self.times), 2))]))

    def stilled(self, rows: list[int]) -> Schedule:
        """The same in which some robots stand, and always did."""
        values = self.values.copy()
        values[rows] = 0.0
        return Schedule(self.times, values)

    def splice(self, after: Schedule, switch: float, since: float) -> Schedule:
        """This schedule until ``switch``, the other one from there on; what lies before ``since`` is dropped."""
        early = (self.times > since) & (self.times < switch - 1e-6)
        late = after.times > switch + 1e-6
        times = np.concatenate([[since], self.times[early], [switch], after.times[late]])
        values = [
            self.moment(since)[:, None], self.values[:, early], after.moment(switch)[:, None], after.values[:, late],
        ]
        return Schedule(times, np.concatenate(values, axis=1))


def of_plan(plan: Plan) -> Schedule:
    """The commands of a plan."""
    return Schedule(plan.times, plan.states[:, :, [SPEED_COMMAND, CURVATURE_COMMAND]])


def constant(values: np.ndarray, time: float) -> Schedule:
    """The same commands for ever, shape (N, 2)."""
    return Schedule(np.array([time]), np.asarray(values, dtype=float)[:, None, :])
