# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Derivatives of cost and rows at a point, and the matrix of a step made of them."""

from __future__ import annotations

import attrs
import numpy as np

from . import clearance, ends, limits, objective
from .chain import pulls
from .factor import Blocks, Factor
from .numbers import Numbers
from .point import Forces, Point, pose_forces
from .structure import Structure

_SOFT = 1e-2  # stiffness (1/m^2) below which a clearance row does not bend the cost noticeably
_UNBENT = 1e-3  # second derivative by the heading (1/rad^2) below which pulls on the poses bend nothing
_FLAT = 1e-4  # curvature (1/rad^2) of shadows below which it does not either
NEAR = 3e-3  # change of a heading (rad), or of a speed (part of the full one), that derivatives do not feel at all


@attrs.frozen(eq=False)
class Stiffness:
    """How stiffly each row is held, shapes (6, N, M), (N, 7), (P, M), and the multipliers of all rows."""

    limits: np.ndarray
    ends: np.ndarray
    clearances: np.ndarray
    forces: Forces


class Linearised:
    """Derivatives at a point; the matrix may be made again with other stiffness.

    The matrix: Gauss-Newton of the cost, rows' * stiffness * rows, and the curvature of the shadows where pairs press.
    """

    def __init__(self, numbers: Numbers, structure: Structure, constant: np.ndarray, point: Point) -> None:
        self._numbers, self._structure, self._constant = numbers, structure, constant
        self.point = point
        self._turning = objective.turning_rows(numbers, point.r)
        self._end_rows = ends.end_rows(numbers, point.r)
        self._coupled = self._coupling()
        self._clear: clearance.Rows | None = None
        self._headings: np.ndarray | None = None

    def serves(self, point: Point, near: float = NEAR) -> bool:
        """Whether a point is so near that the derivatives are good for it as well. Slopes are exact in any case."""
        turned = np.abs(point.r.theta - self.point.r.theta)
        sped = np.abs(point.r.mean_speed - self.point.r.mean_speed) / self._numbers.full_speed
        return float(turned.max()) < near and float(sped.max()) < near

    def factor(self, point: Point, stiffness: Stiffness, bending: bool = False) -> Factor:
        """The factor of the matrix at a point that it serves.

        Args:
            bending: whether what pulls on the poses bends counts as well.

        Raises:
            SolveError: the matrix is not positive definite.
        """
        weights = self._turning_weights(point, stiffness.forces.clearances)
        diagonal = self._constant + np.matmul(self._turning.transpose(0, 2, 1), np.matmul(weights, self._turning))
        if bending:
            self._bend(diagonal, point, stiffness.forces)
        limits.stiffen(diagonal, self._numbers, point.r.curvature, point.r.speed, stiffness.limits)
        weighted = self._end_rows * stiffness.ends[:, :, None]
        diagonal += np.matmul(weighted.transpose(0, 2, 1), self._end_rows)
        beside: Blocks = dict(zip(map(tuple, self._structure.edges.tolist()), self._coupled.copy()))
        self._keep_apart(diagonal, beside, stiffness.clearances)
        return Factor(diagonal, beside, self._structure.order)

    def ends_moved(self, commands: np.ndarray) -> np.ndarray:
        """First-order change of the ends when commands, shape (N, 2M), change; shape (N, 7)."""
        return np.matmul(self._end_rows, commands[:, :, None])[:, :, 0]

    def clearances_moved(self, commands: np.ndarray) -> np.ndarray:
        """First-order change of the clearances of pairs that count, 0 for the others; shape (P, M)."""
        moved = np.zeros(self._numbers.gaps.shape)
        if self._clear is not None:
            both = np.concatenate(list(commands[self._clear.robots]), axis=1)
            moved[self._clear.pairs] = np.matmul(self._clear.by_commands, both[:, :, None])[:, :, 0]
        return moved

    def pulled(self, point: Point, forces: Forces) -> np.ndarray:
        """Slopes of sum(forces * rows) by the commands, to first order, shape (N, 2M); only of pairs that count."""
        found = limits.pulled(self._numbers, point.r.curvature, point.r.speed, forces.limits)
        found += np.matmul(forces.ends[:, None, :], self._end_rows)[:, 0]
        if self._clear is not None:
            pairs, size = self._clear.pairs, found.shape[1]
            pushed = np.matmul(forces.clearances[pairs, None, :], self._clear.by_commands)[:, 0]
            first, second = self._numbers.beside[:, :, pairs]
            found -= first @ pushed[:, :size] + second @ pushed[:, size:]
        return found

    def _scale(self) -> np.ndarray:
        """Heading gained per interval and unit of turning, shape (N, M), seconds times m/s."""
        return self._numbers.h * self._numbers.turn_speed

    def _turning_weights(self, point: Point, pressure: np.ndarray) -> np.ndarray:
        """Second derivatives by each robot's own turning, shape (N, M, M): its price, alignment, shadows."""
        numbers = self._numbers
        m = len(numbers.h)
        weights = np.zeros((len(numbers.coupled), m, m))
        steps = np.arange(m)
        own = 1.0 + np.diagonal(numbers.coupled)[:, None]
        weights[:, steps, steps] = own * numbers.cost_h
        if numbers.comparing is not None:
            weights += numbers.comparing.own
        by_heading = None
        if numbers.alignment.any():
            by_heading = np.zeros_like(point.r.turn)
            aligned = objective.aligning_weights(numbers, self.point.r)
            np.add.at(by_heading, numbers.edges[:, 0], aligned)
            np.add.at(by_heading, numbers.edges[:, 1], aligned)
        if point.sight is not None:
            bent = np.maximum(clearance.bend(numbers, point.sight, pressure), 0.0)
            if bent.max() > _FLAT:
                by_heading = bent if by_heading is None else by_heading + bent
        if by_heading is not None:
            weights += _by_turning(by_heading, self._scale(), self._scale())
        return weights

    def _bend(self, diagonal: np.ndarray, point: Point, forces: Forces) -> None:
        """Add what pulls on the poses bend: the convex part of the second derivatives of every arc's chord.

        An arc of length d whose middle heads for q moves all later nodes by d (cos q, sin q). Where these are pulled
        back along it, the second derivative by q is the pull times d, and without it steps would overshoot.
        """
        numbers, r = self._numbers, point.r
        later_x, later_y, _ = pulls(r, *pose_forces(numbers, point, forces))
        along, across = later_x * r.cos + later_y * r.sin, later_y * r.cos - later_x * r.sin
        half = -0.5 * r.distance * along
        largest = half + np.sqrt(half * half + across * across)  # eigenvalue of [[0, across], [across, 2 half]]
        if largest.max() < _UNBENT:
            return
        if self._headings is None:
            turns = self._turning * self._scale()[:, :, None]
            self._headings = np.cumsum(turns, axis=1) - 0.5 * turns
        size = np.sqrt(across * across + largest * largest)
        root = np.sqrt(largest) / np.maximum(size, 1e-12)
        rows = (root * largest)[:, :, None] * self._headings
        m = len(numbers.h)
        rows[:, :, m:] += (root * across * numbers.h)[:, :, None] * (
            numbers.speed.mean if len(numbers.speed.mean) == 1 else numbers.speed.mean[numbers.speed.which]
        )
        diagonal += np.matmul(rows.transpose(0, 2, 1), rows)

    def _coupling(self) -> np.ndarray:
        """Blocks beside the diagonal that the edges bring, shape (E, 2M, 2M)."""
        numbers, turning = self._numbers, self._turning
        first, second = self._structure.edges.T
        weighted = (numbers.coupled[first, second][:, None] * numbers.cost_h)[:, :, None] * turning[second]
        if numbers.comparing is not None:
            back = (self._structure.edges[:, 0] != numbers.edges[:, 0])[:, None, None]
            across = numbers.comparing.across
            weighted += np.matmul(np.where(back, across.transpose(0, 2, 1), across), turning[second])
        if numbers.alignment.any():
            aligned = objective.aligning_weights(numbers, self.point.r)
            pulls = _by_turning(aligned, self._scale()[first], self._scale()[second])
            weighted -= np.matmul(pulls, turning[second])
        return np.matmul(turning[first].transpose(0, 2, 1), weighted)

    def _keep_apart(self, diagonal: np.ndarray, beside: Blocks, stiffness: np.ndarray) -> None:
        """Add the clearance rows of pairs that count to the blocks of their robots."""
        near = np.flatnonzero(stiffness.max(axis=1, initial=0.0) > _SOFT)
        if not len(near) or self.point.sight is None:
            return
        if self._clear is None or not np.isin(near, self._clear.pairs, assume_unique=True).all():
            known = near if self._clear is None else np.union1d(near, self._clear.pairs)
            self._clear = clearance.rows_of(self._numbers, self.point.r, self.point.sight, known)
        rows, size = self._clear, diagonal.shape[1]
        stiff, by_commands = stiffness[rows.pairs], rows.by_commands
        blocks = np.matmul(by_commands.transpose(0, 2, 1), by_commands * stiff[:, :, None])
        for pair, k, j, around in zip(rows.pairs.tolist(), *rows.robots.tolist(), blocks):
            diagonal[k] += around[:size, :size]
            if k == j:  # a fence
                continue
            back = self._structure.turned[pair]
            diagonal[j] += around[size:, size:]
            block, place = (around[size:, :size], (j, k)) if back else (around[:size, size:], (k, j))
            if place in beside:
                beside[place] += block
            else:
                beside[place] = block


def _by_turning(by_heading: np.ndarray, one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Weights on products of headings at nodes 1 .. M, as weights on products of turnings, shape (K, M, M).

    A heading is the sum of what was turned before it: the later of two turnings sees all nodes after it.
    """
    later = np.cumsum(by_heading[:, ::-1], axis=1)[:, ::-1]
    m = by_heading.shape[1]
    return later[:, np.maximum.outer(np.arange(m), np.arange(m))] * one[:, :, None] * other[:, None, :]
