# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How far each robot's last state is from its target: seven rows a robot."""

from __future__ import annotations

import numpy as np

from ..problem import CURVATURE, CURVATURE_COMMAND, SPEED, SPEED_COMMAND, STATES
from .chain import Rollout, end_slopes
from .numbers import Numbers
from .response import Response


def missed(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Last state less the target, shape (N, 7), in the order of STATES; where the target is free, less 0."""
    last = np.empty(numbers.target.shape)
    last[:, 0], last[:, 1], last[:, 2] = r.x[:, -1], r.y[:, -1], r.theta[:, -1]
    last[:, CURVATURE] = _reached_last(numbers.curvature, r.curvature) + numbers.begins.curvature[:, -1]
    last[:, SPEED] = _reached_last(numbers.speed, r.speed) + numbers.begins.speed[:, -1]
    last[:, CURVATURE_COMMAND], last[:, SPEED_COMMAND] = r.curvature[:, -1], r.speed[:, -1]
    return last - numbers.target


def end_rows(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Derivatives of the last state by the commands (curvatures, then speeds), shape (N, 7, 2M)."""
    n, m = r.turn.shape
    rows = np.zeros((n, len(STATES), 2 * m))
    by_distance, by_turn = end_slopes(r)
    by_curvature = by_turn * r.distance
    by_speed = numbers.h * (by_distance + by_turn * r.mean_curvature)
    for i in range(3):
        rows[:, i, :m] = numbers.curvature.backward(numbers.curvature.mean, by_curvature[i])
        rows[:, i, m:] = numbers.speed.backward(numbers.speed.mean, by_speed[i])
    rows[:, CURVATURE, :m] = numbers.curvature.reached[numbers.curvature.which, -1]
    rows[:, SPEED, m:] = numbers.speed.reached[numbers.speed.which, -1]
    rows[:, CURVATURE_COMMAND, m - 1] = rows[:, SPEED_COMMAND, -1] = 1.0
    return rows


def pull_commands(numbers: Numbers, forces: np.ndarray, found: np.ndarray) -> None:
    """Add the slopes of the last four states' sum(forces * state) to those by the commands, (N, 2M), in place.

    Args:
        forces: shape (N, 7).
    """
    m = len(numbers.h)
    found[:, :m] += forces[:, CURVATURE, None] * numbers.curvature.reached[numbers.curvature.which, -1]
    found[:, m:] += forces[:, SPEED, None] * numbers.speed.reached[numbers.speed.which, -1]
    found[:, m - 1] += forces[:, CURVATURE_COMMAND]
    found[:, -1] += forces[:, SPEED_COMMAND]


def _reached_last(answer: Response, commands: np.ndarray) -> np.ndarray:
    return np.sum(answer.reached[answer.which, -1] * commands, axis=1)
