# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Primal-dual interior-point steps, condensed to the commands: one matrix a step, two right sides.

Predictor and corrector: Mehrotra, *On the implementation of a primal-dual interior point method*, SIAM J. Optim. 2
(1992), from memory. After each step every row is looked at anew along exact arcs, so that there is no loop of quadratic
programs within a loop of linearisations.
"""

from __future__ import annotations

import attrs
import numpy as np

from . import limits
from .linearised import Linearised, Stiffness
from .margins import (
    LOWER,
    OVER,
    ROOM,
    SHORT,
    UNDER,
    UPPER,
    Layout,
    fit,
    forces_of,
    largest_of_each,
    layout,
    opened,
    settled,
    spread,
)
from .numbers import Numbers
from .point import Forces, Point, cost, evaluate, slopes
from .structure import Structure

BARRIER = 0.2  # product of margin and push with which a solve begins

_STIFFEST, _SOFTEST = 1e-9, 1e12  # compliances beyond these are cut off
_FIXED = 1e-10  # compliance of limits without room
_SMALLEST = 1e-10  # barrier below which rounding takes over
GAINED_LITTLE = 0.7  # part of what was open that a good step does not leave: if it does, second derivatives matter
SHARES = (1.0, 0.5, 0.25)  # of a step, tried in turn while cost and what is open both grow: paths are too curved
_SHORT_OF = 0.92  # part of the way to the nearest margin or push of 0 that a step goes


@attrs.frozen(eq=False)
class Iterate:
    """Where a solve stands.

    Attributes:
        point: commands and rows. margins, pushes: shape (L,), all above 0.
        fixed: multipliers of limits without room, shape (6, N, M), 0 elsewhere.
        length: part of the last step that was taken, of commands and pushes whichever is less.
    """

    point: Point
    margins: np.ndarray
    pushes: np.ndarray
    fixed: np.ndarray
    length: float


class Interior:
    """Interior-point steps on one problem.

    Args:
        constant: objective.constant_blocks of the problem.
    """

    def __init__(self, numbers: Numbers, structure: Structure, constant: np.ndarray) -> None:
        self._numbers, self._structure, self._constant = numbers, structure, constant
        self._layout: Layout = layout(numbers)
        self._linearised: Linearised | None = None
        self._bending = False

    def begin(self, point: Point, forces: Forces, barrier: float, least: float) -> Iterate:
        """Open margins around a point, with the multipliers of the last tick."""
        known = self._layout
        margins, pushes = opened(self._numbers, known, point, forces, barrier, least)
        return Iterate(point, margins, pushes, np.where(known.fixed, forces.limits, 0.0), 0.0)

    def open(self, x: Iterate) -> float:
        """What the products of margins and pushes add up to: about the cost that is still to be saved."""
        # Not a dot product: for long vectors that would wake BLAS's other threads.
        return float(np.sum(x.margins * x.pushes * self._layout.on))

    def forces(self, x: Iterate) -> Forces:
        """Multipliers of the rows, those of rows that are not met at 0."""
        return forces_of(self._layout, settled(self._layout, x.margins, x.pushes), x.fixed)

    def step(self, x: Iterate) -> Iterate:
        """One step.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        if self._linearised is None or not self._linearised.serves(x.point):
            self._linearised = Linearised(self._numbers, self._structure, self._constant, x.point)
        system = _System(self._numbers, self._layout, self._linearised, x, self._bending)
        on, opened_by = self._layout.on, self.open(x)
        before = opened_by / self._layout.count
        ahead = system.direction(np.zeros_like(x.margins))
        a, b = self._lengths(x.margins, ahead.margins), self._lengths(x.pushes, ahead.pushes)
        products = (x.margins + self._spread(a) * ahead.margins) * (x.pushes + self._spread(b) * ahead.pushes)
        left = max(float(np.sum(products * on)) / self._layout.count, 0.0)
        barrier = max((left / before) ** 3 * before, _SMALLEST)
        move = system.direction((barrier - ahead.margins * ahead.pushes) / x.pushes)
        before_cost = cost(self._numbers, x.point)
        for share in SHARES:
            after = self._moved(x, move, barrier, share)
            if self.open(after) <= opened_by or cost(self._numbers, after.point) <= before_cost:
                break
        self._bending = self._bending or self.open(after) > GAINED_LITTLE * opened_by
        return after

    def _moved(self, x: Iterate, move: _Move, barrier: float, share: float) -> Iterate:
        a, b = share * self._lengths(x.margins, move.margins), share * self._lengths(x.pushes, move.pushes)
        commands = a[:, None] * move.commands
        r, m = x.point.r, x.point.r.turn.shape[1]
        point = evaluate(self._numbers, r.curvature + commands[:, :m], r.speed + commands[:, m:])
        margins = x.margins + self._spread(a) * move.margins
        pushes = x.pushes + self._spread(b) * move.pushes
        fit(self._layout, point, margins, barrier)
        fixed = x.fixed + b[:, None] * (move.fixed - x.fixed)
        return Iterate(point, margins, pushes, fixed, float(np.minimum(a, b).min()))

    def _lengths(self, values: np.ndarray, changes: np.ndarray) -> np.ndarray:
        """The longest step of each robot, at most 1, that leaves all its values above 0, shape (N,).

        Robots far from a conflict need not wait for those in it.
        """
        worst = largest_of_each(self._numbers, self._layout, -changes / values)
        return np.minimum(1.0, _SHORT_OF / np.maximum(worst, _SHORT_OF))

    def _spread(self, lengths: np.ndarray) -> np.ndarray:
        return spread(self._numbers, self._layout, lengths)


@attrs.frozen(eq=False)
class _Move:
    """Changes of commands (N, 2M), margins and pushes (L,); multipliers of fixed limits after it."""

    commands: np.ndarray
    margins: np.ndarray
    pushes: np.ndarray
    fixed: np.ndarray


class _System:
    """The linearised conditions at an iterate, factorised. Compliances: margin / push."""

    def __init__(self, numbers: Numbers, known: Layout, linearised: Linearised, x: Iterate, bending: bool) -> None:
        self._numbers, self._layout, self._linearised = numbers, known, linearised
        self._compliance = np.clip(x.margins / x.pushes, _STIFFEST, _SOFTEST)
        self._soft = soft = known.split(self._compliance)
        self._end = soft[OVER] + soft[UNDER]
        self._clear = soft[ROOM] + soft[SHORT]
        self._x = x
        self._forces = forces_of(known, x.pushes, x.fixed)
        self._factor = linearised.factor(x.point, Stiffness(
            np.where(known.fixed, 1.0 / _FIXED, 1.0 / soft[UPPER] + 1.0 / soft[LOWER]),
            known.priced / self._end, 1.0 / self._clear, self._forces,
        ), bending)
        self._slopes = slopes(numbers, x.point, self._forces)

    def direction(self, aims: np.ndarray) -> _Move:
        """The move after which margins would be ``aims``, shape (L,), if pushes stayed."""
        numbers, known, x = self._numbers, self._layout, self._x
        point, push, soft, aim = x.point, known.split(x.pushes), self._soft, known.split(aims)
        upper = push[UPPER] + (point.limits - numbers.upper + aim[UPPER]) / soft[UPPER]
        lower = push[LOWER] + (numbers.lower - point.limits + aim[LOWER]) / soft[LOWER]
        fixed = x.fixed + (point.limits - numbers.upper) / _FIXED
        ends = known.price - push[OVER] + (point.missed - aim[OVER] + aim[UNDER]) / self._end
        apart = push[ROOM] - (point.clearances + aim[SHORT] - aim[ROOM]) / self._clear
        old = self._forces
        more = Forces(
            np.where(known.fixed, fixed, upper - lower) - old.limits, np.where(known.priced, ends - old.ends, 0.0),
            apart - old.clearances,
        )
        commands = self._factor.solve(-(self._slopes + self._linearised.pulled(point, more)))
        m = commands.shape[1] // 2
        moved = limits.moved(numbers, point.r.curvature, point.r.speed, commands[:, :m], commands[:, m:])
        after = np.empty_like(aims)
        pushed = known.split(after)
        np.add(upper, moved / soft[UPPER], out=pushed[UPPER])
        np.subtract(lower, moved / soft[LOWER], out=pushed[LOWER])
        ends = ends + self._linearised.ends_moved(commands) / self._end
        np.subtract(known.price, ends, out=pushed[OVER])
        np.add(known.price, ends, out=pushed[UNDER])
        np.subtract(apart, self._linearised.clearances_moved(commands) / self._clear, out=pushed[ROOM])
        np.subtract(known.short_price, pushed[ROOM], out=pushed[SHORT])
        by_push = (after - x.pushes) * known.on
        by_margin = (aims - self._compliance * by_push - x.margins) * known.on
        return _Move(commands, by_margin, by_push, np.where(known.fixed, fixed + moved / _FIXED, 0.0))

