# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The general flow: structure constants, Casimirs and Lax invariants, against textbooks and the reduced equations."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from coord_planner.core.theory import lie_poisson
from coord_planner.core.theory.reduced import flow as reduced_flow

ALGEBRAS = {
    "SE(2)": lie_poisson.se2(), "SO(3)": lie_poisson.so3(), "SE(3)": lie_poisson.se3(),
    "Heisenberg": lie_poisson.heisenberg(), "gl(2)": lie_poisson.general_linear(2), "gl(3)":
    lie_poisson.general_linear(3),
}
TIMES = np.linspace(0, 3, 13)


def coupled(count, size, seed):
    """An invented Hamiltonian of coupled copies: 1/2 mu'Q mu + drift . mu, Q positive definite over all copies."""
    random = np.random.default_rng(seed)
    root = random.normal(size=(count * size, count * size)) / np.sqrt(count * size)
    quadratic, drift = root @ root.T, random.normal(size=count * size)

    def gradient(mu):
        return (quadratic @ mu.ravel() + drift).reshape(mu.shape)

    def energy(mu):
        return mu.ravel() @ quadratic @ mu.ravel() / 2 + drift @ mu.ravel()

    return gradient, energy, random.normal(size=(count, size))


@pytest.mark.parametrize("name", ALGEBRAS)
def test_constants_are_those_of_a_lie_algebra(name):
    """Antisymmetry and Jacobi's identity."""
    c = ALGEBRAS[name].constants
    np.testing.assert_allclose(c, -c.transpose(1, 0, 2), atol=1e-12)
    nested = np.einsum("jkl,ilm->ijkm", c, c)
    np.testing.assert_allclose(nested + nested.transpose(2, 0, 1, 3) + nested.transpose(1, 2, 0, 3), 0, atol=1e-12)


def test_brackets_from_textbooks():
    """[turn, forward] = left, [turn, left] = -forward on SE(2); the vector product on SO(3); [x, y] = z on Heisenberg's
    algebra (Murray, Li & Sastry 1994; Montgomery 2002; from memory).
    """
    c = ALGEBRAS["SE(2)"].constants
    np.testing.assert_allclose([c[0, 1], c[0, 2], c[1, 2]], [[0, 0, 1], [0, -1, 0], [0, 0, 0]], atol=1e-14)
    c = ALGEBRAS["SO(3)"].constants
    np.testing.assert_allclose(c, np.cross(np.eye(3)[:, None], np.eye(3)[None]), atol=1e-14)
    c = ALGEBRAS["Heisenberg"].constants
    np.testing.assert_allclose([c[0, 1], c[0, 2], c[1, 2]], [[0, 0, 1], [0, 0, 0], [0, 0, 0]], atol=1e-14)


@pytest.mark.parametrize("coupling", [0.0, 3.0])
def test_gives_the_reduced_equations(coupling):
    """On SE(2) with H = 1/2 mu_1'(I + chi L)^-1 mu_1 + sum of mu_2."""
    weight = np.eye(3) + coupling * np.array([[1, -1, 0], [-1, 2, -1], [0, -1, 1]])
    mu = np.random.default_rng(1).normal(size=(3, 3))

    def gradient(now):
        return np.column_stack([np.linalg.solve(weight, now[:, 0]), np.ones(3), np.zeros(3)])

    general = lie_poisson.flow(ALGEBRAS["SE(2)"], gradient, mu, TIMES)
    special = reduced_flow(weight, mu, np.zeros((3, 3)), TIMES)
    np.testing.assert_allclose(general.transpose(1, 2, 0), special.mu, atol=1e-10)


CASIMIRS = {
    "SE(2)": lie_poisson.se2_casimir, "SE(3)": lie_poisson.se3_casimirs, "Heisenberg": lie_poisson.heisenberg_casimir,
    "SO(3)": lambda mu: np.sum(mu**2, axis=-1),
}


@pytest.mark.parametrize("name", CASIMIRS)
@settings(max_examples=5, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_casimirs_of_each_copy(name, seed):
    """Conserved for every Hamiltonian, copy by copy (Marsden & Ratiu, ch. 13-14, from memory); so is H."""
    algebra = ALGEBRAS[name]
    gradient, energy, mu = coupled(2, len(algebra.basis), seed)
    followed = lie_poisson.flow(algebra, gradient, mu, TIMES)
    assert np.abs(followed[-1] - mu).max() > 1e-3  # it does move
    np.testing.assert_allclose(CASIMIRS[name](followed), np.broadcast_to(CASIMIRS[name](mu),
    CASIMIRS[name](followed).shape),
                               atol=1e-9)
    np.testing.assert_allclose([energy(now) for now in followed], energy(mu), atol=1e-9)


@pytest.mark.parametrize(("name", "forms"), [("SO(3)", 1), ("SE(3)", 2), ("gl(2)", 2), ("gl(3)", 2)])
def test_lax_invariants(name, forms):
    """Invariant forms: one on SO(3), p.p and p.m on SE(3), tr XY and (tr X)(tr Y) on gl(n); the eigenvalues of the
    Lax matrix stay (Lax 1968; from memory).
    """
    algebra = ALGEBRAS[name]
    assert len(algebra.invariant_forms()) == forms
    gradient, _, mu = coupled(2, len(algebra.basis), 3)
    followed = lie_poisson.flow(algebra, gradient, mu, TIMES)
    for copy in range(2):
        first = algebra.lax_invariants(mu[copy])
        for now in followed:
            np.testing.assert_allclose(algebra.lax_invariants(now[copy]), first, rtol=1e-8, atol=1e-8)


def test_lax_invariants_of_se3_are_its_casimirs():
    algebra = ALGEBRAS["SE(3)"]
    mu = np.random.default_rng(4).normal(size=(50, 6))
    quadratic = np.array([algebra.lax_invariants(one)[:2] for one in mu])
    fitted, *_ = np.linalg.lstsq(lie_poisson.se3_casimirs(mu), quadratic, rcond=None)
    np.testing.assert_allclose(lie_poisson.se3_casimirs(mu) @ fitted, quadratic, atol=1e-10)
    assert np.linalg.matrix_rank(fitted, tol=1e-8) == 2


@pytest.mark.parametrize("name", ["Heisenberg", "SE(2)"])
def test_no_lax_form(name):
    """Every invariant form is degenerate there."""
    assert ALGEBRAS[name].lax_form() is None
    with pytest.raises(ValueError, match="no Lax form"):
        ALGEBRAS[name].lax_invariants(np.ones(3))


@pytest.mark.parametrize(
    ("basis", "words"),
    [([np.eye(2), 2 * np.eye(2)], "independent"), ([[[0, 1], [0, 0]], [[0, 0], [1, 0]]], "closed")],
)
def test_bad_bases(basis, words):
    with pytest.raises(ValueError, match=words):
        lie_poisson.Algebra(np.array(basis))
