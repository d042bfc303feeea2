# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""SE(2) against values, scipy's matrix functions, fine integration and finite differences."""

import casadi as ca
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm, logm

from coord_planner.core import se2

ANGLES = np.concatenate([sign * np.logspace(-9, np.log10(np.pi - 1e-6), 25) for sign in (1, -1)] + [[0.0]])
poses = st.tuples(st.floats(-50, 50), st.floats(-50, 50), st.floats(-20, 20))


def matrix(pose):
    x, y, theta = pose
    return np.array([[np.cos(theta), -np.sin(theta), x], [np.sin(theta), np.cos(theta), y], [0, 0, 1]])


def algebra(twist):
    v_x, v_y, omega = twist
    return np.array([[0, -omega, v_x], [omega, 0, v_y], [0, 0, 0]])


# shared check values, section 3 (made with scipy.linalg.expm and logm)
@pytest.mark.parametrize(
    ("twist", "position"),
    [
        ((1, 0, 0.5), (0.958851077208406, 0.244834876219255)),
        ((2, 0, np.pi / 2), (4 / np.pi, 4 / np.pi)),
        ((1.5, -0.4, -1.2), (0.952501442284591, -1.107732502226567)),
    ],
)
def test_exp_values(twist, position):
    x, y, theta = se2.exp(*twist)
    assert (x, y) == pytest.approx(position, abs=2e-15)
    assert theta == twist[2]


# shared check values, section 3
@pytest.mark.parametrize(
    ("pose", "twist"),
    [((1, 1, np.pi / 2), (np.pi / 2, 0, np.pi / 2)), ((0.5, -0.25, -2), (0.571046307967, 0.339476846016, -2))],
)
def test_log_values(pose, twist):
    assert se2.log(*pose) == pytest.approx(twist, abs=1e-12)


@pytest.mark.parametrize("angle", ANGLES)
def test_against_expm_and_logm(angle):
    """scipy.linalg.expm and logm work on the 3 x 3 matrices and know nothing of these formulas."""
    twist = (1.3, -0.6, angle)
    np.testing.assert_allclose(matrix(se2.exp(*twist)), expm(algebra(twist)), atol=2e-15)
    # logm itself is good to about 1e-14 / (pi - |angle|)
    expected = np.real(logm(matrix((1.3, -0.6, angle))))
    np.testing.assert_allclose(algebra(se2.log(1.3, -0.6, angle)), expected, atol=1e-13 + 1e-14 / (np.pi - abs(angle)))


@given(poses, poses, poses)
def test_group_laws(a, b, c):
    np.testing.assert_allclose(matrix(se2.compose(a, b)), matrix(a) @ matrix(b), atol=1e-12)
    left, right = se2.compose(se2.compose(a, b), c), se2.compose(a, se2.compose(b, c))
    np.testing.assert_allclose(left, right, atol=1e-12)
    np.testing.assert_allclose(se2.compose(a, se2.inverse(a)), (0, 0, 0), atol=1e-12)
    np.testing.assert_allclose(se2.compose(se2.inverse(a), a), (0, 0, 0), atol=1e-12)


@given(st.floats(-10, 10), st.floats(-10, 10), st.floats(-6, 6))
def test_log_undoes_exp(v_x, v_y, omega):
    """Within one full turn either way the unwrapped heading tells the twist."""
    np.testing.assert_allclose(se2.log(*se2.exp(v_x, v_y, omega)), (v_x, v_y, omega), atol=1e-11)


@pytest.mark.parametrize("turn", [0.0, 1e-8, -0.3, 2.0, -9.0])
def test_arc_against_fine_integration(turn):
    """x' = cos theta, y' = sin theta, theta' = curvature, by an eighth-order Runge-Kutta method."""
    start, distance = (0.4, -1.0, 2.0), 1.7
    flow = solve_ivp(lambda _s, q: [np.cos(q[2]), np.sin(q[2]), turn / distance], (0, distance), start,
                     method="DOP853", rtol=1e-13, atol=1e-13)
    np.testing.assert_allclose(se2.arc(*start, distance, turn), flow.y[:, -1], atol=1e-12)


@pytest.mark.parametrize("angle", ANGLES)
def test_sinc_and_cosc(angle):
    np.testing.assert_allclose(se2.sinc(angle), np.sinc(angle / np.pi), rtol=4e-16)
    if angle:
        np.testing.assert_allclose(se2.cosc(angle), 2 * np.sin(angle / 2) ** 2 / angle, rtol=1e-15)


def test_arrays_floats_and_symbols_agree():
    numbers = np.concatenate([ANGLES, [0.5, -0.5, np.nextafter(0.5, 0)]])
    symbol = ca.SX.sym("t")
    for function in (se2.sinc, se2.cosc):
        compiled = ca.Function("f", [symbol], [function(symbol)])
        values = function(numbers)
        np.testing.assert_allclose(values, [function(float(t)) for t in numbers], rtol=1e-15)
        np.testing.assert_allclose(values, compiled(numbers).full().ravel(), rtol=1e-15)


@pytest.mark.parametrize("kind", [ca.SX, ca.MX])
def test_first_and_second_derivatives(kind):
    """Solvers see both: no NaN at 0, no step where the series takes over. sinc''(0) = -1/3, cosc'(0) = 1/2."""
    symbol = kind.sym("t")
    for function, slope, bend in ((se2.sinc, 0.0, -1 / 3), (se2.cosc, 0.5, 0.0)):
        value = function(symbol)
        first = ca.gradient(value, symbol)
        second = ca.Function("second", [symbol], [first, ca.gradient(first, symbol)])
        assert [float(part) for part in second(0.0)] == pytest.approx([slope, bend], abs=1e-15)
        for t in (1e-9, -1e-3, 0.499999, 0.500001, -2.0):
            h = 1e-4
            values = [float(function(t + step)) for step in (-h, 0.0, h)]
            assert float(second(t)[0]) == pytest.approx((values[2] - values[0]) / (2 * h), abs=1e-8)
            assert float(second(t)[1]) == pytest.approx((values[2] - 2 * values[1] + values[0]) / h**2, abs=3e-7)


def test_derivatives_of_the_step():
    q = ca.SX.sym("q", 5)
    step = ca.vertcat(*se2.arc(*ca.vertsplit(q)))
    jacobian = ca.Function("j", [q], [ca.jacobian(step, q)])
    for turn in (0.0, 1e-7, -0.5, 1.3):
        at = np.array([0.2, -0.4, 0.7, 0.9, turn])
        h = 1e-6
        numeric = [(np.array(se2.arc(*(at + h * e))) - np.array(se2.arc(*(at - h * e)))) / (2 * h) for e in np.eye(5)]
        np.testing.assert_allclose(np.array(jacobian(at)), np.array(numeric).T, atol=1e-9)


@given(st.floats(-1e3, 1e3))
def test_wrap(angle):
    wrapped = se2.wrap(angle)
    assert -np.pi < wrapped <= np.pi
    turns = (angle - wrapped) / (2 * np.pi)
    assert turns == pytest.approx(round(turns), abs=1e-10)


def test_wrap_keeps_half_a_turn_positive():
    assert se2.wrap(np.pi) == np.pi and se2.wrap(-np.pi) == np.pi


def test_rollout_is_a_chain_of_arcs():
    random = np.random.default_rng(2)
    start, distances, turns = random.normal(size=(3, 3)), random.uniform(0, 1, (3, 7)), random.normal(size=(3, 7))
    poses = se2.rollout(start, distances, turns)
    assert poses.shape == (3, 8, 3)
    for k in range(3):
        pose = tuple(start[k])
        for m in range(7):
            pose = se2.arc(*pose, distances[k, m], turns[k, m])
            np.testing.assert_allclose(poses[k, m + 1], pose, atol=1e-13)
