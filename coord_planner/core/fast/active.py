# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Active-set steps: rows that are met are kept as equations, all at once (primal-dual active sets).

Hintermuller, Ito & Kunisch, *The primal-dual active set strategy as a semismooth Newton method*, SIAM J. Optim. 13
(2003), from memory. Where the same rows are met as a tick ago, two or three steps with one right side each do; where
many change the sets may wander, and the interior-point steps take over.
"""

from __future__ import annotations

import attrs
import numpy as np

from . import limits
from .linearised import Linearised, Stiffness
from .numbers import Numbers
from .point import Forces, Point, evaluate, slopes

_COMPLIANCE = 1e-8  # of rows that are met: they give way by this much per unit of push, and less after every step
_PASSED = 1e-7  # a row passed by more is met from now on
_FAINT = 1e-9
_NO_ROOM = 1e-9


@attrs.frozen(eq=False)
class Met:
    """Rows that are kept as equations.

    Attributes:
        limits: 1 at the upper limit, -1 at the lower one, 0 within, shape (6, N, M).
        ends: shape (N, 7), True where the end is held. clearances: shape (P, M), True where the pair touches its line.
    """

    limits: np.ndarray
    ends: np.ndarray
    clearances: np.ndarray


@attrs.frozen(eq=False)
class Trial:
    """A point with multipliers, the rows that are met there, and how many of them changed in the last step."""

    point: Point
    forces: Forces
    met: Met
    changed: int


def begin(numbers: Numbers, point: Point, forces: Forces) -> Trial:
    """The rows that were met when the multipliers were found."""
    return Trial(point, forces, met_rows(numbers, forces), 0)


def met_rows(numbers: Numbers, forces: Forces) -> Met:
    """Rows that multipliers say are met."""
    pushed = np.sign(forces.limits) * (np.abs(forces.limits) > _FAINT)
    return Met(
        np.where(numbers.upper - numbers.lower < _NO_ROOM, 1.0, pushed),
        np.abs(forces.ends) < numbers.end_price,
        (forces.clearances > _FAINT) & (forces.clearances < numbers.short_price),
    )


def left_over(numbers: Numbers, trial: Trial) -> float:
    """Cost of what met rows still miss, because paths are curved; the next step takes it out."""
    missed = numbers.end_price * np.abs(trial.point.missed) * trial.met.ends
    short = np.maximum(-trial.point.clearances, 0.0) * trial.met.clearances
    return float(missed.sum()) + float(short.sum(axis=0) @ numbers.short_price)


class Held:
    """The matrix of an active-set step, factorised at one point; it serves points nearby as well."""

    def __init__(self, linearised: Linearised, trial: Trial) -> None:
        met, stiff = trial.met, 1.0 / _COMPLIANCE
        self.linearised, self.met = linearised, met
        self._factor = linearised.factor(trial.point, Stiffness(
            np.abs(met.limits) * stiff, met.ends * stiff, met.clearances * stiff, trial.forces
        ))

    def step(self, numbers: Numbers, trial: Trial) -> Trial:
        """Keep the met rows as equations, move, and look which rows are met then."""
        point, old, met = trial.point, trial.forces, self.met
        bound = np.where(met.limits > 0, numbers.upper, numbers.lower)
        held = met.limits != 0
        more = Forces(
            np.where(held, (point.limits - bound) / _COMPLIANCE, -old.limits),
            np.where(met.ends, point.missed / _COMPLIANCE, 0.0),
            np.where(met.clearances, -point.clearances / _COMPLIANCE, 0.0),
        )
        right = slopes(numbers, point, old) + self.linearised.pulled(point, more)
        commands = self._factor.solve(-right)
        r, m = point.r, point.r.turn.shape[1]
        by_curvature, by_speed = commands[:, :m], commands[:, m:]
        moved = limits.moved(numbers, r.curvature, r.speed, by_curvature, by_speed)
        clear_moved = self.linearised.clearances_moved(commands)
        found = Forces(
            np.where(held, old.limits + more.limits + moved / _COMPLIANCE, 0.0),
            np.where(met.ends, old.ends + more.ends + self.linearised.ends_moved(commands) / _COMPLIANCE, old.ends),
            np.where(
                met.clearances, old.clearances + more.clearances - clear_moved / _COMPLIANCE, old.clearances
            ),
        )
        return _met_after(numbers, evaluate(numbers, r.curvature + by_curvature, r.speed + by_speed), found, met)


def _met_after(numbers: Numbers, point: Point, found: Forces, met: Met) -> Trial:
    """Drop rows whose push has the wrong sign, let go where the price is reached, take up rows that are passed."""
    limit = _limits_after(numbers, point, found.limits, met.limits)
    price = numbers.end_price
    # An end that costs its full price comes back once it is reached; one without price never counts.
    ends = np.where(met.ends, np.abs(found.ends) <= price, np.sign(found.ends) * point.missed < -_PASSED) & (price > 0)
    pushed, dear = found.clearances, numbers.short_price
    clear = np.where(
        met.clearances, (pushed >= 0) & (pushed <= dear),
        np.where(pushed > 0, point.clearances > _PASSED, point.clearances < -_PASSED),
    )
    forces = Forces(
        np.where(limit != 0, found.limits, 0.0), np.clip(found.ends, -price, price), np.clip(pushed, 0.0, dear)
    )
    changed = (
        int(np.count_nonzero(limit != met.limits)) + int(np.count_nonzero(ends != met.ends))
        + int(np.count_nonzero(clear != met.clearances))
    )
    return Trial(point, forces, Met(limit, ends, clear), changed)


def _limits_after(numbers: Numbers, point: Point, pushes: np.ndarray, met: np.ndarray) -> np.ndarray:
    fixed = numbers.upper - numbers.lower < _NO_ROOM
    kept = np.where((met * pushes > 0) | fixed, met, 0.0)
    free = met == 0
    passed = (point.limits > numbers.upper + _PASSED).astype(float) - (point.limits < numbers.lower - _PASSED)
    return np.where(free, passed, kept)
