"""Blocks of the matrix of a step: Gauss-Newton of the cost, rows' * stiffness * rows, curvature of the shadows."""

from __future__ import annotations

import attrs
import numpy as np

from . import clearance, ends, limits, objective
from .chain import Rollout
from .factor import Blocks
from .numbers import Numbers
from .point import Point
from .structure import Structure

_SOFT = 1e-4  # stiffness (1/m^2) below which a clearance row does not bend the cost noticeably


@attrs.frozen(eq=False)
class Matrix:
    """Blocks of a step's matrix and the rows that went into it.

    Attributes:
        diagonal: shape (N, 2M, 2M). beside: by pairs of robots in the order of elimination.
        end_rows: shape (N, 7, 2M). clear: the clearance rows that count, None when there are none.
        clear_rows: by the commands of their two robots, shape (2, W, 2M).
    """

    diagonal: np.ndarray
    beside: Blocks
    end_rows: np.ndarray
    clear: clearance.Rows | None
    clear_rows: np.ndarray

    def ends_moved(self, commands: np.ndarray) -> np.ndarray:
        """First-order change of the ends when commands, shape (N, 2M), change; shape (N, 7)."""
        return np.matmul(self.end_rows, commands[:, :, None])[:, :, 0]

    def clearances_moved(self, commands: np.ndarray, shape: tuple[int, ...]) -> np.ndarray:
        """First-order change of the clearances that count, 0 for the others; shape (P, M), as given."""
        moved = np.zeros(shape)
        if self.clear is not None:
            both = np.matmul(self.clear_rows[:, :, None, :], commands[self.clear.robots][:, :, :, None])
            moved[self.clear.pairs, self.clear.nodes - 1] = both.sum(axis=0)[:, 0, 0]
        return moved


def matrix(
    numbers: Numbers, structure: Structure, point: Point, constant: np.ndarray, limit_stiffness: np.ndarray,
    end_stiffness: np.ndarray, clear_stiffness: np.ndarray, pressure: np.ndarray,
) -> Matrix:
    """The matrix of a step.

    Args:
        constant: objective.constant_blocks of the tick.
        limit_stiffness, end_stiffness, clear_stiffness: of the rows, shapes (6, N, M), (N, 7), (P, M).
        pressure: multipliers of the clearances, shape (P, M): the shadows' curvature counts by them.
    """
    r = point.r
    turning = objective.turning_rows(numbers, r)
    weighted = turning * numbers.cost_h[:, None]
    diagonal = constant + np.matmul(weighted.transpose(0, 2, 1), turning * _own(numbers))
    first, second = structure.edges.T
    coupled = np.matmul(weighted[first].transpose(0, 2, 1), turning[second] * numbers.gain[first, second][:, None, None])
    if numbers.alignment.any():
        coupled += _align(numbers, structure, r, turning, diagonal)
    beside: Blocks = {(k, j): block for (k, j), block in zip(structure.edges.tolist(), coupled)}
    limits.stiffen(diagonal, numbers, r.curvature, r.speed, limit_stiffness)
    end_rows = ends.end_rows(numbers, r)
    diagonal += np.matmul((end_rows * end_stiffness[:, :, None]).transpose(0, 2, 1), end_rows)
    pairs, nodes = np.nonzero(clear_stiffness > _SOFT)
    if not len(pairs) or point.sight is None:
        return Matrix(diagonal, beside, end_rows, None, np.zeros((2, 0, diagonal.shape[1])))
    rows = clearance.rows_of(numbers, point.sight, pairs, nodes + 1)
    by_commands = clearance.command_rows(numbers, r, rows)
    _keep_apart(structure, diagonal, beside, rows, by_commands, clear_stiffness[pairs, nodes])
    _bend(numbers, point, turning, diagonal, pressure)
    return Matrix(diagonal, beside, end_rows, rows, by_commands)


def _own(numbers: Numbers) -> np.ndarray:
    return np.diagonal(numbers.gain)[:, None, None]


def _heading_rows(numbers: Numbers, turning: np.ndarray, robots: np.ndarray) -> np.ndarray:
    """Derivatives of the headings at nodes 1 .. M by the commands, for some robots, shape (R, M, 2M)."""
    return np.cumsum(turning[robots] * (numbers.h * numbers.turn_speed[robots])[:, :, None], axis=1)


def _align(
    numbers: Numbers, structure: Structure, r: Rollout, turning: np.ndarray, diagonal: np.ndarray
) -> np.ndarray:
    """Add the alignment to the diagonal; its blocks beside it, shape (E, 2M, 2M).

    2 sin^2(d/2) is the square of sqrt(2) sin(d/2), whose slope squared is cos^2(d/2) / 2.
    """
    headings = _heading_rows(numbers, turning, np.arange(len(turning)))
    first, second = structure.edges.T
    half = 0.5 * (r.theta[first, 1:] - r.theta[second, 1:])
    weights = (numbers.alignment[:, None] * np.cos(half) ** 2 * numbers.cost_h)[:, :, None]
    one, other = headings[first], headings[second]
    np.add.at(diagonal, first, np.matmul((weights * one).transpose(0, 2, 1), one))
    np.add.at(diagonal, second, np.matmul((weights * other).transpose(0, 2, 1), other))
    return -np.matmul((weights * one).transpose(0, 2, 1), other)


def _keep_apart(
    structure: Structure, diagonal: np.ndarray, beside: Blocks, rows: clearance.Rows, by_commands: np.ndarray,
    stiffness: np.ndarray,
) -> None:
    """Add the clearance rows to the blocks of their pairs. Rows of a pair stand together."""
    starts = np.flatnonzero(np.concatenate([[True], rows.pairs[1:] != rows.pairs[:-1]]))
    stops = np.append(starts[1:], len(rows.pairs))
    weighted = by_commands * stiffness[:, None]
    for start, stop in zip(starts.tolist(), stops.tolist()):
        k, j = rows.robots[:, start].tolist()
        one, other = by_commands[0, start:stop], by_commands[1, start:stop]
        diagonal[k] += weighted[0, start:stop].T @ one
        diagonal[j] += weighted[1, start:stop].T @ other
        if structure.turned[rows.pairs[start]]:
            block, place = weighted[1, start:stop].T @ one, (j, k)
        else:
            block, place = weighted[0, start:stop].T @ other, (k, j)
        beside[place] = beside[place] + block if place in beside else block


def _bend(numbers: Numbers, point: Point, turning: np.ndarray, diagonal: np.ndarray, pressure: np.ndarray) -> None:
    """Add the curvature of the shadows where robots press on each other, as far as it is positive.

    A footprint that stands square to the line has a kink in its shadow, rounded off over hundredths of a radian:
    without its curvature steps jump from one side of the kink to the other.
    """
    pairs, nodes = np.nonzero(pressure > 0)
    if not len(pairs) or point.sight is None:
        return
    bend = np.zeros_like(point.r.turn)
    clearance.bend(numbers, point.sight, pairs, nodes + 1, pressure[pairs, nodes], bend)
    np.maximum(bend, 0.0, out=bend)
    robots = np.flatnonzero(bend.max(axis=1) > 1e-6)
    if len(robots):
        headings = _heading_rows(numbers, turning, robots)
        diagonal[robots] += np.matmul((headings * bend[robots, :, None]).transpose(0, 2, 1), headings)
