# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The compiled engine of the tick solver: points, active-set and interior-point steps by kernels."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import Any, Optional

import attrs
import numpy as np

from ...errors import SolveError
from . import active, clearance
from .active import Met
from .chain import Rollout
from .interior import GAINED_LITTLE, SHARES
from .kernels import fields
from .margins import forces_of, opened, settled
from .numbers import Numbers
from .packed import Packed, packed, restarted
from .point import Forces, Point
from .structure import Structure


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
    def flat(self) -> tuple[np.ndarray, ...]:
        return self.limits.ravel(), self.missed.ravel(), self.clearances.ravel()

    @property
    def commands(self) -> tuple[np.ndarray, np.ndarray]:
        """Curvature and speed at nodes 1 .. M, each (N, M)."""
        return self.roll[fields.K, :, :-1].copy(), self.roll[fields.V, :, :-1].copy()


@attrs.frozen(eq=False)
class CompiledTrial:
    """See active.Trial."""

    point: CompiledPoint
    forces: Forces
    met: Met
    changed: int
    left_over: float


At = tuple[np.ndarray, np.ndarray, np.ndarray]  # roll, levers and wrenches: where derivatives are taken


@attrs.frozen(eq=False)
class CompiledHeld:
    """A factor, the pairs and the sets that it is for, and where its derivatives were taken."""

    factor: tuple[np.ndarray, ...]
    near: np.ndarray
    met: Met
    at: At


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
        self._known = k = known or packed(numbers, structure)
        self._costs = k.which, k.mean, k.last, k.span, k.prices, k.field, k.robot
        self._bounds, self._price = (k.lower.ravel(), k.upper.ravel()), k.end_price.ravel()
        self._fixed, self._edges = k.layout.fixed.ravel(), (k.edges, k.edge_price)
        self._comparing = k.rows, k.means, k.row_numbers

    def started(self, numbers: Numbers) -> CompiledEngine:
        """For the same problem from another first state."""
        return CompiledEngine(self._entries, numbers, self._structure, restarted(self._known, numbers))

    def point(self, curvature: np.ndarray, speed: np.ndarray) -> CompiledPoint:
        """What commands, each (N, M), lead to."""
        return self._driven(np.ascontiguousarray(np.concatenate([curvature, speed], axis=1)))

    def boxed(self, point: CompiledPoint) -> tuple[Point, float]:
        """See plain.PlainEngine.boxed."""
        k, commands = self._known, _commands(point)
        kept = np.clip(commands, np.concatenate(list(k.lower[:2]), axis=1), np.concatenate(list(k.upper[:2]), axis=1))
        if not np.array_equal(kept, commands):
            point = self._driven(kept)
        r = _rollout(self._numbers, point.roll)
        sight = clearance.look(self._numbers, r) if len(self._numbers.pairs) else None
        return Point(r, sight, point.limits, point.missed, point.clearances), point.cost

    def trial(self, point: CompiledPoint, forces: Forces) -> CompiledTrial:
        """The rows that were met when the multipliers were found."""
        own = Forces(*map(np.ascontiguousarray, (forces.limits, forces.ends, forces.clearances)))
        return CompiledTrial(point, own, active.met_rows(self._numbers, own), 0, np.inf)

    def hold(self, held: Optional[CompiledHeld], trial: CompiledTrial, near: float) -> CompiledHeld:
        """The matrix for the met rows, with the last derivatives where they serve the point (see Linearised.serves)."""
        if held is not None and self._serves(held, trial.point, near):
            return self._matrix(trial, held.at) if trial.changed else held
        return self._matrix(trial, None)

    def active_step(self, held: CompiledHeld, trial: CompiledTrial) -> CompiledTrial:
        """See active.Held.step."""
        k, point, old, met = self._known, trial.point, trial.forces, held.met
        more = self._entries.want(*self._bounds, *point.flat, old.limits.ravel(), *_flat(met))[:3]
        levers = self._linearised(point, old.clearances, old, False)[0]
        commands, *moved = self._respond(
            held.factor, held.near, (point.roll, levers, point.wrench), _parts(old), held.at,
            tuple(flat.reshape(row.shape) for flat, row in zip(more, _parts(old))), True,
        )
        after = self._driven(_commands(point) + commands)
        *found, changed, left_over = self._entries.settle_active(
            *self._bounds, self._price, k.span[2], *after.flat, *_flat(old), *more, *map(np.ravel, moved), *_flat(met)
        )
        rows = [flat.reshape(row.shape) for flat, row in zip(found, 2 * _parts(old))]
        return CompiledTrial(after, Forces(*rows[:3]), Met(*rows[3:]), changed, left_over)

    def open(self, point: CompiledPoint, forces: Forces, barrier: float, least: float) -> CompiledIterate:
        """See interior.Interior.begin."""
        known = self._known.layout
        margins, pushes = opened(self._numbers, known, point, forces, barrier, least)
        held = np.where(known.fixed, forces.limits, 0.0).ravel()
        return CompiledIterate(point, margins, pushes, held, 0.0, float(np.sum(margins * pushes * known.on)), False)

    def interior_step(self, x: CompiledIterate) -> CompiledIterate:
        """See interior.Interior.step.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        call, k, point = self._entries, self._known, x.point
        soft, *found = call.stiffen(self._fixed, self._price, point.clearances.size, x.margins, x.pushes, x.fixed)
        stiff, old = _shaped(found[:3], point), Forces(*_shaped(found[3:], point))
        levers, near, bends, bent = self._linearised(point, stiff[2], old, x.bending)
        at = point.roll, levers, point.wrench
        factor = self._factor(point, at, near, stiff, old.clearances, bent, bends)
        move = partial(self._move, x, soft, old, factor, near, at)
        *_, barrier, aims = move(np.zeros_like(soft))
        *moved, _, _ = move(aims)
        for share in SHARES:
            commands, margins, pushes, held, length = call.advance(
                k.owners, point.roll, x.margins, x.pushes, x.fixed, *moved, share
            )
            after = self._driven(commands)
            _, missed, clear = after.flat
            still_open = call.settle_interior(self._price, missed, clear, k.layout.on, margins, pushes, barrier)
            if still_open <= x.open or after.cost <= point.cost:
                break
        bending = x.bending or still_open > GAINED_LITTLE * x.open
        return CompiledIterate(after, margins, pushes, held, length, still_open, bending)

    def forces(self, x: CompiledIterate) -> Forces:
        """Multipliers of the rows, those of rows that are not met at 0."""
        known = self._known.layout
        return forces_of(known, settled(known, x.margins, x.pushes), x.fixed.reshape(known.fixed.shape))

    def _driven(self, commands: np.ndarray) -> CompiledPoint:
        k = self._known
        return CompiledPoint(*self._entries.evaluate(
            *self._costs, k.lower, k.upper, k.target, k.end_price, *self._edges, *self._comparing, k.pairs, k.lines,
            k.foot, commands,
        ))

    def _linearised(self, point: CompiledPoint, stiff: np.ndarray, forces: Forces, bending: bool) -> Any:
        k = self._known
        return self._entries.linearise(
            k.span, k.robot, k.pairs, point.roll, point.wrench, stiff, forces.ends, forces.clearances, bending
        )

    def _move(
        self, x: CompiledIterate, soft: np.ndarray, old: Forces, factor: Any, near: np.ndarray, at: At, aims: np.ndarray
    ) -> Any:
        """The move after which margins would be ``aims``, shape (L,), if pushes stayed: kernels.interior.follow."""
        call, k = self._entries, self._known
        ahead, *aimed = call.aim(self._fixed, self._price, x.pushes, x.fixed, soft, aims, *x.point.flat, *self._bounds)
        limits, ends, clear = _shaped(aimed, x.point)
        # Pairs that do not count stay as they are.
        forces = limits, ends, np.where(near[:, None], clear, old.clearances)
        commands, *moved = self._respond(factor, near, at, forces, at, forces, False)
        return commands, *call.follow(
            self._fixed, self._price, k.span[2], x.margins, x.pushes, soft, aims, k.layout.on, k.owners, len(commands),
            ahead, *aimed, *map(np.ravel, moved),
        )

    def _respond(
        self, factor: Any, near: np.ndarray, at: At, forces: Any, rows_at: At, more: Any, both: bool
    ) -> Any:
        k = self._known
        return self._entries.respond(
            *self._costs, *self._edges, *self._comparing, k.pairs, k.order, *factor, near, *at, *forces, *rows_at,
            *more, both,
        )

    def _matrix(self, trial: CompiledTrial, at: Optional[At]) -> CompiledHeld:
        point, old, met = trial.point, trial.forces, trial.met
        stiff = _shaped(self._entries.want(*self._bounds, *point.flat, old.limits.ravel(), *_flat(met))[3:], point)
        levers, near, bends, _ = self._linearised(point, stiff[2], old, False)
        at = at or (point.roll, levers, point.wrench)
        return CompiledHeld(self._factor(point, at, near, stiff, old.clearances, False, bends), near, met, at)

    def _factor(
        self, point: CompiledPoint, at: At, near: np.ndarray, stiff: Any, pressure: np.ndarray, bent: bool,
        bends: np.ndarray,
    ) -> tuple[np.ndarray, ...]:
        k = self._known
        panels, begins, later, counts, beside = self._entries.assemble(
            *self._costs, *self._edges, k.coupled, k.compared_own, k.compared_across, k.pairs, k.order, k.joins,
            point.roll, *at, point.bent, near, *stiff, pressure, bent, bends,
        )
        size = (2 * len(self._numbers.h) + 3) // 4 * 4
        if not self._entries.factorise(panels, begins, k.order, later, counts, beside, size):
            raise SolveError("the matrix of a step is not positive definite")
        return panels, begins, later, counts

    def _serves(self, held: CompiledHeld, point: CompiledPoint, near: float) -> bool:
        roll = held.at[0]
        turned = np.abs(point.roll[fields.THETA] - roll[fields.THETA])
        sped = np.abs(point.roll[fields.MEAN_V] - roll[fields.MEAN_V]) / self._numbers.full_speed
        return float(turned.max()) < near and float(sped.max()) < near


def _rollout(numbers: Numbers, roll: np.ndarray) -> Rollout:
    """The rows of ``roll`` under the names that numpy's modules know."""
    arcs = roll[:, :, :-1]
    distance = numbers.h * arcs[fields.MEAN_V]
    return Rollout(
        curvature=arcs[fields.K], speed=arcs[fields.V], mean_curvature=arcs[fields.MEAN_K],
        mean_speed=arcs[fields.MEAN_V], distance=distance, turn=distance * arcs[fields.MEAN_K],
        theta=roll[fields.THETA], x=roll[fields.X], y=roll[fields.Y], cos=arcs[fields.COS], sin=arcs[fields.SIN],
        chord=arcs[fields.CHORD], chord_slope=arcs[fields.STRETCH], turning=arcs[fields.TURNING],
    )


def _parts(rows: Forces | Met) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    return rows.limits, rows.ends, rows.clearances


def _flat(rows: Forces | Met) -> tuple[np.ndarray, ...]:
    return tuple(map(np.ravel, _parts(rows)))


def _shaped(flat: Sequence[np.ndarray], point: CompiledPoint) -> list[np.ndarray]:
    """Limits, ends and clearances in their shapes."""
    return [part.reshape(row.shape) for part, row in zip(flat, (point.limits, point.missed, point.clearances))]


def _commands(point: CompiledPoint) -> np.ndarray:
    return np.concatenate(point.commands, axis=1)
