# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The compiled engine of the tick solver: points, active-set and interior-point steps by kernels."""

from __future__ import annotations

from functools import partial
from typing import Any, Optional

import attrs
import numpy as np

from ...errors import SolveError
from . import active
from .active import Met
from .interior import GAINED_LITTLE
from .margins import forces_of, opened, settled
from .numbers import Numbers
from .packed import Packed, packed, restarted
from .point import Forces
from .structure import Structure

_NOTHING = np.zeros((3, 0, 0))
_K, _V, _MEAN_V, _THETA = 0, 1, 3, 13  # rows of roll: kernels/fields.py, which only loads with numba


@attrs.frozen(eq=False)
class CompiledPoint:
    """What commands lead to, as kernels hold it: kernels.point.evaluated. limits, missed, clearances as of Point."""

    roll: np.ndarray
    limits: np.ndarray
    missed: np.ndarray
    clearances: np.ndarray
    wrench: np.ndarray
    bent: np.ndarray
    cost: float
    excess: float

    @property
    def rows(self) -> tuple[np.ndarray, ...]:
        return self.roll, self.limits, self.missed, self.clearances, self.wrench

    @property
    def commands(self) -> tuple[np.ndarray, np.ndarray]:
        """Curvature and speed at nodes 1 .. M, each (N, M)."""
        return self.roll[_K, :, :-1].copy(), self.roll[_V, :, :-1].copy()


@attrs.frozen(eq=False)
class CompiledTrial:
    """See active.Trial."""

    point: CompiledPoint
    forces: Forces
    met: Met
    changed: int
    left_over: float


@attrs.frozen(eq=False)
class CompiledHeld:
    """A factor, the sets that it is for, and where its derivatives were taken."""

    factor: tuple[np.ndarray, ...]
    near: np.ndarray
    met: Met
    roll: np.ndarray
    levers: np.ndarray
    wrench: np.ndarray


@attrs.frozen(eq=False)
class CompiledIterate:
    """See interior.Iterate."""

    point: CompiledPoint
    margins: np.ndarray
    pushes: np.ndarray
    fixed: np.ndarray
    length: float
    open: float
    bending: bool


class CompiledEngine:
    """Steps on one problem. The same interface as plain.PlainEngine."""

    def __init__(self, entries: Any, numbers: Numbers, structure: Structure, known: Optional[Packed] = None) -> None:
        self._entries, self._numbers, self._structure = entries, numbers, structure
        self._known = known or packed(numbers, structure)
        k = self._known
        self._response = k.which, k.mean_k, k.mean_v, k.last_k, k.last_v
        self._costs = k.span, k.prices, k.field, k.robot
        self._bounds, self._ends, self._edges = (k.lower, k.upper), (k.target, k.end_price), (k.edges, k.edge_price)
        self._comparing = k.rows, k.means, k.row_numbers

    def started(self, numbers: Numbers) -> CompiledEngine:
        """For the same problem from another first state."""
        return CompiledEngine(self._entries, numbers, self._structure, restarted(self._known, numbers))

    def point(self, curvature: np.ndarray, speed: np.ndarray) -> CompiledPoint:
        """What commands, each (N, M), lead to."""
        return self._driven(np.ascontiguousarray(np.concatenate([curvature, speed], axis=1)))

    def _driven(self, commands: np.ndarray) -> CompiledPoint:
        k = self._known
        return CompiledPoint(*self._entries.evaluate(
            *self._response, *self._costs, *self._bounds, *self._ends, *self._edges, *self._comparing, k.pairs, k.lines,
            k.foot, commands,
        ))

    def trial(self, point: CompiledPoint, forces: Forces) -> CompiledTrial:
        """The rows that were met when the multipliers were found."""
        own = Forces(*map(np.ascontiguousarray, (forces.limits, forces.ends, forces.clearances)))
        return CompiledTrial(point, own, active.met_rows(self._numbers, own), 0, np.inf)

    def hold(self, held: Optional[CompiledHeld], trial: CompiledTrial, near: float) -> CompiledHeld:
        """The matrix for the met rows; with the last derivatives where ``held`` serves the point (see Linearised.serves)."""
        if held is not None and self._serves(held, trial.point, near):
            return self._matrix(trial, held.roll, held.levers, held.wrench, False) if trial.changed else held
        point = trial.point
        levers = np.empty((6, *point.missed.shape[:1], len(self._numbers.h)))
        return self._matrix(trial, point.roll, levers, point.wrench, True)

    def active_step(self, held: CompiledHeld, trial: CompiledTrial) -> CompiledTrial:
        """See active.Held.step."""
        k, point, old, met = self._known, trial.point, trial.forces, held.met
        sets = met.limits, met.ends, met.clearances
        commands, *pushes = self._entries.direct_active(
            *self._response, *self._costs, *self._bounds, *self._edges, *self._comparing, k.pairs, k.order, *held.factor,
            held.near, held.roll, held.levers, held.wrench, *point.rows, old.limits, old.ends, old.clearances, *sets,
        )
        after = self._driven(commands)
        limits, ends, clear, met_limits, met_ends, met_clear, changed, left_over = self._entries.settle_active(
            k.span, *self._bounds, k.end_price, after.limits, after.missed, after.clearances, *pushes, *sets
        )
        return CompiledTrial(
            after, Forces(limits, ends, clear), Met(met_limits, met_ends, met_clear), changed, left_over
        )

    def open(self, point: CompiledPoint, forces: Forces, barrier: float, least: float) -> CompiledIterate:
        """See interior.Interior.begin."""
        known = self._known.layout
        margins, pushes = opened(self._numbers, known, point, forces, barrier, least)
        fixed = np.ascontiguousarray(np.where(known.fixed, forces.limits, 0.0))
        still_open = float(np.sum(margins * pushes * known.on))
        return CompiledIterate(point, margins, pushes, fixed, 0.0, still_open, False)

    def interior_step(self, x: CompiledIterate) -> CompiledIterate:
        """See interior.Interior.step.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        k, point = self._known, x.point
        fixed, on = k.layout.fixed, k.layout.on
        soft, *stiff, pressure, levers, near, bends, bent = self._entries.stiffen_interior(
            k.span, k.robot, k.end_price, *self._edges, k.pairs, fixed, point.roll, point.wrench, x.margins, x.pushes,
            x.fixed, x.bending,
        )
        factor = self._factor(
            point.roll, point.roll, levers, point.wrench, point.bent, near, *stiff, pressure, bent, bends
        )
        direct = partial(
            self._entries.direct_interior, *self._response, *self._costs, *self._bounds, k.end_price, *self._edges,
            *self._comparing, k.pairs, k.order, *factor, fixed, on, k.owners, *point.rows, levers, near, x.margins,
            x.pushes, x.fixed, soft, pressure,
        )
        *_, barrier, aims = direct(np.zeros_like(soft))
        commands, *changes, _, _ = direct(aims)
        moved, margins, pushes, held, length = self._entries.advance_interior(
            k.owners, point.roll, x.margins, x.pushes, x.fixed, commands, *changes
        )
        after = self._driven(moved)
        still_open = self._entries.settle_interior(
            k.end_price, after.missed, after.clearances, on, margins, pushes, barrier
        )
        bending = x.bending or still_open > GAINED_LITTLE * x.open
        return CompiledIterate(after, margins, pushes, held, length, still_open, bending)

    def forces(self, x: CompiledIterate) -> Forces:
        """Multipliers of the rows, those of rows that are not met at 0."""
        known = self._known.layout
        return forces_of(known, settled(known, x.margins, x.pushes), x.fixed)

    def _matrix(
        self, trial: CompiledTrial, roll: np.ndarray, levers: np.ndarray, wrench: np.ndarray, anew: bool
    ) -> CompiledHeld:
        k, met, point = self._known, trial.met, trial.point
        *stiff, near = self._entries.stiffen_active(
            k.span, k.robot, k.pairs, roll, met.limits, met.ends, met.clearances, levers, anew
        )
        factor = self._factor(
            point.roll, roll, levers, wrench, point.bent, near, *stiff, trial.forces.clearances, False, _NOTHING
        )
        return CompiledHeld(factor, near, met, roll, levers, wrench)

    def _factor(self, *rows: Any) -> tuple[np.ndarray, ...]:
        k = self._known
        panels, begins, later, counts, beside = self._entries.assemble(
            *self._response, *self._costs, *self._edges, k.coupled, k.compared_own, k.compared_across, k.pairs, k.order,
            k.joins, *rows,
        )
        size = (2 * len(self._numbers.h) + 3) // 4 * 4
        if not self._entries.factorise(panels, begins, k.order, later, counts, beside, size):
            raise SolveError("the matrix of a step is not positive definite")
        return panels, begins, later, counts

    def _serves(self, held: CompiledHeld, point: CompiledPoint, near: float) -> bool:
        turned = np.abs(point.roll[_THETA] - held.roll[_THETA])
        sped = np.abs(point.roll[_MEAN_V] - held.roll[_MEAN_V]) / self._numbers.full_speed
        return float(turned.max()) < near and float(sped.max()) < near
