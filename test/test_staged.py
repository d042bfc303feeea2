# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The program put together from one interval is the program of ocp.py, with all its derivatives."""

import casadi as ca
import numpy as np
import pytest

from coord_planner.core import ocp
from coord_planner.core.problem import STATES, Shape
from coord_planner.core.staged import staged

LINE = ((0, 1), (1, 2))
SHAPES = {
    "fences and pairs": Shape(3, 5, LINE, ((0, 1), (0, 2)), (1,)),
    "as many intervals as states": Shape(2, len(STATES), ((0, 1),), ((0, 1),), ()),
    "one interval": Shape(2, 1, ((0, 1),), ((0, 1),), (0, 1)),
    "compared at moments that lie apart": Shape(3, 7, LINE, (), (), ((0, 1, 2, 3), (0, 2, 1, 3), (1, 0, 0, 3))),
    "alone": Shape(1, 4, (), (), ()),
}


@pytest.mark.parametrize("shape", SHAPES.values(), ids=SHAPES)
def test_values_and_derivatives_are_those_of_the_whole_expression(shape):
    whole, parts = ocp.build(shape), staged(shape)
    lam_f, lam_g = ca.SX.sym("lam_f"), ca.SX.sym("lam_g", whole.g.shape[0])
    lagrangian = lam_f * whole.f + ca.dot(lam_g, whole.g)
    expected = ca.Function("expected", [whole.x, whole.p, lam_f, lam_g], [
        whole.f, whole.g, ca.gradient(whole.f, whole.x), ca.jacobian(whole.g, whole.x),
        ca.triu(ca.hessian(lagrangian, whole.x)[0]),
    ])
    rng = np.random.default_rng(1)
    x, p = rng.normal(size=whole.x.shape[0]), rng.uniform(0.2, 1.5, whole.p.shape[0])
    multipliers = rng.normal(size=whole.g.shape[0])
    found = [
        *parts.program(x, p), parts.gradient(x, p)[1], parts.jacobian(x, p)[1], parts.hessian(x, p, 0.7, multipliers)
    ]
    for one, other in zip(found, expected(x, p, 0.7, multipliers)):
        assert one.shape == other.shape
        assert np.array(ca.DM(one)) == pytest.approx(np.array(ca.DM(other)), rel=1e-9, abs=1e-9)
    assert found[3].nnz() == ca.jacobian(whole.g, whole.x).nnz()  # no entry is there that is always 0
