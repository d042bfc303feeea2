# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The classical problem as data: what every solution method here starts from."""

from __future__ import annotations

import attrs
import numpy as np


def _rows(value: object) -> np.ndarray:
    return np.array(value, dtype=float, ndmin=2)


@attrs.frozen(eq=False)
class ClassicalProblem:
    """Unit speed, no limits, cost 1/2 integral u'(I + chi L)u over ``duration``.

    ``starts`` (N, 3) and ``ends`` (N, 3) hold x, y, heading in m, m, rad, headings unwrapped: an end's heading minus
    its start's is the turning, windings included. NaN in an end: x and y free, or all three free.
    ``laplacian`` (N, N) is the weighted graph Laplacian, ``coupling`` chi >= 0.

    Raises:
        ValueError: shapes differ, a number is missing, or an end is farther than the way is long.
    """

    starts: np.ndarray = attrs.field(converter=_rows)
    ends: np.ndarray = attrs.field(converter=_rows)
    laplacian: np.ndarray = attrs.field(converter=_rows)
    coupling: float
    duration: float

    def __attrs_post_init__(self) -> None:
        count = len(self.starts)
        if self.starts.shape != (count, 3) or self.ends.shape != (count, 3) or self.laplacian.shape != (count, count):
            raise ValueError(f"shapes {self.starts.shape}, {self.ends.shape}, {self.laplacian.shape}; "
                             "allowed: (N, 3), (N, 3), (N, N)")
        if not (np.isfinite(self.starts).all() and self.coupling >= 0 and 0 < self.duration < np.inf):
            raise ValueError("allowed: finite starts, coupling >= 0, duration above 0")
        free = np.isnan(self.ends)
        if np.any(free[:, 0] != free[:, 1]) or np.any(free[:, 2] & ~free[:, 0]) or np.isinf(self.ends).any():
            raise ValueError("allowed ends: a pose, a heading (x and y NaN), or nothing (all NaN)")
        far = np.abs(self.displacements()[self.placed]) > 1 + 1e-12
        if far.any():
            raise ValueError(f"robot {np.flatnonzero(self.placed)[far][0]}: its end is farther than the way is long")

    def __len__(self) -> int:
        return len(self.starts)

    @property
    def placed(self) -> np.ndarray:
        """Which robots have an end position, shape (N,)."""
        return ~np.isnan(self.ends[:, 0])

    @property
    def headed(self) -> np.ndarray:
        """Which robots have an end heading, shape (N,)."""
        return ~np.isnan(self.ends[:, 2])

    @property
    def weight(self) -> np.ndarray:
        """A = I + chi L, shape (N, N)."""
        return np.eye(len(self)) + self.coupling * self.laplacian

    def displacements(self) -> np.ndarray:
        """Ends seen from the starts, in durations, shape (N,) complex; NaN where free."""
        moved = self.ends - self.starts
        return (moved[:, 0] + 1j * moved[:, 1]) * np.exp(-1j * self.starts[:, 2]) / self.duration

    def turns(self) -> np.ndarray:
        """Asked change of heading, shape (N,), rad; NaN where free."""
        return self.ends[:, 2] - self.starts[:, 2]

    def with_coupling(self, coupling: float) -> ClassicalProblem:
        """The same problem with another coupling."""
        return attrs.evolve(self, coupling=coupling)

    def heading_bound(self) -> float:
        """No plan costs less: dTheta' S dTheta / (2 T), S being A with the free robots' turning chosen best.

        By Jensen's inequality; with equality when only headings are fixed (constant curvatures).
        """
        fixed, weight, turns = self.headed, self.weight, self.turns()
        best = weight[np.ix_(fixed, fixed)]
        if not fixed.all():
            across = weight[np.ix_(~fixed, fixed)]
            best = best - across.T @ np.linalg.solve(weight[np.ix_(~fixed, ~fixed)], across)
        return float(turns[fixed] @ best @ turns[fixed] / (2 * self.duration))
