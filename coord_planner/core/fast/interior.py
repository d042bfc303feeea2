"""Primal-dual interior-point steps, condensed to the commands: one matrix a step, two right sides.

Predictor and corrector: Mehrotra, *On the implementation of a primal-dual interior point method*, SIAM J. Optim. 2
(1992), from memory. After each step every row is looked at anew along exact arcs, so that there is no loop of quadratic
programs within a loop of linearisations.
"""

from __future__ import annotations

import attrs
import numpy as np

from . import limits
from .blocks import Matrix, matrix
from .factor import Factor
from .margins import (
    LOWER,
    OVER,
    ROOM,
    SHORT,
    UNDER,
    UPPER,
    Layout,
    forces_of,
    layout,
    opened,
)
from .numbers import Numbers
from .point import Forces, Point, cost_slopes, evaluate, row_slopes
from .structure import Structure

BARRIER = 1e-2  # product of margin and push with which a solve begins

_STIFFEST, _SOFTEST = 1e-9, 1e12  # compliances beyond these are cut off
_FIXED = 1e-6  # compliance of limits without room
_FAINT = 1e-5  # pushes between robots below this are left out of the forces
_SMALLEST = 1e-10  # barrier below which rounding takes over
_SHORT_OF = 0.995  # part of the way to the nearest margin or push of 0 that a step goes


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

    def begin(self, point: Point, forces: Forces) -> Iterate:
        """Open margins around a point, with the multipliers of the last tick."""
        known = self._layout
        margins, pushes = opened(self._numbers, known, point, forces, BARRIER)
        return Iterate(point, margins, pushes, np.where(known.fixed, forces.limits, 0.0), 0.0)

    def open(self, x: Iterate) -> float:
        """What the products of margins and pushes add up to: about the cost that is still to be saved."""
        return _sum_of_products(x.margins, x.pushes * self._layout.on)

    def forces(self, x: Iterate) -> Forces:
        """Multipliers of the rows."""
        return forces_of(self._layout, x.pushes, x.fixed)

    def step(self, x: Iterate) -> Iterate:
        """One step.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        system = _System(self._numbers, self._structure, self._constant, self._layout, x)
        on, before = self._layout.on, self.open(x) / self._layout.count
        ahead = system.direction(np.zeros_like(x.margins))
        a, b = _longest(x.margins, ahead.margins), _longest(x.pushes, ahead.pushes)
        left = _sum_of_products(x.margins + a * ahead.margins, (x.pushes + b * ahead.pushes) * on) / self._layout.count
        barrier = max((max(left, 0.0) / before) ** 3 * before, _SMALLEST)
        move = system.direction((barrier - ahead.margins * ahead.pushes) / x.pushes)
        a, b = _longest(x.margins, move.margins), _longest(x.pushes, move.pushes)
        r, m = x.point.r, x.point.r.turn.shape[1]
        point = evaluate(
            self._numbers, r.curvature + a * move.commands[:, :m], r.speed + a * move.commands[:, m:]
        )
        return Iterate(point, x.margins + a * move.margins, x.pushes + b * move.pushes, move.fixed, min(a, b))


@attrs.frozen(eq=False)
class _Move:
    """Changes of commands (N, 2M), margins and pushes (L,); multipliers of fixed limits after it."""

    commands: np.ndarray
    margins: np.ndarray
    pushes: np.ndarray
    fixed: np.ndarray


class _System:
    """The linearised conditions at an iterate, factorised. Compliances: margin / push."""

    def __init__(
        self, numbers: Numbers, structure: Structure, constant: np.ndarray, known: Layout, x: Iterate
    ) -> None:
        self._numbers, self._layout, self._x = numbers, known, x
        self._compliance = np.clip(x.margins / x.pushes, _STIFFEST, _SOFTEST)
        self._soft = soft = known.split(self._compliance)
        self._push = push = known.split(x.pushes)
        self._end = soft[OVER] + soft[UNDER]
        self._clear = soft[ROOM] + soft[SHORT]
        self._matrix: Matrix = matrix(
            numbers, structure, x.point, constant,
            np.where(known.fixed, 1.0 / _FIXED, 1.0 / soft[UPPER] + 1.0 / soft[LOWER]),
            known.priced / self._end, 1.0 / self._clear, push[ROOM],
        )
        self._factor = Factor(self._matrix.diagonal, self._matrix.beside, structure.order)
        self._slopes = cost_slopes(numbers, x.point)

    def direction(self, aims: np.ndarray) -> _Move:
        """The move after which margins would be ``aims``, shape (L,), if pushes stayed."""
        numbers, known, x = self._numbers, self._layout, self._x
        point, push, soft, aim = x.point, self._push, self._soft, known.split(aims)
        upper = push[UPPER] + (point.limits - numbers.upper + aim[UPPER]) / soft[UPPER]
        lower = push[LOWER] + (numbers.lower - point.limits + aim[LOWER]) / soft[LOWER]
        fixed = x.fixed + (point.limits - numbers.upper) / _FIXED
        ends = known.price - push[OVER] + (point.missed - aim[OVER] + aim[UNDER]) / self._end
        apart = push[ROOM] - (point.clearances + aim[SHORT] - aim[ROOM]) / self._clear
        forces = Forces(
            np.where(known.fixed, fixed, upper - lower), np.where(known.priced, ends, 0.0),
            np.where(np.abs(apart) > _FAINT, apart, 0.0),
        )
        commands = self._factor.solve(-(self._slopes + row_slopes(numbers, point, forces)))
        m = commands.shape[1] // 2
        moved = limits.moved(numbers, point.r.curvature, point.r.speed, commands[:, :m], commands[:, m:])
        after = np.empty_like(aims)
        pushed = known.split(after)
        np.add(upper, moved / soft[UPPER], out=pushed[UPPER])
        np.subtract(lower, moved / soft[LOWER], out=pushed[LOWER])
        ends = ends + self._matrix.ends_moved(commands) / self._end
        np.subtract(known.price, ends, out=pushed[OVER])
        np.add(known.price, ends, out=pushed[UNDER])
        np.subtract(apart, self._matrix.clearances_moved(commands, apart.shape) / self._clear, out=pushed[ROOM])
        np.subtract(known.short_price, pushed[ROOM], out=pushed[SHORT])
        by_push = (after - x.pushes) * known.on
        by_margin = (aims - self._compliance * by_push - x.margins) * known.on
        return _Move(commands, by_margin, by_push, np.where(known.fixed, fixed + moved / _FIXED, 0.0))


def _longest(values: np.ndarray, changes: np.ndarray) -> float:
    """The longest step, at most 1, that leaves all values above 0."""
    worst = float(np.max(-changes / values))
    return min(1.0, _SHORT_OF / worst) if worst > 0.0 else 1.0


def _sum_of_products(a: np.ndarray, b: np.ndarray) -> float:
    """As a @ b, which for long vectors would wake BLAS's other threads."""
    return float(np.sum(a * b))
