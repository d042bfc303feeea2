# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Closed forms of one robot against published constants, the differential equations and the reduced flow."""

import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.special import ellipe, ellipk, gamma

from coord_planner.core.theory import elastica
from coord_planner.core.theory.elastica import Elastica
from coord_planner.core.theory.reduced import flow

TIMES = np.linspace(0, 6, 61)


def test_constants():
    """Shared check values, section 1. K(m): Abramowitz & Stegun, Table 17.1 (from memory); 2EK - K^2 = pi/2 is
    Legendre's relation at m = 1/2 (DLMF 19.7.1).
    """
    k, e = ellipk(0.5), ellipe(0.5)
    assert k == pytest.approx(1.8540746773013719, rel=1e-15)
    assert k == pytest.approx(gamma(0.25) ** 2 / (4 * math.sqrt(math.pi)), rel=1e-15)
    assert e == pytest.approx(1.3506438810476755, rel=1e-15)
    assert 2 * e * k - k * k == pytest.approx(math.pi / 2, rel=1e-14)
    assert math.sqrt(2) * k == pytest.approx(2.6220575542921198, rel=1e-15)  # the lemniscate constant
    for m, value in ((0.1, 1.612441348720219), (0.5, 1.854074677301372), (0.9, 2.578092113348173)):
        assert ellipk(m) == pytest.approx(value, rel=1e-15)


def test_rectangular_elastica():
    """Levien, The elastica: a mathematical history, UCB/EECS-2008-103, 2008: span/length and height/span at m = 1/2."""
    curve = Elastica(energy=0.0, tension=1.0, phase=-ellipk(0.5))  # from one inflection to the next
    assert curve.regime == elastica.INFLECTED and curve.parameter == 0.5
    length = 2 * ellipk(0.5)
    x, y, heading = curve.poses(np.linspace(0, length, 2001), (0, 0, math.pi / 2)).T
    assert math.hypot(x[-1], y[-1]) / length == pytest.approx(0.456946581044464, abs=1e-14)
    assert y[-1] == pytest.approx(0, abs=1e-13)
    middle = curve.poses(np.array([length / 2]), (0, 0, math.pi / 2))[0]
    assert middle[1] / abs(x[-1]) == pytest.approx(0.834626841674073, abs=1e-13)
    assert heading[-1] == pytest.approx(math.pi / 2 + math.pi, abs=1e-13)  # it leaves at right angles to its span
    assert curve.cost(length) == pytest.approx(4 * ellipe(0.5) - 2 * ellipk(0.5), abs=1e-13)
    assert curve.cost(length) == pytest.approx(1.69442616958795817, abs=1e-13)  # shared check values, section 1


def test_figure_of_eight():
    """2E = K at m = 0.826114765984970 (Levien 2008): the curve closes after a whole period."""
    m = 0.826114765984970
    assert 2 * ellipe(m) == pytest.approx(ellipk(m), abs=1e-14)
    curve = Elastica(energy=2 * m - 1, tension=1.0, phase=0.3)
    np.testing.assert_allclose(curve.poses(np.array([4 * ellipk(m)]), (1, 2, 0.5))[0], (1, 2, 0.5), atol=1e-13)


# costates at the start: regime and its boundaries
CASES = {
    "inflected": (0.8, -0.3, -0.5),
    "inflected, tight": (3.0, -4.2, 2.0),
    "nearly straight": (1e-4, -1.0, 1e-4),
    "turning left": (2.5, 0.4, 0.9),
    "turning right": (-2.5, 0.4, -0.9),
    "hardly any force": (1.1, 1e-7, 2e-7),
    "arc": (0.7, 0.0, 0.0),
    "arc to the right": (-1.3, 0.0, 0.0),
    "straight": (0.0, 0.0, 0.0),
    "along the force": (0.0, 2.0, 0.0),
    "against the force": (0.0, -2.0, 0.0),
    "solitary": (2.0 * math.sqrt(2.0), -2.0, 0.0),
    "solitary, later": (-1.2, math.sqrt(1 - 0.6048**2), 0.0),
}


@pytest.mark.parametrize("name", CASES)
def test_against_the_reduced_flow(name):
    """mu_1' = -mu_3 and its like (Jurdjevic 1997; Sachkov & Sachkova, arXiv:1303.1746), integrated to 1e-12."""
    mu = np.array(CASES[name])
    if name == "solitary, later":  # h = C exactly: mu_2 = C - u^2/2
        u, tension = mu[0], 1.0
        mu[1] = tension - u * u / 2
        mu[2] = math.sqrt(tension**2 - mu[1] ** 2)
    start = np.array([0.5, -1.0, 2.2])
    curve = Elastica.from_costates(mu)
    followed = flow(np.eye(1), mu[None], start[None], TIMES)
    # near h = C two solutions part exponentially fast
    slack = 1e-7 if name.startswith("solitary") or name == "along the force" else 1e-9
    np.testing.assert_allclose(curve.curvature(TIMES), followed.curvature[0], atol=slack)
    np.testing.assert_allclose(curve.poses(TIMES, start), followed.poses[0].T, atol=slack)
    assert curve.regime == {
        "inflected": elastica.INFLECTED, "inflected, tight": elastica.INFLECTED, "nearly straight": elastica.INFLECTED,
        "turning left": elastica.TURNING, "turning right": elastica.TURNING, "hardly any force": elastica.TURNING,
        "solitary": elastica.SOLITARY, "solitary, later": elastica.SOLITARY,
    }.get(name, elastica.ARC)


@settings(max_examples=60, deadline=None)
@given(st.floats(-3, 3), st.floats(0.05, 3), st.floats(-math.pi, math.pi))
def test_equation_and_cost(u, tension, angle):
    """u'^2 + (u^2/2 - h)^2 = C^2 (Love, Elasticity, 4th ed., ch. XIX, from memory); cost by Simpson's rule."""
    mu = (u, tension * math.cos(angle), -tension * math.sin(angle))
    curve = Elastica.from_costates(mu)
    assume(abs(curve.parameter - 1) > 1e-9 or curve.regime == elastica.SOLITARY)  # see the class
    assert curve.curvature(0.0) == pytest.approx(u, abs=1e-7)
    h = 1e-5
    slope = (curve.curvature(TIMES + h) - curve.curvature(TIMES - h)) / (2 * h)
    values = curve.curvature(TIMES)
    np.testing.assert_allclose(slope**2 + (values**2 / 2 - curve.energy) ** 2, curve.tension**2, atol=3e-8)
    fine = curve.curvature(np.linspace(0, 4, 4001)) ** 2 / 2
    simpson = (fine[0] + fine[-1] + 4 * fine[1::2].sum() + 2 * fine[2:-1:2].sum()) / 3000
    assert curve.cost(4.0) == pytest.approx(simpson, abs=1e-8)
    x, y, heading = curve.poses(np.array([2.0 - h, 2.0, 2.0 + h]), (0, 0, 0.3)).T
    np.testing.assert_allclose([(x[2] - x[0]) / (2 * h), (y[2] - y[0]) / (2 * h)],
                               [math.cos(heading[1]), math.sin(heading[1])], atol=1e-7)
