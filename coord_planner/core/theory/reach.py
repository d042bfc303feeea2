# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where a curvature profile leads, with first and second derivatives.

The plane is the complex plane of a robot's start: x forward is the real axis, y left the imaginary one. The way has
length 1 and consists of M arcs of equal length.
"""

from __future__ import annotations

import attrs
import numpy as np

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(12)  # exact to rounding for arcs of up to a full turn


@attrs.frozen
class Reach:
    """Displacement of each of N robots.

    ``displacement`` (N,) complex; ``gradient`` (N, M) complex, by curvature; ``own_bend`` (N, M) complex,
    second derivative by one curvature taken twice.
    """

    displacement: np.ndarray
    gradient: np.ndarray
    own_bend: np.ndarray

    def hessian(self, costate: np.ndarray) -> np.ndarray:
        """Second derivative of costate . displacement, shape (N, M, M); ``costate`` (N,) is p_x + i p_y.

        Off the diagonal the derivative by curvatures i < k is i h times the gradient by k alone: bending
        arc i turns everything after it about one point.
        """
        count = self.gradient.shape[1]
        later = np.maximum.outer(np.arange(count), np.arange(count))
        weighted = np.conj(costate)[:, None]
        blocks = np.real(weighted * (1j / count) * self.gradient)[:, later]
        diagonal = np.arange(count)
        blocks[:, diagonal, diagonal] = np.real(weighted * self.own_bend)
        return blocks


def reach(curvature: np.ndarray) -> Reach:
    """Displacement after unit length and its derivatives.

    Args:
        curvature: shape (N, M), curvature on each arc times the length of the whole way.
    """
    count = curvature.shape[1]
    step = 1.0 / count
    along = (_NODES + 1) / 2 * step
    phases = np.exp(1j * curvature[:, :, None] * along) * (_WEIGHTS / 2 * step)
    chord, slope, bend = (np.sum(phases * (1j * along) ** power, axis=2) for power in range(3))
    headings = np.concatenate([np.zeros((len(curvature), 1)), np.cumsum(curvature, axis=1)[:, :-1]], axis=1) * step
    direction = np.exp(1j * headings)
    chord, slope, bend = chord * direction, slope * direction, bend * direction
    passed = np.cumsum(chord, axis=1)
    rest = passed[:, -1:] - passed
    return Reach(passed[:, -1], slope + 1j * step * rest, bend - step**2 * rest)


def poses(curvature: np.ndarray) -> np.ndarray:
    """Complex positions at the nodes, shape (N, M + 1), from 0; same scale as ``reach``."""
    count = curvature.shape[1]
    turn = curvature / count
    headings = np.cumsum(turn, axis=1) - turn / 2
    chord = np.sinc(turn / 2 / np.pi) / count * np.exp(1j * headings)
    return np.concatenate([np.zeros((len(curvature), 1)), np.cumsum(chord, axis=1)], axis=1)
