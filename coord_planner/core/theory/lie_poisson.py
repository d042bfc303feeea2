# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The Lie-Poisson flow mu' = ad*_{dH} mu on any Lie algebra given by matrices, and what it conserves.

A basis e_1 ... e_n with [e_i, e_j] = sum_k c_ijk e_k gives mu_i' = sum_jk dH_j c_jik mu_k for the Hamiltonian H(mu) of
a left-invariant problem (Jurdjevic, *Geometric Control Theory*, 1997, ch. 12; Marsden & Ratiu, *Introduction to
Mechanics and Symmetry*, 2nd ed., ch. 13; from memory). Copies of the algebra may share one Hamiltonian: each follows
its own dH.

Where the algebra has an invariant form K that is not degenerate, mu corresponds to the element X with K(X, .) = mu,
and the flow takes Lax's form X' = [X, dH]: the eigenvalues of X are conserved, besides K(X, X) for every invariant K
(Lax, *Communications on Pure and Applied Mathematics* 21, 1968).
"""

from __future__ import annotations

from collections.abc import Callable

import attrs
import numpy as np
from scipy.integrate import solve_ivp
from scipy.linalg import null_space

_TOLERANCE = 1e-12
Gradient = Callable[[np.ndarray], np.ndarray]


def _numbers(value: object) -> np.ndarray:
    return np.array(value, dtype=float)


@attrs.frozen(eq=False)
class Algebra:
    """A matrix Lie algebra: ``basis`` (n, d, d), linearly independent and closed under commutators.

    Raises:
        ValueError: it is not.
    """

    basis: np.ndarray = attrs.field(converter=_numbers)
    constants: np.ndarray = attrs.field(init=False)  # c_ijk, shape (n, n, n)

    def __attrs_post_init__(self) -> None:
        flat = self.basis.reshape(len(self.basis), -1).T
        if np.linalg.matrix_rank(flat) < len(self.basis):
            raise ValueError("the basis is not linearly independent")
        products = np.einsum("iab,jbc->ijac", self.basis, self.basis)
        brackets = (products - products.transpose(1, 0, 2, 3)).reshape(len(self.basis) ** 2, -1).T
        constants, *_ = np.linalg.lstsq(flat, brackets, rcond=None)
        if not np.allclose(flat @ constants, brackets, atol=1e-9):
            raise ValueError("the basis is not closed under commutators")
        object.__setattr__(self, "constants", constants.T.reshape((len(self.basis),) * 3))

    def element(self, coordinates: np.ndarray) -> np.ndarray:
        """The matrix with these coordinates, shape (d, d)."""
        return np.tensordot(coordinates, self.basis, axes=1)

    def invariant_forms(self) -> np.ndarray:
        """A basis of the symmetric forms with K([x, y], z) = K(x, [y, z]), shape (f, n, n)."""
        count = len(self.basis)
        upper = np.triu_indices(count)
        forms = np.zeros((len(upper[0]), count, count))
        forms[np.arange(len(forms)), upper[0], upper[1]] = 1
        forms[np.arange(len(forms)), upper[1], upper[0]] = 1
        left = np.einsum("ijl,flk->fijk", self.constants, forms)
        right = np.einsum("jkl,fil->fijk", self.constants, forms)
        mixing = null_space((left - right).reshape(len(forms), -1).T, rcond=1e-10)
        return np.tensordot(mixing.T, forms, axes=1)

    def lax_form(self) -> np.ndarray | None:
        """An invariant form that is not degenerate, shape (n, n), or None where the algebra has none."""
        forms = self.invariant_forms()
        for weights in np.random.default_rng(0).normal(size=(5, len(forms))):  # nearly every mixture is as good as any
            form = np.tensordot(weights, forms, axes=1)
            if np.linalg.matrix_rank(form, tol=1e-6) == len(form):
                return form
        return None

    def lax_invariants(self, mu: np.ndarray) -> np.ndarray:
        """K(X, X) for every invariant form, then trace X^2 ... trace X^d (trace X first); shape (f + d,).

        Raises:
            ValueError: the algebra has no invariant form that is not degenerate.
        """
        form = self.lax_form()
        if form is None:
            raise ValueError("this algebra has no invariant form that is not degenerate, so no Lax form")
        coordinates = np.linalg.solve(form, mu)
        quadratic = np.einsum("i,fij,j->f", coordinates, self.invariant_forms(), coordinates)
        powers, element = np.eye(self.basis.shape[1]), self.element(coordinates)
        traces = []
        for _ in range(self.basis.shape[1]):
            powers = powers @ element
            traces.append(np.trace(powers))
        return np.concatenate([quadratic, traces])


def flow(algebra: Algebra, gradient: Gradient, mu: np.ndarray, times: np.ndarray) -> np.ndarray:
    """mu at the given times, shape (K, N, n).

    Args:
        gradient: mu (N, n) -> dH/dmu (N, n). mu: of N copies at times[0], shape (N, n). times: ascending, shape (K,).
    """
    shape = np.shape(mu)

    def rate(_t: float, flat: np.ndarray) -> np.ndarray:
        now = flat.reshape(shape)
        return np.einsum("kj,jil,kl->ki", gradient(now), algebra.constants, now).ravel()

    solution = solve_ivp(rate, (times[0], times[-1]), np.ravel(mu), method="DOP853", t_eval=times,
                         rtol=_TOLERANCE, atol=_TOLERANCE)
    return solution.y.T.reshape(-1, *shape)


def _unit(size: int, row: int, column: int) -> np.ndarray:
    matrix = np.zeros((size, size))
    matrix[row, column] = 1
    return matrix


def _turn(size: int, row: int, column: int) -> np.ndarray:
    return _unit(size, row, column) - _unit(size, column, row)


def se2() -> Algebra:
    """Turning left, forward, left: (mu_1, mu_2, mu_3) of the coupled problem."""
    return Algebra(np.array([_turn(3, 1, 0), _unit(3, 0, 2), _unit(3, 1, 2)]))


def so3() -> Algebra:
    """Turning about x, y, z."""
    return Algebra(np.array([_turn(3, 2, 1), _turn(3, 0, 2), _turn(3, 1, 0)]))


def se3() -> Algebra:
    """Turning about x, y, z, then moving along them: mu = (m, p)."""
    turns = [_turn(4, 2, 1), _turn(4, 0, 2), _turn(4, 1, 0)]
    return Algebra(np.array([*turns, *(_unit(4, axis, 3) for axis in range(3))]))


def heisenberg() -> Algebra:
    """x, y and their commutator z."""
    return Algebra(np.array([_unit(3, 0, 1), _unit(3, 1, 2), _unit(3, 0, 2)]))


def general_linear(size: int) -> Algebra:
    """All matrices of a size, row by row."""
    return Algebra(np.array([_unit(size, row, column) for row in range(size) for column in range(size)]))


def se2_casimir(mu: np.ndarray) -> np.ndarray:
    """mu_2^2 + mu_3^2; last axis of ``mu``: the three components."""
    return mu[..., 1] ** 2 + mu[..., 2] ** 2


def se3_casimirs(mu: np.ndarray) -> np.ndarray:
    """p . p and p . m, stacked on the last axis."""
    m, p = mu[..., :3], mu[..., 3:]
    return np.stack([np.sum(p * p, axis=-1), np.sum(p * m, axis=-1)], axis=-1)


def heisenberg_casimir(mu: np.ndarray) -> np.ndarray:
    """mu_3, that of the commutator."""
    return mu[..., 2]
