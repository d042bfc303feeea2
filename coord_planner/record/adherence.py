# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Whether what was sent and what was done kept within every robot's limits.

Worked out from the record alone and without the planner's own gate, so that an error there is seen here.
"""

from __future__ import annotations

import numpy as np

from ..core.fleet import Fleet
from ..trial.run import Run

TOLERANCE = 1e-6  # in the unit of the limit; rounding on its way through a message stays below it
_SILENCE = 1.0  # seconds without commands, after which the next one is compared with what the machine did
_USUAL_SPACING = 0.05  # seconds; for a record of a single command, where no spacing can be measured


def outside_limits(run: Run) -> np.ndarray:
    """Which published commands break at least one limit of their robot, shape (N, C), bool.

    Standing robots count too. The speed range of a machine whose lowest speed is above 0 reaches down to 0 here,
    since it has to start and stop.
    """
    if not run.commanded.shape[1]:
        return np.zeros(run.commanded.shape[:2], dtype=bool)
    return _level_broken(run.fleet, run.commanded) | _change_broken(run)


def too_fast(run: Run) -> np.ndarray:
    """Stretches of time in which each machine truly drove outside its speed range, shape (N,)."""
    low, high = _speed_range(run.fleet)
    out = np.pad((run.speeds > high + TOLERANCE) | (run.speeds < low - TOLERANCE), ((0, 0), (1, 0)))
    return (out[:, 1:] & ~out[:, :-1]).sum(axis=1)


def violations(run: Run) -> int:
    """Commands outside a limit, plus stretches of true speed outside the speed range."""
    return int(outside_limits(run).sum() + too_fast(run).sum())


def _speed_range(fleet: Fleet) -> tuple[np.ndarray, np.ndarray]:
    return np.minimum(fleet.limit("min_speed"), 0.0)[:, None], fleet.limit("max_speed")[:, None]


def _level_broken(fleet: Fleet, commanded: np.ndarray) -> np.ndarray:
    speed, curvature = commanded[:, :, 0], commanded[:, :, 1]
    low, high = _speed_range(fleet)
    turn_rate = np.abs(speed * curvature)

    def above(values: np.ndarray, name: str) -> np.ndarray:
        return values > fleet.limit(name)[:, None] + TOLERANCE

    kept = (speed >= low - TOLERANCE) & (speed <= high + TOLERANCE) & np.isfinite(curvature)
    return (
        ~kept
        | above(np.abs(curvature), "max_curvature")
        | above(turn_rate, "max_turn_rate")
        | above(np.abs(speed) * turn_rate, "max_lateral_acceleration")
    )


def _change_broken(run: Run) -> np.ndarray:
    """Speed or curvature changed faster than allowed since the command before, in the time that truly passed."""
    before, passed = _before(run)
    now = run.commanded
    acceleration, braking = (run.fleet.limit(name)[:, None] for name in ("max_acceleration", "max_braking"))
    # A change of direction brakes to 0 first and then speeds up: the two parts need their times one after the other.
    same_way = before[:, :, 0] * now[:, :, 0] >= 0.0
    old, new = np.abs(before[:, :, 0]), np.abs(now[:, :, 0])
    slower = np.where(same_way, np.maximum(old - new, 0.0), old)
    faster = np.where(same_way, np.maximum(new - old, 0.0), new)
    excess = (slower / braking + faster / acceleration - passed) * np.minimum(acceleration, braking)
    steered = np.abs(now[:, :, 1] - before[:, :, 1])
    return (excess > TOLERANCE) | (steered > run.fleet.limit("max_curvature_rate")[:, None] * passed + TOLERANCE)


def _before(run: Run) -> tuple[np.ndarray, np.ndarray]:
    """What each command is compared with, shape (N, C, 2), and the time between them, shape (C,).

    The first command, and the first after a silence, is compared with the machine's true speed and curvature,
    over the usual spacing.
    """
    spacing = np.diff(run.command_times)
    usual = float(np.median(spacing)) if len(spacing) else _USUAL_SPACING
    fresh = np.concatenate([[True], spacing > max(_SILENCE, 5 * usual)])
    passed = np.where(fresh, usual, np.concatenate([[usual], spacing]))
    before = np.concatenate([run.commanded[:, :1], run.commanded[:, :-1]], axis=1)
    if len(run.times):
        at = run.command_times[fresh]
        for row in range(len(run.fleet)):
            before[row, fresh, 0] = np.interp(at, run.times, run.speeds[row])
            before[row, fresh, 1] = np.interp(at, run.times, run.curvatures[row])
    return before, passed
