# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The boundary-value problem by multiple shooting: costates and poses on the way that lead to the asked ends.

Along a solution mu_1 = m + p x (position - start), so a robot with an end pose has three unknowns (p and m), one with
an end heading one (m), and one that only copies none; besides them the poses where the pieces join. Derivatives by
the unknowns are integrated beside the state, all pieces at once. (Stoer & Bulirsch, *Introduction to Numerical
Analysis*, 7.3.)
"""

from __future__ import annotations

import attrs
import numpy as np
from scipy.integrate import solve_ivp

from ...errors import SolveError
from . import search
from .classical import ClassicalProblem
from .coarse import Coarse, minimise
from .reach import poses
from .reduced import TOLERANCE, Flow, flow, join

PIECES = 16
_MISS = 1e-10  # of the way's length and rad: ends and joints are met


@attrs.frozen(eq=False)
class Extremal:
    """A solution of the reduced equations that meets the ends.

    ``force`` (N, 2): p of each robot in the map, d cost / d end position; ``moment`` (N,): mu_1 at the start;
    ``end_moment`` (N,): mu_1 at the end, d cost / d end heading; ``energy``: h, -d cost / d duration;
    ``cost`` = ``effort`` + coupling * ``disagreement``; ``miss``: largest distance from an end or between joined
    pieces, in ways' lengths and rad; ``joints`` (PIECES, N, 3): poses at the start of each piece.
    """

    problem: ClassicalProblem
    force: np.ndarray
    moment: np.ndarray
    end_moment: np.ndarray
    energy: float
    effort: float
    disagreement: float
    miss: float
    joints: np.ndarray

    @property
    def cost(self) -> float:
        """1/2 integral u'(I + chi L)u."""
        return self.effort + self.problem.coupling * self.disagreement

    def sample(self, count: int = 10) -> Flow:
        """Curvatures, costates and poses at ``count`` equal steps in each piece, integrated piece by piece."""
        step = self.problem.duration / PIECES
        moved = self.joints[:, :, :2] - self.problem.starts[:, :2]
        first = self.moment + self.force[:, 0] * moved[:, :, 1] - self.force[:, 1] * moved[:, :, 0]
        turned = (self.force[:, 0] + 1j * self.force[:, 1]) * np.exp(-1j * self.joints[:, :, 2])
        mu = np.stack([first, turned.real, turned.imag], axis=2)
        times = np.linspace(0, step, count + 1)
        return join([flow(self.problem.weight, mu[k], self.joints[k], times + k * step) for k in range(PIECES)])


def shoot(problem: ClassicalProblem, guess: Coarse) -> Extremal:
    """The extremal near a first guess.

    Raises:
        SolveError: Newton's method does not arrive, even from the guess made finer.
    """
    aim = _Aim.of(problem)
    for finer, iterations in ((1, 6), (4, 12), (2, 25)):
        if finer > 1:
            guess = minimise(problem, search.resampled(guess.curvature, finer * guess.curvature.shape[1]))
        unknowns, miss = _newton(aim, aim.first(guess), iterations)
        if miss < _MISS:
            return aim.extremal(problem, unknowns, miss)
    raise SolveError(f"shooting misses ends or joints by {miss:.1e} of the way; start it from a finer guess")


def best(problem: ClassicalProblem, *, intervals: int = 32, seed: int = 0, hops: int = 12) -> Extremal:
    """The cheapest extremal that the search's first guesses lead to.

    Raises:
        SolveError: none was found.
    """
    found = search.minima(problem, intervals=intervals, seed=seed, hops=hops)
    limit = found.best.cost * (1 + 30 / intervals**2)  # few intervals can exchange two that cost nearly the same
    extremals = [shoot(problem, plan) for plan in found.minima[:3] if plan.cost <= limit]
    return min(extremals, key=lambda extremal: extremal.cost)


def _newton(aim: _Aim, unknowns: np.ndarray, iterations: int) -> tuple[np.ndarray, float]:
    """Newton's method with step halving; the unknowns and the largest miss."""
    misses, slope = aim.misses(unknowns)
    for _ in range(iterations):
        step = np.linalg.lstsq(slope, -misses, rcond=1e-14)[0]
        for length in 0.5 ** np.arange(5):
            trial, trial_slope = aim.misses(unknowns + length * step)
            if np.linalg.norm(trial) < (1 - length / 4) * np.linalg.norm(misses) or length < 0.1:
                break
        if not np.linalg.norm(trial) < np.linalg.norm(misses):
            break
        unknowns, misses, slope = unknowns + length * step, trial, trial_slope
    return unknowns, float(np.abs(misses).max(initial=0.0))


@attrs.frozen(eq=False)
class _Aim:
    """The unknowns and the misses, in units of the way's length and start frames.

    Unknowns: p_x, p_y of placed robots, m of headed ones, then x, y, heading of every robot at each joint but the
    first.
    """

    to_curvature: np.ndarray
    laplacian: np.ndarray
    placed: np.ndarray
    headed: np.ndarray
    ends: np.ndarray

    @classmethod
    def of(cls, problem: ClassicalProblem) -> _Aim:
        placed, headed = np.flatnonzero(problem.placed), np.flatnonzero(problem.headed)
        ends, turns = problem.displacements()[placed], problem.turns()[headed]
        return cls(np.linalg.inv(problem.weight), problem.laplacian, placed, headed,
                   np.concatenate([ends.real, ends.imag, turns]))

    def first(self, guess: Coarse) -> np.ndarray:
        """Unknowns from a plan with piecewise constant curvature."""
        path, count = poses(guess.curvature), guess.curvature.shape[1]
        headings = np.concatenate([np.zeros((len(path), 1)), np.cumsum(guess.curvature, axis=1) / count], axis=1)
        moment = guess.end_moment - np.imag(np.conj(guess.costate) * path[:, -1])
        force = guess.costate[self.placed]
        nodes, at = np.linspace(0, 1, count + 1), np.arange(1, PIECES) / PIECES
        joints = [[np.interp(at, nodes, row) for row in rows] for rows in (path.real, path.imag, headings)]
        later = np.moveaxis(np.array(joints), 2, 0).ravel()
        return np.concatenate([force.real, force.imag, moment[self.headed], later])

    def unpack(self, known: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """p as a complex number and m, both (N,), from the unknowns that are not poses."""
        count, places = len(self.to_curvature), len(self.placed)
        force, moment = np.zeros(count, dtype=complex), np.zeros(count)
        force[self.placed] = known[:places] + 1j * known[places:2 * places]
        moment[self.headed] = known[2 * places:]
        return force, moment

    def joints(self, unknowns: np.ndarray) -> np.ndarray:
        """Poses at the start of each piece, shape (PIECES, 3, N)."""
        count = len(self.to_curvature)
        later = unknowns[len(self.ends):].reshape(PIECES - 1, 3, count)
        return np.concatenate([np.zeros((1, 3, count)), later])

    def misses(self, unknowns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Distances at the joints and ends, and their derivatives by the unknowns (square)."""
        count, known = len(self.to_curvature), len(self.ends)
        joints = self.joints(unknowns)
        after, by_known, by_pose = self._drive(unknowns[:known], joints)
        size = 3 * count
        misses = [(after[:-1] - joints[1:]).ravel()]
        slope = np.zeros((len(unknowns), len(unknowns)))
        for piece in range(PIECES - 1):
            rows = slice(piece * size, (piece + 1) * size)
            slope[rows, :known] = by_known[piece]
            slope[rows, known + piece * size:known + (piece + 1) * size] = -np.eye(size)
            if piece:
                slope[rows, known + (piece - 1) * size:known + piece * size] = by_pose[piece]
        kept = np.concatenate([self.placed, count + self.placed, 2 * count + self.headed])
        misses.append(after[-1].ravel()[kept] - self.ends)
        slope[-known:, :known], slope[-known:, -size:] = by_known[-1][kept], by_pose[-1][kept]
        return np.concatenate(misses), slope

    def _drive(self, known: np.ndarray, joints: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Poses after each piece (PIECES, 3, N), and their derivatives by p and m and by the pose before."""
        count, unknowns = len(self.to_curvature), len(known)
        force, moment = self.unpack(known)
        towards = np.array([self.unpack(unit) for unit in np.eye(unknowns)], dtype=complex)
        nothing = np.zeros((count, 3 * count))
        force_change = np.concatenate([towards[:, 0].T, nothing], axis=1)
        moment_change = np.concatenate([towards[:, 1].T.real, nothing], axis=1)
        shape = (3, PIECES, count, 1 + unknowns + 3 * count)
        start = np.zeros(shape)
        start[..., 0] = np.moveaxis(joints, 1, 0)
        start[..., 1 + unknowns:] = np.eye(3 * count).reshape(3, 1, count, 3 * count)

        def rate(_t: float, flat: np.ndarray) -> np.ndarray:
            x, y, heading = flat.reshape(shape)
            z = x + 1j * y
            first = np.imag(np.conj(force)[:, None] * z)
            first[..., 0] += moment
            first[..., 1:] += moment_change + np.imag(np.conj(force_change) * z[..., :1])
            velocity = np.exp(1j * heading[..., :1])
            moved = np.concatenate([velocity, 1j * velocity * heading[..., 1:]], axis=-1)
            return np.stack([moved.real, moved.imag, self.to_curvature @ first]).ravel()

        final = solve_ivp(rate, (0, 1 / PIECES), start.ravel(), method="DOP853", t_eval=[1 / PIECES],
                          rtol=TOLERANCE, atol=TOLERANCE).y[:, -1].reshape(shape)
        final = np.moveaxis(final, 1, 0)
        slopes = final.reshape(PIECES, 3 * count, -1)
        return final[..., 0], slopes[..., 1:1 + unknowns], slopes[..., 1 + unknowns:]

    def extremal(self, problem: ClassicalProblem, unknowns: np.ndarray, miss: float) -> Extremal:
        """Back to metres, seconds and the map; effort and disagreement by a last integration."""
        force, moment = self.unpack(unknowns[:len(self.ends)])
        joints = self.joints(unknowns)
        shape = (PIECES, 3 * len(problem) + 2)

        def rate(_t: float, flat: np.ndarray) -> np.ndarray:
            x, y, heading = np.moveaxis(flat.reshape(shape)[:, :-2].reshape(joints.shape), 1, 0)
            u = (moment + np.imag(np.conj(force) * (x + 1j * y))) @ self.to_curvature
            costs = np.stack([np.sum(u * u, axis=1), np.sum(u * (u @ self.laplacian), axis=1)], axis=1) / 2
            return np.concatenate([np.cos(heading), np.sin(heading), u, costs], axis=1).ravel()

        start = np.concatenate([joints.reshape(PIECES, -1), np.zeros((PIECES, 2))], axis=1)
        final = solve_ivp(rate, (0, 1 / PIECES), start.ravel(), method="DOP853", rtol=TOLERANCE,
                          atol=TOLERANCE).y[:, -1].reshape(shape)
        end = final[-1, :-2].reshape(3, -1)
        length, starts = problem.duration, problem.starts
        turned = np.exp(1j * starts[:, 2])
        in_map, place = force * turned / length**2, (joints[:, 0] + 1j * joints[:, 1]) * turned * length
        seen = np.stack([starts[:, 0] + place.real, starts[:, 1] + place.imag, starts[:, 2] + joints[:, 2]], axis=2)
        energy = float(moment @ self.to_curvature @ moment / 2 + force.real.sum())
        effort, disagreement = final[:, -2:].sum(axis=0) / length
        return Extremal(problem, np.column_stack([in_map.real, in_map.imag]), moment / length,
                        (moment + np.imag(np.conj(force) * (end[0] + 1j * end[1]))) / length, energy / length**2,
                        float(effort), float(disagreement), miss, seen)
