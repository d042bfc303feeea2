# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Limits of each robot's commands: boxes, rates and products, as rows of the commands at nodes 1 .. M."""

from __future__ import annotations

import numpy as np

from ..problem import CURVATURE_COMMAND, SPEED_COMMAND
from .differences import changes, changes_back
from .numbers import LIMITS, Numbers


def values(numbers: Numbers, curvature: np.ndarray, speed: np.ndarray) -> np.ndarray:
    """Values of the rows LIMITS at commands of shape (N, M); shape (6, N, M)."""
    found = np.empty((len(LIMITS),) + curvature.shape)
    found[0], found[1] = curvature, speed
    found[2], found[3] = rates(numbers, curvature, CURVATURE_COMMAND), rates(numbers, speed, SPEED_COMMAND)
    np.multiply(speed, curvature, out=found[4])
    np.multiply(speed, found[4], out=found[5])
    return found


def moved(
    numbers: Numbers, curvature: np.ndarray, speed: np.ndarray, by_curvature: np.ndarray, by_speed: np.ndarray
) -> np.ndarray:
    """First-order change of the rows when commands move, shape (6, N, M)."""
    found = np.empty((len(LIMITS),) + curvature.shape)
    found[0], found[1] = by_curvature, by_speed
    found[2], found[3] = changes(by_curvature) / numbers.h, changes(by_speed) / numbers.h
    found[4] = speed * by_curvature + curvature * by_speed
    found[5] = speed * (speed * by_curvature + 2.0 * curvature * by_speed)
    return found


def pulled(numbers: Numbers, curvature: np.ndarray, speed: np.ndarray, forces: np.ndarray) -> np.ndarray:
    """Slopes of sum(forces * rows) by the commands, shape (N, 2M). forces: shape (6, N, M)."""
    twisting = forces[4] + speed * forces[5]
    return np.concatenate([
        forces[0] + speed * twisting + changes_back(forces[2] / numbers.h),
        forces[1] + curvature * (twisting + speed * forces[5]) + changes_back(forces[3] / numbers.h),
    ], axis=1)


def stiffen(
    blocks: np.ndarray, numbers: Numbers, curvature: np.ndarray, speed: np.ndarray, stiffness: np.ndarray
) -> None:
    """Add rows' * stiffness * rows to each robot's block, shape (N, 2M, 2M), in place. stiffness: (6, N, M)."""
    n, m = curvature.shape
    size = 2 * m
    flat = blocks.reshape(n, size * size)
    diagonal = flat[:, :: size + 1]
    above, below = flat[:, 1 :: size + 1], flat[:, size :: size + 1]  # neighbours of the diagonal, 2M - 1 each
    mixed, mixed_back = flat[:, m :: size + 1][:, :m], flat[:, m * size :: size + 1]  # (k_i, v_i) and (v_i, k_i)
    twisting = stiffness[4] + speed**2 * stiffness[5]
    diagonal[:, :m] += stiffness[0] + speed**2 * twisting
    diagonal[:, m:] += stiffness[1] + curvature**2 * (stiffness[4] + 4.0 * speed**2 * stiffness[5])
    both = speed * curvature * (stiffness[4] + 2.0 * speed**2 * stiffness[5])
    mixed += both
    mixed_back += both
    for part, first in ((stiffness[2], 0), (stiffness[3], m)):
        rate = part / numbers.h**2
        diagonal[:, first : first + m] += rate
        diagonal[:, first : first + m - 1] += rate[:, 1:]
        above[:, first : first + m - 1] -= rate[:, 1:]
        below[:, first : first + m - 1] -= rate[:, 1:]


def rates(numbers: Numbers, commands: np.ndarray, state: int) -> np.ndarray:
    """Rates of commands over the intervals, shape (N, M); state: which of STATES they are."""
    found = changes(commands)
    found[:, 0] -= numbers.begins.initial[:, state]
    return found / numbers.h
