# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Whether a solution of a nonlinear program is one: residuals by own evaluation, and the inertia of the KKT matrix.

Second-order conditions: Nocedal & Wright, *Numerical Optimization*, 2nd ed., theorems 12.5 and 12.6 and section 16.1.
"""

from __future__ import annotations

import math
from typing import Any, Optional

import attrs
import numpy as np
from scipy import sparse
from scipy.linalg import LinAlgError, cho_factor, eigh, qr
from scipy.sparse.linalg import splu

CLEAN = 1e-6  # largest relative residual of a solution that is called one
_SLIGHT = 1e-4  # terms of a gradient below it count as this large: a cost of nothing has no scale of its own
_AT_ONCE = 256  # columns: what is dense on the way needs memory
_ZERO = 1e-8  # relative to the largest curvature: what counts as none


@attrs.frozen(eq=False)
class Point:
    """A nonlinear program at a point, and the multipliers that are claimed for it.

    ``gradient`` of the cost; ``hessian`` of the Lagrangian cost + multipliers . rows; ``jacobian`` of the rows;
    ``lower``, ``upper`` of the variables and ``row_lower``, ``row_upper`` of the rows; ``states`` and ``dynamics``: the
    variables that the rows of the same number determine, given all other variables.
    """

    cost: float
    vector: np.ndarray
    rows: np.ndarray
    gradient: np.ndarray
    jacobian: sparse.csr_matrix
    hessian: sparse.csr_matrix
    lower: np.ndarray
    upper: np.ndarray
    row_lower: np.ndarray
    row_upper: np.ndarray
    bound_multipliers: np.ndarray
    row_multipliers: np.ndarray
    states: np.ndarray
    dynamics: np.ndarray


@attrs.frozen(eq=False)
class Check:
    """What was found.

    Attributes:
        stationarity: largest entry of the Lagrangian's gradient, relative to the largest sum of its terms.
        constraints: largest violation of a row or bound, in the rows' own units.
        complementarity: sum of multiplier times slack, relative to the cost and 1.
        positive, negative, zero: inertia of the KKT matrix of what is active.
        dependent: active rows that follow from the others (a part of ``zero``).
        rising, falling, flat: eigenvalues of the Hessian within the active rows: above, below and at zero.
        steepest: a direction in which the cost falls to second order, over all variables; None where there is none.
    """

    stationarity: float
    constraints: float
    complementarity: float
    positive: int
    negative: int
    zero: int
    dependent: int
    rising: int
    falling: int
    flat: int
    steepest: Optional[np.ndarray]

    @property
    def residual(self) -> float:
        """The largest of the three residuals."""
        return max(self.stationarity, self.constraints, self.complementarity)

    @property
    def clean(self) -> bool:
        """Whether nothing nearby is better, to first and second order."""
        return bool(self.residual <= CLEAN and self.falling == 0)

    @property
    def words(self) -> str:
        """The same for somebody who is no mathematician."""
        if self.clean:
            flat = {0: "", 1: "; one way to change it costs nothing"}.get(
                self.flat, f"; {self.flat} ways to change it cost nothing")
            return f"nothing better nearby: yes, to {rounded_up(self.residual)}{flat}"
        if self.residual <= CLEAN:
            return f"nothing better nearby: no, {self.falling} of the ways to change it cost less"
        return f"nothing better nearby: not known, the solution itself is only good to {rounded_up(self.residual)}"


def rounded_up(value: float) -> str:
    """A small number by its first digit, rounded up: 2.03e-7 -> 3e-07, as 3e-7."""
    if not math.isfinite(value):
        return "nothing"
    if value <= 1e-15:
        return "1e-15"
    power = math.floor(math.log10(value))
    digit = math.ceil(value / 10.0**power - 1e-9)
    return f"1e{power + 1}" if digit == 10 else f"{digit}e{power}"


def check(point: Point) -> Check:
    """Judge a point by its own numbers, whatever the solver said of it."""
    stationarity = _stationarity(point)
    constraints = max(_violation(point.vector, point.lower, point.upper),
                      _violation(point.rows, point.row_lower, point.row_upper))
    gap = _slackness(point.vector, point.lower, point.upper, point.bound_multipliers)
    gap += _slackness(point.rows, point.row_lower, point.row_upper, point.row_multipliers)
    if not all(map(math.isfinite, (stationarity, constraints, gap))):
        return Check(math.inf, math.inf, math.inf, 0, 0, 0, 0, 0, 0, 0, None)
    return Check(stationarity, constraints, gap / (1 + abs(point.cost)), *_inertia(point))


def _stationarity(point: Point) -> float:
    """Relative to the largest sum of terms; a multiplier of the wrong sign, or of a bound that is not there, counts."""
    moving = point.lower < point.upper
    bounds = np.where(moving, _one_sided(point.bound_multipliers, point.lower, point.upper), 0.0)
    rows = _one_sided(point.row_multipliers, point.row_lower, point.row_upper)
    left = point.gradient + point.jacobian.T @ rows + bounds
    terms = np.abs(point.gradient) + abs(point.jacobian).T @ np.abs(rows) + np.abs(bounds)
    if not moving.any():
        return 0.0
    return float(np.abs(left[moving]).max() / max(terms[moving].max(), _SLIGHT))


def _one_sided(multipliers: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> np.ndarray:
    """Multipliers as far as their signs are allowed: positive where there is an upper bound, negative at a lower."""
    return np.where(np.isfinite(upper), np.maximum(multipliers, 0), 0) + np.where(
        np.isfinite(lower), np.minimum(multipliers, 0), 0)


def _violation(values: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> float:
    return float(max(np.max(lower - values, initial=0.0), np.max(values - upper, initial=0.0)))


def _slackness(values: np.ndarray, lower: np.ndarray, upper: np.ndarray, multipliers: np.ndarray) -> float:
    """Sum of multiplier times slack over what is bounded from one side or from two different ones."""
    room = np.where(multipliers > 0, upper - values, values - lower)
    counts = (lower < upper) & (multipliers != 0) & np.isfinite(room)
    return float(np.sum(np.abs(multipliers[counts]) * np.maximum(room[counts], 0.0)))


def _active(values: np.ndarray, lower: np.ndarray, upper: np.ndarray, multipliers: np.ndarray) -> np.ndarray:
    """Where a bound holds the point: nearer than its multiplier is small (an interior-point method leaves their
    product at a small constant); equalities always.
    """
    room = np.where(multipliers > 0, upper - values, values - lower)
    held = np.isfinite(room) & (np.maximum(room, 0.0) < np.abs(multipliers))
    return (lower == upper) | held


def _inertia(point: Point) -> tuple[int, int, int, int, int, int, int, Optional[np.ndarray]]:
    """Inertia through the reduced Hessian: the states are determined by the controls, so each of them and its row
    add one positive and one negative eigenvalue (Haynsworth's formula), and so does each independent active row.
    """
    held = _active(point.vector, point.lower, point.upper, point.bound_multipliers)
    is_state = np.zeros(len(held), dtype=bool)
    is_state[point.states] = True
    controls = np.flatnonzero(~is_state & ~held)
    states, bounded = np.flatnonzero(is_state), np.flatnonzero(is_state & held)
    others = _active(point.rows, point.row_lower, point.row_upper, point.row_multipliers)
    others[point.dynamics] = False
    follow = _follow(point, states, controls)
    hessian = _reduced(point, states, controls, follow)
    used = point.jacobian[np.flatnonzero(others)]
    rows = _dense(used[:, controls]) + _dense(used[:, states] @ follow)
    rows = np.concatenate([rows, _dense(follow[np.searchsorted(states, bounded)])])
    basis, rank = _span(rows)
    rising, falling, flat, direction = _curvatures(hessian, basis)
    if direction is not None:
        steepest: Optional[np.ndarray] = np.zeros(len(held))
        assert steepest is not None
        steepest[controls], steepest[states] = direction, follow @ direction
    else:
        steepest = None
    dependent = len(rows) - rank
    return (len(states) + rank + rising, len(states) + rank + falling, dependent + flat, dependent, rising, falling,
            flat, steepest)


def _follow(point: Point, states: np.ndarray, controls: np.ndarray) -> sparse.csr_matrix:
    """How the states follow the controls, shape (states, controls)."""
    rows = point.jacobian[point.dynamics]
    if not len(states):
        return sparse.csr_matrix((0, len(controls)))
    factor, by_control = splu(rows[:, states].tocsc()), -rows[:, controls].tocsc()
    parts = [sparse.csr_matrix(factor.solve(_dense(by_control[:, first:first + _AT_ONCE])))
             for first in range(0, len(controls), _AT_ONCE)]
    return sparse.hstack(parts, format="csr") if parts else sparse.csr_matrix((len(states), 0))


def _reduced(point: Point, states: np.ndarray, controls: np.ndarray, follow: sparse.csr_matrix) -> np.ndarray:
    """Hessian over the controls alone, dense."""
    own = point.hessian[controls]
    across = own[:, states] @ follow
    within = follow.T @ (point.hessian[states][:, states] @ follow)
    return _dense(own[:, controls] + across + across.T + within)


def _span(rows: np.ndarray) -> tuple[np.ndarray, int]:
    """An orthonormal basis (columns) of the space of the rows, and its dimension."""
    if not len(rows) or not rows.shape[1]:
        return np.zeros((rows.shape[1], 0)), 0
    scaled = rows / np.maximum(np.linalg.norm(rows, axis=1, keepdims=True), 1e-12)
    q, r, _ = qr(scaled.T, mode="economic", pivoting=True)
    sizes = np.abs(np.diag(r))
    rank = int(np.sum(sizes > 1e-9 * max(sizes[0], 1e-300))) if sizes[0] > 1e-9 else 0
    return q[:, :rank], rank


def _curvatures(hessian: np.ndarray, basis: np.ndarray) -> tuple[int, int, int, Optional[np.ndarray]]:
    """Eigenvalues above, below and at zero across the basis, and the direction of the lowest where it is below."""
    count = len(hessian) - basis.shape[1]
    if count <= 0:
        return 0, 0, 0, None
    scale = max(float(np.abs(hessian).sum(axis=1).max()), 1e-300)
    through = hessian @ basis
    inside = basis.T @ through
    across = hessian - through @ basis.T - basis @ through.T + basis @ (inside + scale * np.eye(len(inside))) @ basis.T
    shifted = across - _ZERO * scale * np.eye(len(across))
    try:
        cho_factor(shifted, check_finite=False)  # a fifth of the work of the eigenvalues, and mostly enough
        return count, 0, 0, None
    except LinAlgError:
        pass
    values, vectors = eigh(across, subset_by_value=(-np.inf, _ZERO * scale))
    falling = int(np.sum(values < -_ZERO * scale))
    flat = len(values) - falling
    return count - falling - flat, falling, flat, vectors[:, 0] if falling else None


def _dense(matrix: Any) -> np.ndarray:
    return matrix.toarray() if sparse.issparse(matrix) else np.asarray(matrix)
