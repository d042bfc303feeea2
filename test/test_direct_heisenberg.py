# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The driftless problem on the Heisenberg group: published values, two coupled copies, its own laws.

Brockett, in New Directions in Applied Mathematics, 1981; Montgomery, A Tour of Subriemannian Geometries, 2002 (from
memory); two copies: shared check values, section 5.
"""

import math

import attrs
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from coord_planner.core.direct import heisenberg
from coord_planner.core.direct.heisenberg import HeisenbergProblem, plan
from coord_planner.core.theory import heisenberg as closed

FREE = [math.nan] * 3


def posed(starts, ends, coupling=0.0, duration=1.0, intervals=100, edges=((0, 1),)):
    joined = np.array(edges if len(starts) > 1 else [], dtype=int).reshape(-1, 2)
    return HeisenbergProblem(tuple("abc"[: len(starts)]), starts, ends, joined, np.ones(len(joined)), coupling,
                             duration, intervals)


def solved(*args, **more):
    found = plan(posed(*args, **more))
    assert found.status == "solved" and found.check.clean, found.reason
    return found


@pytest.mark.parametrize(
    ("start", "end", "energy"),
    [((0, 0, 0), (0, 0, 1), 2 * math.pi), ((0, 0, 0), (0, 0, -50), 100 * math.pi),
     ((0, 0, 0), (1, 0, 0.25), 1.290952256414**2 / 2), ((0, 0, 0), (2, 1, 0), 2.5)],
)
def test_single_copy_values(start, end, energy):
    found = solved([start], [end])
    assert -1e-9 <= found.cost / energy - 1 <= 30 / 100**2
    assert found.energy_drift < 1e-6 and found.area_drift < 1e-6


def test_a_circle_of_chords():
    """Straight above, M constant controls drive a regular polygon: 2 M tan(pi/M) z, by the isoperimetric inequality
    for polygons (from memory); it can be turned about at no cost.
    """
    found = solved([[0, 0, 0]], [[0, 0, 1]], intervals=20)
    assert found.cost == pytest.approx(2 * 20 * math.tan(math.pi / 20), rel=1e-9)
    assert found.check.flat == 1 and "one way to change it costs nothing" in found.check.words


@pytest.mark.parametrize(
    ("first", "second", "coupling"), [(1, 0, 4), (1, 0.9, 2), (1, 0.05, 2), (1, -0.5, 2), (-0.3, -1.2, 0.7)]
)
def test_two_coupled_copies(first, second, coupling):
    found = solved([[0, 0, 0]] * 2, [[0, 0, first], [0, 0, second]], coupling, intervals=60)
    assert -1e-9 <= found.cost / closed.coupled_energy(first, second, coupling) - 1 <= 30 / 60**2
    if (first, second, coupling) == (1, 0, 4):
        assert found.cost == pytest.approx(6 * math.pi, rel=30 / 60**2)


def test_error_falls_as_the_square_of_the_interval():
    counts = np.array([25, 50, 100, 200])
    exact = closed.energy(1, 0, 0.25)
    errors = [solved([[0, 0, 0]], [[1, 0, 0.25]], intervals=int(count)).cost / exact - 1 for count in counts]
    assert 1.8 < -np.polyfit(np.log(counts), np.log(errors), 1)[0] < 2.2


def test_the_same_from_everywhere_at_every_pace_and_scale():
    """Left translations, dilations (s x, s y, s^2 z), and cost * duration."""
    base = solved([[0, 0, 0]], [[1.0, 0.5, 0.4]], intervals=40).cost
    there = np.array([3.0, -2.0, 7.0])
    end = there + [1.0, 0.5, 0.4 + (3.0 * 0.5 + 2.0 * 1.0) / 2]
    assert solved([there], [end], intervals=40).cost == pytest.approx(base, rel=1e-7)
    assert solved([[0, 0, 0]], [[3.0, 1.5, 3.6]], intervals=40).cost == pytest.approx(9 * base, rel=1e-7)
    assert solved([[0, 0, 0]], [[1.0, 0.5, 0.4]], duration=4.0, intervals=40).cost == pytest.approx(base / 4, rel=1e-7)


def test_a_copy_without_an_end_follows():
    """u_1 = Psi_10 / Psi_00 u_0, cost J1 / Psi_00, as for any quadratic coupling."""
    found = solved([[0, 0, 0]] * 2, [[1, 0, 0.25], FREE], 2.0, intervals=40)
    alone = solved([[0, 0, 0]], [[1, 0, 0.25]], intervals=40)
    psi = np.linalg.inv(np.eye(2) + 2.0 * np.array([[1, -1], [-1, 1]]))
    np.testing.assert_allclose(found.controls[1], psi[1, 0] / psi[0, 0] * found.controls[0], atol=1e-6)
    assert found.cost == pytest.approx(alone.cost / psi[0, 0], rel=1e-8)
    assert found.cost == pytest.approx(found.effort + 2.0 * found.disagreement, rel=1e-9)


def test_steps_are_exact():
    """Against fine integration of x' = u, y' = v, z' = (x v - y u)/2."""
    random = np.random.default_rng(0)
    controls, start = random.normal(size=(1, 4, 2)), random.normal(size=(1, 3))
    place = start[0]
    for u, v in controls[0]:
        place = solve_ivp(lambda _t, q, u=u, v=v: [u, v, (q[0] * v - q[1] * u) / 2], (0, 0.5), place, rtol=1e-12,
                          atol=1e-12).y[:, -1]
    np.testing.assert_allclose(heisenberg.driven(start, controls, 2.0)[0, -1], place, atol=1e-10)


def test_nobody_has_an_end():
    assert solved([[0, 0, 0]] * 2, [FREE, FREE], 2.0, intervals=10).cost == pytest.approx(0, abs=1e-12)


def test_what_the_solver_leaves_undone_is_told():
    found = plan(attrs.evolve(posed([[0, 0, 0]], [[1, 0, 0.25]], intervals=2)))
    assert found.status in ("solved", "failed") and (found.status == "solved") == found.check.clean
