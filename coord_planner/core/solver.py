# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""NLP -> Plan with CasADi's interior-point interface: first solves from a guess, later ones from the last plan."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Optional

import attrs
import casadi as ca
import numpy as np

from ..errors import SolveError
from . import ocp
from .blocks import Blocks
from .plan import Plan, from_solution
from .problem import STATES, Problem, Shape
from .staged import staged

_ENDS = ("over", "under", "end")  # blocks of the last node alone: they do not shift
_QUIET = {"print_time": False, "record_time": True, "calc_lam_p": False, "error_on_fail": False}
_COLD = {"tol": 1e-8, "mu_strategy": "adaptive", "max_iter": 500}
# From tick to tick a few iterations suffice: what one leaves over the next one takes up (measured: with five as with
# sixty the driven turn is the same to a millimetre of clearance), and none takes much longer than the others.
_WARM = {
    "tol": 1e-5, "constr_viol_tol": 1e-6, "warm_start_init_point": "yes", "mu_init": 1e-4, "max_iter": 10,
    "warm_start_bound_push": 1e-6, "warm_start_mult_bound_push": 1e-6, "warm_start_slack_bound_push": 1e-6,
    "warm_start_bound_frac": 1e-6, "warm_start_slack_bound_frac": 1e-6, "mu_strategy": "monotone",
}


# From a solution of nearly the same problem, to the end.
_NEAR = {
    **_COLD, "warm_start_init_point": "yes", "mu_init": 1e-6, "mu_strategy": "monotone",
    **{name: 1e-7 for name in _WARM if name.startswith("warm_start_") and name != "warm_start_init_point"},
}
_OPTIONS = {"cold": _COLD, "tick": _WARM, "near": _NEAR}


@attrs.frozen(eq=False)
class Start:
    """Where a solve starts: primal vector and, when known, the multipliers of bounds and rows."""

    vector: np.ndarray
    multipliers: Optional[tuple[np.ndarray, np.ndarray]] = None


@lru_cache(maxsize=8)
def _solver(shape: Shape, kind: str, budget: float) -> ca.Function:
    parts = staged(shape)
    options: dict[str, Any] = dict(_OPTIONS[kind])
    options.update({"print_level": 0, "sb": "yes", "max_wall_time": budget})
    options["fixed_variable_treatment"] = "make_parameter"
    derivatives = {"grad_f": parts.gradient, "jac_g": parts.jacobian, "hess_lag": parts.hessian, "no_nlp_grad": True}
    settings: dict[str, Any] = {**_QUIET, **derivatives, "ipopt": options}
    return ca.nlpsol("solve", "ipopt", parts.program, settings)


def solve(problem: Problem, start: Start, warm: bool = False, budget: float = 60.0) -> Plan:
    """Solve a problem.

    Args:
        start: first guess.
        warm: start from the guess's multipliers with a small barrier, for a problem little different from the last.
        budget: seconds that the solver may take; the best point so far is returned, marked as not solved.

    Raises:
        SolveError: the solver returned numbers that are not finite.
    """
    return _solved(problem, start, "tick" if warm else "cold", budget)


def finish(problem: Problem, near: Plan) -> Plan:
    """Go on from a plan with multipliers of nearly the same problem until it has converged.

    Where that leads nowhere the problem is solved from the plan without its multipliers.

    Raises:
        SolveError: the solver returned numbers that are not finite.
    """
    plan = _solved(problem, Start(near.vector, near.multipliers), "near", 60.0)
    return plan if plan.solved else solve(problem, Start(near.vector))


def _solved(problem: Problem, start: Start, kind: str, budget: float) -> Plan:
    lower, upper = ocp.variable_bounds(problem)
    row_lower, row_upper = ocp.row_bounds(problem)
    arguments = {
        "x0": start.vector, "p": ocp.numbers(problem), "lbx": lower, "ubx": upper, "lbg": row_lower, "ubg": row_upper,
    }
    if start.multipliers is not None:
        arguments["lam_x0"], arguments["lam_g0"] = start.multipliers
    solver = _solver(problem.shape, kind, budget)
    result = solver(**arguments)
    stats = solver.stats()
    vector = np.asarray(result["x"]).ravel()
    if not np.all(np.isfinite(vector)):
        raise SolveError("the solver returned numbers that are not finite")
    return from_solution(
        problem, ocp.variable_blocks(problem.shape).unpack(vector), cost=float(result["f"]),
        solved=bool(stats["success"]), solve_time=float(stats["t_wall_total"]), iterations=int(stats["iter_count"]),
        vector=vector,
        multipliers=(np.asarray(result["lam_x"]).ravel(), np.asarray(result["lam_g"]).ravel()),
    )


def start_from_states(problem: Problem, states: np.ndarray) -> Start:
    """First guess from guessed states, shape (N, M + 1, 7); rates and slacks follow from them."""
    h = problem.intervals[None, :]
    named = {name: states[:, :, i] for i, name in enumerate(STATES)}
    missed = np.nan_to_num(states[:, -1] - problem.target)
    named["curvature_rate"] = np.diff(named["curvature_command"], axis=1) / h
    named["acceleration"] = np.diff(named["speed_command"], axis=1) / h
    named["short"] = np.zeros((len(problem.watch.pairs), len(problem.times) - 1))
    named["outside"] = np.zeros((len(problem.fences.robots), len(problem.times) - 1))
    named["over"], named["under"] = np.maximum(missed, 0.0), np.maximum(-missed, 0.0)
    compared = np.diff(named["theta"], axis=1) / h / problem.turn_speed
    named["compared"] = compared if problem.shape.compared else np.zeros((0, len(problem.times) - 1))
    return Start(ocp.variable_blocks(problem.shape).pack(named))


def start_from_plan(plan: Plan, shape: Shape, steps: int) -> Start:
    """The last plan and its multipliers, shifted by whole intervals; the last column is repeated."""
    bounds, rows = plan.multipliers
    variables, of_rows = _shifted_places(shape, steps)
    return Start(plan.vector[variables], (bounds[variables], rows[of_rows]))


@lru_cache(maxsize=64)
def _shifted_places(shape: Shape, steps: int) -> tuple[np.ndarray, np.ndarray]:
    """Where the entries of vectors of variables and of rows come from when they are shifted."""
    return _places(ocp.variable_blocks(shape), steps), _places(ocp.row_blocks(shape), steps)


def _places(layout: Blocks, steps: int) -> np.ndarray:
    blocks = layout.unpack(np.arange(layout.size))
    for name, block in blocks.items():
        if name not in _ENDS and steps:
            blocks[name] = np.concatenate([block[:, steps:], np.repeat(block[:, -1:], steps, axis=1)], axis=1)
    return layout.pack(blocks).astype(int)
