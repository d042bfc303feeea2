# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The smooth part of the cost: turning, alignment and the small prices, with slopes and Gauss-Newton blocks."""

from __future__ import annotations

import numpy as np

from ..problem import CURVATURE_COMMAND, SPEED_COMMAND
from .chain import Rollout
from .differences import changes_back
from .limits import rates
from .numbers import Numbers
from .response import Response


def smooth_cost(numbers: Numbers, r: Rollout) -> float:
    """Turning, alignment and small prices (as in ocp.py) of a rollout."""
    relative = (r.mean_speed - numbers.asked_speed) / numbers.full_speed
    steering = rates(numbers, r.curvature, CURVATURE_COMMAND)
    speeding = rates(numbers, r.speed, SPEED_COMMAND)
    each = (
        r.turning * _pull(numbers, r)
        + numbers.price_speed * relative**2
        + numbers.price_curvature_rate * steering**2
        + numbers.price_acceleration * speeding**2
    )
    cost = 0.5 * float(each.sum(axis=0) @ numbers.cost_h)
    if numbers.comparing is not None:
        cost += numbers.comparing.cost(r.turning)
    if numbers.alignment.any():
        half = 0.5 * _heading_differences(numbers, r)
        cost += float(numbers.alignment @ (2.0 * np.sin(half) ** 2) @ numbers.cost_h)
    return cost


def _pull(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Slope of turning and coupling by the turning, for each second, shape (N, M)."""
    pull: np.ndarray = r.turning + numbers.coupled @ r.turning
    return pull


def mean_slopes(numbers: Numbers, r: Rollout) -> tuple[np.ndarray, np.ndarray]:
    """Slopes of turning and of leaving the asked speed by the mean curvatures and speeds, each (N, M)."""
    pull = _pull(numbers, r) * numbers.cost_h
    if numbers.comparing is not None:
        pull += numbers.comparing.slopes(r.turning)
    pull /= numbers.turn_speed
    leaving = numbers.price_speed * numbers.cost_h * (r.mean_speed - numbers.asked_speed) / numbers.full_speed**2
    return pull * r.mean_speed, pull * r.mean_curvature + leaving


def add_rate_slopes(numbers: Numbers, r: Rollout, found: np.ndarray) -> None:
    """Add the slopes of the prices on steering and speeding up to those by the commands, shape (N, 2M), in place."""
    per, m = numbers.cost_h / numbers.h, len(numbers.h)
    steering = rates(numbers, r.curvature, CURVATURE_COMMAND)
    speeding = rates(numbers, r.speed, SPEED_COMMAND)
    found[:, :m] += changes_back(numbers.price_curvature_rate * per * steering)
    found[:, m:] += changes_back(numbers.price_acceleration * per * speeding)


def aligning_torque(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Slope of the alignment by the headings at nodes 1 .. M, shape (N, M)."""
    torque = np.zeros_like(r.turn)
    if numbers.alignment.any():
        pull = numbers.alignment[:, None] * np.sin(_heading_differences(numbers, r)) * numbers.cost_h
        np.add.at(torque, numbers.edges[:, 0], pull)
        np.subtract.at(torque, numbers.edges[:, 1], pull)
    return torque


def aligning_weights(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Second derivatives of the alignment by the heading differences of the edges at nodes 1 .. M, shape (E, M).

    Gauss-Newton: 2 sin^2(d/2) is half the square of 2 sin(d/2), whose slope squared is cos^2(d/2).
    """
    half = 0.5 * _heading_differences(numbers, r)
    return numbers.alignment[:, None] * np.cos(half) ** 2 * numbers.cost_h


def constant_blocks(numbers: Numbers) -> np.ndarray:
    """Second derivatives of the small prices, which nothing changes within a tick; shape (N, 2M, 2M)."""
    n, m = numbers.asked_speed.shape
    blocks = np.zeros((n, 2 * m, 2 * m))
    mean = numbers.speed.mean
    speed = numbers.price_speed * np.matmul(mean.transpose(0, 2, 1) * numbers.cost_h, mean)
    blocks[:, m:, m:] = speed[numbers.speed.which] / numbers.full_speed[:, :, None] ** 2
    second = _second_differences(numbers)
    blocks[:, :m, :m] = numbers.price_curvature_rate * second
    blocks[:, m:, m:] += numbers.price_acceleration * second
    return blocks


def turning_rows(numbers: Numbers, r: Rollout) -> np.ndarray:
    """Derivatives of each robot's turning by its commands (curvatures, then speeds), shape (N, M, 2M)."""
    n, m = r.turning.shape
    rows = np.empty((n, m, 2 * m))
    by_curvature, by_speed = r.mean_speed / numbers.turn_speed, r.mean_curvature / numbers.turn_speed
    np.multiply(by_curvature[:, :, None], _of_each(numbers.curvature), out=rows[:, :, :m])
    np.multiply(by_speed[:, :, None], _of_each(numbers.speed), out=rows[:, :, m:])
    return rows


def _of_each(answer: Response) -> np.ndarray:
    return answer.mean if len(answer.mean) == 1 else answer.mean[answer.which]


def _second_differences(numbers: Numbers) -> np.ndarray:
    m = len(numbers.h)
    changes = np.eye(m) - np.eye(m, k=-1)
    return changes.T @ ((numbers.cost_h / numbers.h**2)[:, None] * changes)


def _heading_differences(numbers: Numbers, r: Rollout) -> np.ndarray:
    """At nodes 1 .. M, over the edges, shape (E, M)."""
    return r.theta[numbers.edges[:, 0], 1:] - r.theta[numbers.edges[:, 1], 1:]
