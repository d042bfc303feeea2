# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The driftless problem on the Heisenberg group: published values and a numerical minimum of its own.

Brockett, in New Directions in Applied Mathematics, 1981; Montgomery, A Tour of Subriemannian Geometries, 2002 (from
memory).
"""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.optimize import minimize

from coord_planner.core.theory import heisenberg


@pytest.mark.parametrize("z", [-2.0, -1e-6, 0.0, 0.3, 50.0])
def test_straight_above(z):
    """2 pi |z| (Brockett 1981)."""
    assert heisenberg.energy(0, 0, z) == pytest.approx(2 * math.pi * abs(z), rel=1e-14)


def test_value():
    """Shared check values, section 5."""
    assert heisenberg.length(1, 0, 0.25) == pytest.approx(1.290952256414, abs=1e-12)
    assert heisenberg.length(0, -1, 0.25) == pytest.approx(1.290952256414, abs=1e-12)


@pytest.mark.parametrize("half", [*np.logspace(-8, -1, 8), 0.5, 1.5, 2.5, 3.1, math.pi - 1e-5])
@pytest.mark.parametrize("radius", [0.1, 3.0])
def test_arcs_end_where_they_should(half, radius):
    """A circular arc of opening 2 phi, driven numerically by x' = u, y' = v, z' = (x v - y u)/2."""
    def rate(s, q):
        u, v = math.cos(s / radius), math.sin(s / radius)
        return [u, v, (q[0] * v - q[1] * u) / 2]

    arc = 2 * half * radius
    x, y, z = solve_ivp(rate, (0, arc), [0, 0, 0], method="DOP853", rtol=1e-13, atol=1e-18).y[:, -1]
    assert heisenberg.length(x, y, z) == pytest.approx(arc, rel=1e-7)


@given(st.floats(-5, 5), st.floats(-5, 5), st.floats(-5, 5), st.floats(0.1, 10), st.floats(-3, 3))
def test_laws(x, y, z, scale, angle):
    """Dilations (s x, s y, s^2 z), rotations, reflection; never shorter than the chord or than the closed path."""
    length = heisenberg.length(x, y, z)
    assert heisenberg.length(scale * x, scale * y, scale**2 * z) == pytest.approx(scale * length, rel=1e-7, abs=1e-150)
    turned = (x + 1j * y) * complex(math.cos(angle), math.sin(angle))
    assert heisenberg.length(turned.real, turned.imag, -z) == pytest.approx(length, rel=1e-7, abs=1e-150)
    assert length >= math.hypot(x, y) * (1 - 1e-12)
    assert length**2 >= 2 * math.pi * abs(z) * (1 - 1e-12)  # half a disc encloses the most for its arc


def numerical_cost(first, second, coupling):
    """Least cost over closed paths of a few frequencies turning either way, by SLSQP: an amplitude a copy, frequency
    and sense.

    Copy k has controls sum over n of c_kn exp(2 pi i n t): cost 1/2 sum c_n'A c_n, area sum of c_kn^2 / (4 pi n).
    """
    frequencies = np.array([1, -1, 2, -2])
    weight = np.array([[1 + coupling, -coupling], [-coupling, 1 + coupling]])

    def cost(flat):
        c = flat.reshape(2, -1)
        return np.sum(c * (weight @ c)) / 2

    def areas(flat):
        return np.sum(flat.reshape(2, -1) ** 2 / (4 * math.pi * frequencies), axis=1) - [first, second]

    random, best = np.random.default_rng(0), math.inf
    for _ in range(8):
        found = minimize(cost, random.normal(size=8) * 3, method="SLSQP", constraints={"type": "eq", "fun": areas},
                         options={"ftol": 1e-13, "maxiter": 500})
        if found.success and np.abs(areas(found.x)).max() < 1e-8:
            best = min(best, found.fun)
    return best


@pytest.mark.parametrize(
    ("first", "second", "coupling"),
    [(1, 0, 4), (1, 0.9, 4), (1, 0.05, 4), (1, -0.5, 2), (0.3, 1.2, 0.7), (-1, -0.4, 10), (-1, 0.6, 1), (1, 1, 100)],
)
def test_two_copies_against_a_numerical_minimum(first, second, coupling):
    expected = numerical_cost(first, second, coupling)
    assert heisenberg.coupled_energy(first, second, coupling) == pytest.approx(expected, rel=1e-6)


def test_two_copies_value():
    """Shared check values, section 5: chi 4, z = (1, 0) costs 6 pi."""
    assert heisenberg.coupled_energy(1, 0, 4) == pytest.approx(6 * math.pi, rel=1e-14)


@given(st.floats(-5, 5), st.floats(-5, 5), st.floats(0, 1000))
def test_two_copies_laws(first, second, coupling):
    cost = heisenberg.coupled_energy(first, second, coupling)
    alone = heisenberg.energy(0, 0, first) + heisenberg.energy(0, 0, second)
    assert heisenberg.coupled_energy(first, second, 0.0) == pytest.approx(alone, rel=1e-12)
    assert cost >= alone * (1 - 1e-12)  # rises with the coupling
    assert heisenberg.coupled_energy(second, first, coupling) == cost
    assert heisenberg.coupled_energy(-first, -second, coupling) == cost
    assert heisenberg.coupled_energy(first, first, coupling) == pytest.approx(4 * math.pi * abs(first), rel=1e-12)


@pytest.mark.parametrize("coupling", [0.1, 4.0, 100.0])
def test_the_two_branches_meet(coupling):
    root = math.sqrt(1 + 2 * coupling)
    edge = ((1 + coupling - root) / coupling) ** 2
    above, below = (heisenberg.coupled_energy(1.0, edge * (1 + by), coupling) for by in (1e-9, -1e-9))
    assert above == pytest.approx(below, rel=1e-7)
