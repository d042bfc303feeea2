# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Minima on few intervals: the curvatures are the only unknowns, the ends the only constraints.

Newton's method on the Lagrangian, with backtracking on cost plus exact penalty and a second-order correction
(Nocedal & Wright, *Numerical Optimization*, 2nd ed., ch. 18). Everything in units of the way's length.
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.linalg import cho_factor, cho_solve

from .classical import ClassicalProblem
from .reach import Reach, reach


@attrs.frozen(eq=False)
class Coarse:
    """A stationary plan with piecewise constant curvature, in units of the way's length (duration 1).

    ``curvature`` (N, M); ``costate`` (N,) complex, p_x + i p_y in each robot's start frame (0 where the position is
    free); ``end_moment`` (N,): mu_1 at the end (0 where the heading is free); ``minimal``: the reduced Hessian is
    positive definite; ``miss``: largest distance from an end.
    """

    curvature: np.ndarray
    costate: np.ndarray
    end_moment: np.ndarray
    cost: float
    miss: float
    slope: float
    minimal: bool

    @property
    def converged(self) -> bool:
        """Whether the ends are met and the Lagrangian is flat, to well below the error of few intervals."""
        return self.miss < 1e-9 and self.slope < 1e-7 * (1 + self.cost)


@attrs.frozen(eq=False)
class _Asked:
    """The problem in units of the way's length; constraints in the order: x, y of placed robots, headings."""

    weight: np.ndarray
    placed: np.ndarray  # indices
    headed: np.ndarray  # indices
    displacement: np.ndarray
    turn: np.ndarray
    intervals: int

    def cost(self, curvature: np.ndarray) -> float:
        return float(np.sum(curvature * (self.weight @ curvature)) / (2 * self.intervals))

    def miss(self, reached: Reach, curvature: np.ndarray) -> np.ndarray:
        apart = reached.displacement[self.placed] - self.displacement
        turned = curvature[self.headed].mean(axis=1) - self.turn
        return np.concatenate([apart.real, apart.imag, turned])

    def jacobian(self, reached: Reach) -> np.ndarray:
        count, places = len(self.weight), len(self.placed)
        rows = np.zeros((2 * places + len(self.headed), count, self.intervals))
        for row, robot in enumerate(self.placed):
            rows[row, robot] = reached.gradient[robot].real
            rows[places + row, robot] = reached.gradient[robot].imag
        for row, robot in enumerate(self.headed):
            rows[2 * places + row, robot] = 1 / self.intervals
        return rows.reshape(len(rows), count * self.intervals)

    def costate(self, multipliers: np.ndarray) -> np.ndarray:
        places, costate = len(self.placed), np.zeros(len(self.weight), dtype=complex)
        costate[self.placed] = -(multipliers[:places] + 1j * multipliers[places:2 * places])
        return costate

    def bend(self, reached: Reach, multipliers: np.ndarray) -> np.ndarray:
        """Second derivative of -costate . displacement over all curvatures, shape (N M, N M)."""
        count, steps = len(self.weight), self.intervals
        full = np.zeros((count, steps, count, steps))
        blocks = reached.hessian(self.costate(multipliers))
        for robot in self.placed:
            full[robot, :, robot, :] = -blocks[robot]
        return full.reshape(count * steps, -1)


def _asked(problem: ClassicalProblem, intervals: int) -> _Asked:
    placed, headed = np.flatnonzero(problem.placed), np.flatnonzero(problem.headed)
    return _Asked(problem.weight, placed, headed, problem.displacements()[placed], problem.turns()[headed], intervals)


def _step(hessian: np.ndarray, jacobian: np.ndarray, gradient: np.ndarray,
          miss: np.ndarray) -> tuple[np.ndarray, np.ndarray] | None:
    """Newton step and new multipliers, or None where the Hessian is not positive definite on the constraints.

    Adding J'J to the Hessian changes nothing on the constraints; a little slack on the constraints keeps the step
    bounded where their gradients depend on each other (a straight line).
    """
    lift = 10 * np.trace(hessian) / max(np.sum(jacobian**2), 1e-300) * len(jacobian)
    try:
        factor = cho_factor(hessian + lift * jacobian.T @ jacobian, check_finite=False)
    except np.linalg.LinAlgError:
        return None
    through = cho_solve(factor, np.column_stack([jacobian.T, gradient + lift * jacobian.T @ miss]), check_finite=False)
    schur = jacobian @ through[:, :-1]
    schur[np.diag_indices(len(schur))] += 1e-13 * np.trace(schur) + 1e-300
    change = np.linalg.solve(schur, miss - jacobian @ through[:, -1])
    return -through[:, -1] - through[:, :-1] @ change, change


def minimise(problem: ClassicalProblem, guess: np.ndarray, iterations: int = 60) -> Coarse:
    """The minimum that a first guess leads to; ask ``converged`` and ``minimal`` of the answer.

    Args:
        guess: curvatures times the duration, shape (N, M): M intervals.
    """
    asked = _asked(problem, guess.shape[1])
    flat_cost = np.kron(asked.weight, np.eye(asked.intervals)) / asked.intervals
    curvature, multipliers = np.array(guess, dtype=float), np.zeros(2 * len(asked.placed) + len(asked.headed))
    reached, minimal, slope = reach(curvature), False, np.inf
    for _ in range(iterations):
        miss, jacobian = asked.miss(reached, curvature), asked.jacobian(reached)
        gradient = (asked.weight @ curvature).ravel() / asked.intervals
        bend = asked.bend(reached, multipliers)
        for share in (1.0, 0.5, 0.0):
            step = _step(flat_cost + share * bend, jacobian, gradient, miss)
            if step is not None:
                break
        assert step is not None  # without the bend the Hessian is positive definite
        minimal = share == 1.0
        change, multipliers = step[0].reshape(curvature.shape), step[1]
        slope = float(np.abs(gradient + jacobian.T @ multipliers).max()) * asked.intervals
        if np.abs(miss).max(initial=0.0) < 1e-11 and slope < 1e-9 * (1 + asked.cost(curvature)):
            break
        price = 1.5 * float(np.abs(multipliers).max(initial=0.0))
        curvature, reached = _search(asked, curvature, change, price, miss, gradient)
    return Coarse(curvature, asked.costate(multipliers), _end_moment(asked, multipliers), asked.cost(curvature),
                  float(np.abs(asked.miss(reached, curvature)).max(initial=0.0)), slope, minimal)


def _search(asked: _Asked, curvature: np.ndarray, change: np.ndarray, price: float, miss: np.ndarray,
            gradient: np.ndarray) -> tuple[np.ndarray, Reach]:
    """Backtracking on cost + price * |miss|_1, with one second-order correction of the full step."""
    merit = asked.cost(curvature) + price * np.abs(miss).sum()
    promised = float(gradient @ change.ravel()) - price * np.abs(miss).sum()
    length = min(1.0, 6.0 / max(float(np.abs(change).max()), 1e-300) * 2)
    for attempt in range(30):
        trial = curvature + length * change
        reached = reach(trial)
        missed = asked.miss(reached, trial)
        allowed = merit * (1 + 1e-13) + 1e-4 * length * min(promised, 0.0)
        if asked.cost(trial) + price * np.abs(missed).sum() <= allowed:
            return trial, reached
        if attempt == 0:
            jacobian = asked.jacobian(reached)
            corrected = trial - (np.linalg.pinv(jacobian, rcond=1e-10) @ missed).reshape(trial.shape)
            again = reach(corrected)
            left = np.abs(asked.miss(again, corrected)).sum()
            if asked.cost(corrected) + price * left <= allowed:
                return corrected, again
        length /= 2
    return trial, reached


def _end_moment(asked: _Asked, multipliers: np.ndarray) -> np.ndarray:
    moment = np.zeros(len(asked.weight))
    moment[asked.headed] = -multipliers[2 * len(asked.placed):]
    return moment
