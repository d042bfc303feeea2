# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The engine of the tick solver in numpy alone: where numba is missing, and what the compiled one is held against."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from . import active
from .interior import Interior, Iterate
from .linearised import Linearised
from .numbers import Numbers
from .objective import constant_blocks
from .point import Forces, Point, cost, evaluate, excess
from .structure import Structure


@attrs.frozen(eq=False)
class PlainPoint:
    """A point with its cost and by how much it passes limits."""

    point: Point
    cost: float
    excess: float

    @property
    def missed(self) -> np.ndarray:
        return self.point.missed

    @property
    def commands(self) -> tuple[np.ndarray, np.ndarray]:
        """Curvature and speed at nodes 1 .. M, each (N, M)."""
        return self.point.r.curvature, self.point.r.speed


@attrs.frozen(eq=False)
class PlainTrial:
    """See active.Trial."""

    point: PlainPoint
    trial: active.Trial
    left_over: float

    @property
    def changed(self) -> int:
        return self.trial.changed

    @property
    def forces(self) -> Forces:
        return self.trial.forces


@attrs.frozen(eq=False)
class PlainIterate:
    """See interior.Iterate."""

    point: PlainPoint
    iterate: Iterate
    open: float


class PlainEngine:
    """Steps on one problem."""

    def __init__(self, numbers: Numbers, structure: Structure, constant: Optional[np.ndarray] = None) -> None:
        self._numbers, self._structure = numbers, structure
        self._constant = constant_blocks(numbers) if constant is None else constant
        self._interior = Interior(numbers, structure, self._constant)

    def started(self, numbers: Numbers) -> PlainEngine:
        """For the same problem from another first state."""
        return PlainEngine(numbers, self._structure, self._constant)

    def point(self, curvature: np.ndarray, speed: np.ndarray) -> PlainPoint:
        """What commands, each (N, M), lead to."""
        return self._costed(evaluate(self._numbers, curvature, speed))

    def boxed(self, point: PlainPoint) -> tuple[Point, float]:
        """The point with its commands cut to their bounds, and its cost.

        A standstill is a standstill, not a billionth of a m/s.
        """
        known = self._numbers
        found = evaluate(known, *(
            np.clip(commands, known.lower[i], known.upper[i]) for i, commands in enumerate(point.commands)
        ))
        return found, cost(known, found)

    def trial(self, point: PlainPoint, forces: Forces) -> PlainTrial:
        """The rows that were met when the multipliers were found."""
        return PlainTrial(point, active.begin(self._numbers, point.point, forces), np.inf)

    def hold(self, held: Optional[active.Held], trial: PlainTrial, near: float) -> active.Held:
        """The matrix for the met rows, with the last derivatives where they serve the point (see Linearised.serves)."""
        if held is not None and held.linearised.serves(trial.point.point, near):
            return active.Held(held.linearised, trial.trial) if trial.changed else held
        linearised = Linearised(self._numbers, self._structure, self._constant, trial.point.point)
        return active.Held(linearised, trial.trial)

    def active_step(self, held: active.Held, trial: PlainTrial) -> PlainTrial:
        """See active.Held.step."""
        after = held.step(self._numbers, trial.trial)
        return PlainTrial(self._costed(after.point), after, active.left_over(self._numbers, after))

    def open(self, point: PlainPoint, forces: Forces, barrier: float, least: float) -> PlainIterate:
        """See interior.Interior.begin."""
        return PlainIterate(point, self._interior.begin(point.point, forces, barrier, least), np.inf)

    def interior_step(self, x: PlainIterate) -> PlainIterate:
        """See interior.Interior.step.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        after = self._interior.step(x.iterate)
        return PlainIterate(self._costed(after.point), after, self._interior.open(after))

    def forces(self, x: PlainIterate) -> Forces:
        """Multipliers of the rows, those of rows that are not met at 0."""
        return self._interior.forces(x.iterate)

    def _costed(self, point: Point) -> PlainPoint:
        return PlainPoint(point, cost(self._numbers, point), excess(self._numbers, point))
