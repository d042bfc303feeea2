# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A program at a point, evaluated anew: what the optimality check is given."""

from __future__ import annotations

from typing import Any

import casadi as ca
import numpy as np
from scipy import sparse

from ..blocks import Blocks
from ..optimality import Point
from .program import Program

Ends = tuple[np.ndarray, np.ndarray]


def evaluated(
    built: Program, solver: ca.Function, numbers: np.ndarray, solution: tuple[np.ndarray, np.ndarray, np.ndarray],
    bounds: Ends, row_bounds: Ends,
) -> Point:
    """The point of a solution: its vector, and the multipliers of bounds and rows.

    Args:
        solver: made from the same program; its derivatives are taken, not its word. numbers: of the parameters.
        bounds, row_bounds: lower and upper.
    """
    vector, bound_multipliers, row_multipliers = solution
    cost, gradient = solver.get_function("nlp_grad_f")(vector, numbers)
    rows, jacobian = solver.get_function("nlp_jac_g")(vector, numbers)
    upper: Any = sparse.csr_matrix(solver.get_function("nlp_hess_l")(vector, numbers, 1.0, row_multipliers).sparse())
    return Point(
        cost=float(cost), vector=vector, rows=np.asarray(rows).ravel(), gradient=np.asarray(gradient).ravel(),
        jacobian=sparse.csr_matrix(jacobian.sparse()), hessian=upper + sparse.triu(upper, 1).T.tocsr(),
        lower=bounds[0], upper=bounds[1], row_lower=row_bounds[0], row_upper=row_bounds[1],
        bound_multipliers=bound_multipliers, row_multipliers=row_multipliers,
        states=_places(built.variables, built.states, first=True), dynamics=_places(built.rows, built.dynamics),
    )


def _places(layout: Blocks, names: tuple[str, ...], first: bool = False) -> np.ndarray:
    """Positions of blocks in their vector; without their ``first`` columns, the given initial state, when asked."""
    every = np.arange(layout.size)
    return np.concatenate([every[layout.slices[name]][layout.shapes[name][0] * first:] for name in names])
