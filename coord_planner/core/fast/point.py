# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Commands with all that follows from them: poses, values of every row, cost, and slopes of weighted sums of rows."""

from __future__ import annotations

from typing import Protocol

import attrs
import numpy as np

from . import clearance, ends, limits, objective
from .chain import Rollout, arc_slopes, command_slopes, roll_out
from .numbers import Numbers


@attrs.frozen(eq=False)
class Forces:
    """Multipliers of all rows: pushes of limits (6, N, M), of ends (N, 7), of clearances (P, M; >= 0 pushes apart)."""

    limits: np.ndarray
    ends: np.ndarray
    clearances: np.ndarray


class Rows(Protocol):
    """Values of all rows at a point: limits (6, N, M), missed ends (N, 7), clearances (P, M)."""

    @property
    def limits(self) -> np.ndarray: ...

    @property
    def missed(self) -> np.ndarray: ...

    @property
    def clearances(self) -> np.ndarray: ...


@attrs.frozen(eq=False)
class Point:
    """N robots, M intervals, P pairs.

    Attributes:
        r: rollout of the commands. sight: directions at the nodes; None without pairs.
        limits: values of the rows LIMITS, shape (6, N, M). missed: last state less target, shape (N, 7).
        clearances: shape (P, M), metres, negative where short.
    """

    r: Rollout
    sight: clearance.Sight | None
    limits: np.ndarray
    missed: np.ndarray
    clearances: np.ndarray


def evaluate(numbers: Numbers, curvature: np.ndarray, speed: np.ndarray) -> Point:
    """All rows at commands of nodes 1 .. M, each of shape (N, M)."""
    r = roll_out(numbers, curvature, speed)
    sight = clearance.look(numbers, r) if len(numbers.pairs) else None
    clear = np.zeros((0, curvature.shape[1])) if sight is None else clearance.clearances(numbers, r, sight)
    return Point(r, sight, limits.values(numbers, curvature, speed), ends.missed(numbers, r), clear)


def cost(numbers: Numbers, point: Point) -> float:
    """The whole cost with exact penalties: what ocp.py minimises, slacks eliminated."""
    missed = float(np.sum(numbers.end_price * np.abs(point.missed)))
    short = float(np.maximum(-point.clearances, 0.0).sum(axis=0) @ numbers.short_price)
    return objective.smooth_cost(numbers, point.r) + missed + short


def excess(numbers: Numbers, point: Point) -> float:
    """Largest amount by which any limit is passed, in its own unit."""
    over, under = point.limits - numbers.upper, numbers.lower - point.limits
    return max(0.0, float(over.max()), float(under.max()))


def pose_forces(numbers: Numbers, point: Point, forces: Forces) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Slopes of the alignment and of sum(forces * rows) by the poses x, y, heading at nodes 1 .. M, each (N, M)."""
    torque = objective.aligning_torque(numbers, point.r)
    force_x, force_y = np.zeros((2,) + torque.shape)
    force_x[:, -1] += forces.ends[:, 0]
    force_y[:, -1] += forces.ends[:, 1]
    torque[:, -1] += forces.ends[:, 2]
    if point.sight is not None:
        clearance.push(numbers, point.sight, -forces.clearances, force_x, force_y, torque)
    return force_x, force_y, torque


def slopes(numbers: Numbers, point: Point, forces: Forces) -> np.ndarray:
    """Slopes of the smooth cost and of sum(forces * rows), by the commands (curvatures, then speeds), shape (N, 2M).

    Clearances count negative: they push apart.
    """
    r = point.r
    by_curvature, by_speed = command_slopes(numbers, r, *arc_slopes(r, *pose_forces(numbers, point, forces)))
    turning, leaving = objective.mean_slopes(numbers, r)
    found = limits.pulled(numbers, r.curvature, r.speed, forces.limits)
    m = len(numbers.h)
    objective.add_rate_slopes(numbers, r, found)
    ends.pull_commands(numbers, forces.ends, found)
    found[:, :m] += numbers.curvature.backward(numbers.curvature.mean, by_curvature + turning)
    found[:, m:] += numbers.speed.backward(numbers.speed.mean, by_speed + leaving)
    return found
