# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The reduced equations of the coupled fleet, integrated to tight tolerance, and what they conserve."""

from __future__ import annotations

import attrs
import numpy as np
from scipy.integrate import solve_ivp

TOLERANCE = 1e-12


@attrs.frozen(eq=False)
class Flow:
    """A solution at ``times`` (K,). ``mu`` (N, 3, K): mu_1, mu_2, mu_3 of each robot; ``poses`` (N, 3, K); ``weight``
    is A = I + chi L.
    """

    times: np.ndarray
    mu: np.ndarray
    poses: np.ndarray
    weight: np.ndarray

    @property
    def curvature(self) -> np.ndarray:
        """u = A^-1 mu_1, shape (N, K)."""
        return np.linalg.solve(self.weight, self.mu[:, 0])

    def energy(self) -> np.ndarray:
        """h = 1/2 u'A u + sum of mu_2, shape (K,): conserved."""
        return np.sum(self.curvature * self.mu[:, 0], axis=0) / 2 + self.mu[:, 1].sum(axis=0)

    def casimirs(self) -> np.ndarray:
        """mu_2^2 + mu_3^2 of each robot, shape (N, K): conserved."""
        return self.mu[:, 1] ** 2 + self.mu[:, 2] ** 2

    def forces(self) -> np.ndarray:
        """p of each robot in the map, shape (N, 2, K): conserved."""
        turned = (self.mu[:, 1] + 1j * self.mu[:, 2]) * np.exp(1j * self.poses[:, 2])
        return np.stack([turned.real, turned.imag], axis=1)


def flow(weight: np.ndarray, mu: np.ndarray, starts: np.ndarray, times: np.ndarray) -> Flow:
    """Integrate mu_1' = -mu_3, mu_2' = u mu_3, mu_3' = -u mu_2 and the poses.

    Args:
        weight: A = I + chi L, shape (N, N). mu, starts: values at times[0], shape (N, 3). times: ascending, shape (K,).
    """
    count = len(weight)
    to_curvature = np.linalg.inv(weight)

    def rate(_t: float, flat: np.ndarray) -> np.ndarray:
        first, along, across, _x, _y, heading = flat.reshape(6, count)
        u = to_curvature @ first
        return np.concatenate([-across, u * across, -u * along, np.cos(heading), np.sin(heading), u])

    initial = np.concatenate([np.asarray(mu, float).T, np.asarray(starts, float).T]).ravel()
    solution = solve_ivp(rate, (times[0], times[-1]), initial, method="DOP853", t_eval=times,
                         rtol=TOLERANCE, atol=TOLERANCE * (1 + np.abs(mu).max()))
    states = solution.y.reshape(6, count, -1).transpose(1, 0, 2)
    return Flow(solution.t, states[:, :3], states[:, 3:], np.asarray(weight, float))


def join(pieces: list[Flow]) -> Flow:
    """Pieces that follow one another as one solution; times at which two meet stand there twice."""
    mu, poses = (np.concatenate(parts, axis=2) for parts in zip(*((piece.mu, piece.poses) for piece in pieces)))
    return Flow(np.concatenate([piece.times for piece in pieces]), mu, poses, pieces[0].weight)
