# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Between arrays and the vectors of ocp.py: variables, rows and their multipliers, laid out as there."""

from __future__ import annotations

import attrs
import numpy as np

from ..problem import CURVATURE, CURVATURE_COMMAND, SPEED_COMMAND, STATES, Problem
from . import objective
from .chain import arc_slopes, command_slopes, pulls
from .numbers import Numbers
from .point import Forces, Point, pose_forces

_STATE_COUNT = len(STATES)
_FAINT, _LARGEST = 1e-4, 1e4  # multipliers of limits outside this tell nothing about what is met


@attrs.frozen(eq=False)
class Sizes:
    """N robots, M intervals, P pairs, F fences: where the blocks of ocp.variable_blocks and ocp.row_blocks lie.

    ``compared``: whether the turnings that neighbours compare are variables of their own.
    """

    robots: int
    intervals: int
    pairs: int
    fences: int
    compared: bool

    @property
    def rates(self) -> int:
        """Where the rates begin in the variables."""
        return _STATE_COUNT * self.robots * (self.intervals + 1)

    @property
    def slacks(self) -> int:
        """Where the slacks begin in the variables."""
        return self.rates + 2 * self.robots * self.intervals

    @property
    def limits(self) -> int:
        """Where the limits of products begin in the rows."""
        return _STATE_COUNT * self.robots * self.intervals

    @property
    def clearances(self) -> int:
        """Where the clearances begin in the rows."""
        return self.limits + 2 * self.robots * self.intervals


def sizes(problem: Problem) -> Sizes:
    """Of a problem."""
    return Sizes(
        len(problem.fleet), len(problem.times) - 1, len(problem.watch.pairs), len(problem.fences.robots),
        bool(problem.shape.compared),
    )


def commands(size: Sizes, vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Commands at nodes 1 .. M from a primal vector, curvature and speed, each (N, M)."""
    states = vector[: size.rates].reshape(_STATE_COUNT, size.intervals + 1, size.robots)
    return (
        np.ascontiguousarray(states[CURVATURE_COMMAND, 1:].T), np.ascontiguousarray(states[SPEED_COMMAND, 1:].T)
    )


def forces(size: Sizes, bounds: np.ndarray, rows: np.ndarray) -> Forces:
    """Multipliers of the rows that count from those of bounds and rows; faint ones of another solver are left out."""
    n, m, p, f = size.robots, size.intervals, size.pairs, size.fences
    states = bounds[: size.rates].reshape(_STATE_COUNT, m + 1, n)
    rates = bounds[size.rates : size.slacks].reshape(2, m, n)
    products = rows[size.limits : size.clearances].reshape(2, m, n)
    limit = np.concatenate([
        states[CURVATURE_COMMAND, None, 1:], states[SPEED_COMMAND, None, 1:], rates, products
    ]).transpose(0, 2, 1)
    first = size.clearances + p * m
    clear = np.concatenate([
        -rows[size.clearances : first].reshape(m, p).T, -rows[first : first + f * m].reshape(m, f).T
    ])
    last = first + f * m
    ends = rows[last : last + _STATE_COUNT * n].reshape(_STATE_COUNT, n).T
    return Forces(_without_faint(limit), np.array(ends), np.maximum(_without_faint(clear), 0.0))


def states_of(numbers: Numbers, point: Point) -> np.ndarray:
    """All states at nodes 0 .. M, shape (N, M + 1, 7)."""
    r = point.r
    n, m = r.turn.shape
    states = np.empty((n, m + 1, _STATE_COUNT))
    states[:, 0] = numbers.begins.initial
    states[:, :, 0], states[:, :, 1], states[:, :, 2] = r.x, r.y, r.theta
    states[:, 1:, 3] = numbers.curvature.forward(numbers.curvature.reached, r.curvature) + numbers.begins.curvature
    states[:, 1:, 4] = numbers.speed.forward(numbers.speed.reached, r.speed) + numbers.begins.speed
    states[:, 1:, 5], states[:, 1:, 6] = r.curvature, r.speed
    return states


def primal(
    numbers: Numbers, size: Sizes, states: np.ndarray, point: Point, short: np.ndarray, priced: np.ndarray
) -> np.ndarray:
    """The primal vector. short: missing clearances, (P + F, M). priced: which ends count, (N, 7)."""
    missed = point.missed * priced
    return np.concatenate([
        states.transpose(2, 1, 0).ravel(), point.limits[2:4].transpose(0, 2, 1).ravel(),
        short[: size.pairs].T.ravel(), short[size.pairs :].T.ravel(),
        np.maximum(missed, 0.0).T.ravel(), np.maximum(-missed, 0.0).T.ravel(),
        *([point.r.turning.T.ravel()] if size.compared else []),
    ])


def multipliers(
    numbers: Numbers, point: Point, found: Forces, size: Sizes
) -> tuple[np.ndarray, np.ndarray]:
    """Multipliers of bounds and rows in the layout and with the signs of CasADi; those of the first node are 0."""
    n, m = size.robots, size.intervals
    states = np.zeros((_STATE_COUNT, m + 1, n))
    limit = found.limits.transpose(0, 2, 1)
    states[CURVATURE_COMMAND, 1:], states[SPEED_COMMAND, 1:] = limit[0], limit[1]
    watched, fenced = found.clearances[: size.pairs], found.clearances[size.pairs :]
    bounds = np.concatenate([
        states.ravel(), limit[2:4].ravel(), (watched - numbers.short_price).T.ravel(),
        (fenced - numbers.short_price).T.ravel(),
        (found.ends - numbers.end_price).T.ravel(), (-found.ends - numbers.end_price).T.ravel(),
        np.zeros(n * m if size.compared else 0),
    ])
    rows = np.concatenate([
        costates(numbers, point, found).transpose(0, 2, 1).ravel(), limit[4:].ravel(),
        -watched.T.ravel(), -fenced.T.ravel(), found.ends.T.ravel(),
        *([_comparing_pulls(numbers, point).T.ravel()] if size.compared else []),
    ])
    return bounds, rows


def costates(numbers: Numbers, point: Point, found: Forces) -> np.ndarray:
    """Multipliers of the motion over each interval, in the order of STATES, shape (7, N, M).

    Each makes the Lagrangian stationary: by the pose and by what is reached at the interval's end, and by its rate.
    """
    r = point.r
    forces = pose_forces(numbers, point, found)
    by_mean = command_slopes(numbers, r, *arc_slopes(r, *forces))
    own = objective.mean_slopes(numbers, r)
    answers, prices = (numbers.curvature, numbers.speed), (numbers.price_curvature_rate, numbers.price_acceleration)
    costate = np.empty((_STATE_COUNT,) + r.turn.shape)
    np.negative(pulls(r, *forces), out=costate[:3])
    for i, (answer, price) in enumerate(zip(answers, prices)):
        pull = answer.lag * (by_mean[i] + own[i])
        by_reached = -pull
        by_reached[:, :-1] += pull[:, 1:]
        by_reached[:, -1] += found.ends[:, CURVATURE + i]
        reached = -answer.backward(answer.fading, by_reached)
        rate = point.limits[2 + i]
        costate[CURVATURE + i] = reached
        costate[CURVATURE_COMMAND + i] = (
            answer.lag * (1.0 - answer.decay) * reached
            + (price * numbers.cost_h * rate + found.limits[2 + i]) / numbers.h
        )
    return costate


def _comparing_pulls(numbers: Numbers, point: Point) -> np.ndarray:
    """Slope of the cost by the turnings that neighbours compare, shape (N, M)."""
    if numbers.comparing is None:
        return np.zeros_like(point.r.turning)
    return numbers.comparing.slopes(point.r.turning)


def _without_faint(values: np.ndarray) -> np.ndarray:
    size = np.abs(values)
    return np.where((size > _FAINT) & (size < _LARGEST), values, 0.0)
