# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Program -> plan: solves in a problem's own units, with separating lines from the plan itself."""

from __future__ import annotations

from functools import lru_cache
from typing import Any, Optional

import attrs
import casadi as ca
import numpy as np

from .. import se2
from ..rectangles import separating_normals
from ..theory.search import resampled
from . import program as programs
from .problem import DirectProblem
from .program import DirectShape, Lines, Program

QUIET = {"print_time": False, "calc_lam_p": False, "error_on_fail": False, "record_time": True}
OPTIONS = {
    "print_level": 0, "sb": "yes", "tol": 1e-10, "constr_viol_tol": 1e-10, "compl_inf_tol": 1e-10,
    "dual_inf_tol": 1e-4, "acceptable_tol": 1e-8, "acceptable_iter": 8, "bound_relax_factor": 1e-11,
    "mu_strategy": "adaptive", "fixed_variable_treatment": "make_parameter", "max_iter": 250,
}
_STANDING = 1e-9  # ways' lengths per duration: keeps the sign of a gear where a robot stands
_ROUNDS = 12  # of taking separating lines and gaps from the plan
_SETTLED = 1e-9  # of the way's length: a change of what is asked that no longer counts


@attrs.frozen(eq=False)
class Guess:
    """A first guess, in the problem's own units: curvature and speed in each interval, shape (N, M) each.

    Where robots may reverse: ``counts`` of intervals between changes of gear, and the parts of the time, ``spans``,
    that they take; the signs of the speeds are the gears. Else the intervals are equal.
    """

    curvature: np.ndarray
    speed: np.ndarray
    counts: tuple[int, ...] = ()
    spans: np.ndarray = attrs.field(factory=lambda: np.ones(0))

    @property
    def intervals(self) -> np.ndarray:
        """Lengths of the intervals, shape (M,); they sum to 1."""
        if not self.counts:
            return np.full(self.speed.shape[1], 1.0 / self.speed.shape[1])
        return np.repeat(self.spans / np.array(self.counts), self.counts)

    @property
    def gears(self) -> np.ndarray:
        """1 forward, -1 backward, shape (N, M)."""
        return np.where(self.speed < 0, -1.0, 1.0)

    def on(self, intervals: int) -> Guess:
        """The same on another number of intervals."""
        if not self.counts:
            return Guess(resampled(self.curvature, intervals), resampled(self.speed, intervals))
        counts = shared_out(np.array(self.counts, dtype=float), intervals)
        ends = np.cumsum((0, *self.counts))
        pieces = [[resampled(values[:, a:b], count) for a, b, count in zip(ends, ends[1:], counts)]
                  for values in (self.curvature, self.speed)]
        curvature, speed = (np.concatenate(piece, axis=1) for piece in pieces)
        return Guess(curvature, speed, counts, self.spans)


@attrs.frozen(eq=False)
class Solved:
    """What the solver returned for a problem in its own units; whether it holds is for others to find out.

    ``gears`` (N, M) are those that were prescribed. ``vector``, ``bounds`` and ``rows`` are the primal vector and the
    multipliers of bounds and rows, with the sign that makes the Lagrangian f + rows . g + bounds . x.
    """

    problem: DirectProblem
    shape: DirectShape
    lines: Lines
    gears: np.ndarray
    vector: np.ndarray
    bounds: np.ndarray
    rows: np.ndarray
    cost: float
    success: bool
    said: str
    iterations: int

    @property
    def named(self) -> dict[str, np.ndarray]:
        """Variables by name."""
        return programs.variable_blocks(self.shape).unpack(self.vector)

    @property
    def row_multipliers(self) -> dict[str, np.ndarray]:
        """Multipliers of the rows by name."""
        return programs.row_blocks(self.shape).unpack(self.rows)

    @property
    def bound_multipliers(self) -> dict[str, np.ndarray]:
        """Multipliers of the bounds by name."""
        return programs.variable_blocks(self.shape).unpack(self.bounds)

    @property
    def curvature(self) -> np.ndarray:
        """Shape (N, M)."""
        return self.named["curvature"]

    @property
    def speed(self) -> np.ndarray:
        """Shape (N, M)."""
        named = self.named
        return named["speed"] if "speed" in named else np.full_like(named["curvature"], self.problem.speeds.asked)

    @property
    def guess(self) -> Guess:
        """Where another solve may start."""
        spans = self.named["span"][0] if self.shape.phases else np.ones(0)
        return Guess(self.curvature, self.gears * np.maximum(self.gears * self.speed, _STANDING), self.shape.phases,
                     spans)

    @property
    def intervals(self) -> np.ndarray:
        """Lengths of the intervals, shape (M,); they sum to 1."""
        return Guess(self.curvature, self.speed, self.guess.counts, self.guess.spans).intervals

    @property
    def poses(self) -> np.ndarray:
        """Poses driven with these controls, by own arcs rather than the solver's states, shape (N, M + 1, 3)."""
        return driven(self.problem, attrs.evolve(self.guess, speed=self.speed))


def driven(problem: DirectProblem, guess: Guess) -> np.ndarray:
    """Poses along the arcs, shape (N, M + 1, 3)."""
    distance = guess.speed * guess.intervals
    return se2.rollout(problem.starts, distance, distance * guess.curvature)


def shared_out(shares: np.ndarray, whole: int) -> tuple[int, ...]:
    """A number of intervals in parts that are near the shares, at least one each."""
    ends = np.round(np.cumsum(shares) / shares.sum() * whole).astype(int)
    for i in range(len(ends)):
        ends[i] = min(max(ends[i], ends[i - 1] + 1 if i else 1), whole - (len(ends) - 1 - i))
    return tuple(int(count) for count in np.diff(ends, prepend=0))


@lru_cache(maxsize=16)
def solver_of(shape: DirectShape) -> ca.Function:
    """The compiled solver of a shape, and with it the functions of its program."""
    built = programs.build(shape)
    nlp = {"x": built.x, "p": built.p, "f": built.f, "g": built.g}
    settings: dict[str, Any] = {**QUIET, "ipopt": OPTIONS}
    return ca.nlpsol("solve", "ipopt", nlp, settings)


def solve(problem: DirectProblem, guess: Guess, *, soft: bool = False, lines: Optional[Lines] = None) -> Solved:
    """Solve a problem in its own units from a guess; where clearances count, until their lines and gaps stay.

    Args:
        soft: minimise what is missed of ends and clearances instead of the cost.
        lines: to take as they are; from the guess, and then from the plan itself, when left out.
    """
    shape = DirectShape.of(problem, guess.counts, soft)
    if lines is not None:
        return _once(problem, shape, lines, guess)
    lines = lines_of(problem, driven(problem, guess))
    solved = _once(problem, shape, lines, guess)
    for _ in range(_ROUNDS if len(shape.pairs) else 0):
        if not solved.success:
            break
        again = lines_of(problem, solved.poses)
        change = max(np.abs(again.gaps - lines.gaps).max(),
                     0.0 if shape.points else np.abs(again.normals - lines.normals).max())
        if change < _SETTLED:
            break
        lines = again
        solved = _once(problem, shape, lines, solved.guess)
    return solved


def _once(problem: DirectProblem, shape: DirectShape, lines: Lines, guess: Guess) -> Solved:
    solver = solver_of(shape)
    gears = guess.gears
    lower, upper = programs.variable_bounds(problem, shape, gears)
    row_lower, row_upper = programs.row_bounds(problem, shape)
    result = solver(x0=_start(problem, shape, guess), p=programs.numbers(problem, lines, gears), lbx=lower, ubx=upper,
                    lbg=row_lower, ubg=row_upper)
    stats = solver.stats()
    vector, bounds, rows = (np.asarray(result[name]).ravel() for name in ("x", "lam_x", "lam_g"))
    finite = bool(np.isfinite(vector).all() and np.isfinite(rows).all())
    return Solved(problem, shape, lines, gears, vector, bounds, rows, float(result["f"]),
                  bool(stats["success"]) and finite, str(stats["return_status"]), int(stats["iter_count"]))


def _start(problem: DirectProblem, shape: DirectShape, guess: Guess) -> np.ndarray:
    poses = driven(problem, guess)
    values: dict[str, Any] = {name: poses[..., column] for column, name in enumerate(programs.POSE)}
    values |= {"curvature": guess.curvature, "speed": guess.speed, "short": 0.0, "span": guess.spans}
    missed = np.nan_to_num(poses[:, -1] - problem.ends)
    values |= {"over": np.maximum(missed, 0.0), "under": np.maximum(-missed, 0.0)}
    return programs.variable_blocks(shape).pack(values)


def lines_of(problem: DirectProblem, poses: np.ndarray) -> Lines:
    """Separating lines at nodes 1 .. M and the gaps to keep, from poses (N, M + 1, 3).

    Between two nodes a pair that moves relatively by d comes nearer than at the nodes by at most d^2 / (8 gap).
    """
    pairs, nodes = problem.pairs, poses.shape[1] - 1
    if not len(pairs):
        return Lines(np.zeros((0, nodes, 2)), np.zeros((0, nodes)))
    normals = separating_normals(problem.corners, poses[:, 1:], pairs)
    apart = poses[pairs[:, 1], :, :2] - poses[pairs[:, 0], :, :2]
    moved = np.linalg.norm(np.diff(apart, axis=1), axis=2)
    least = problem.min_clearance
    return Lines(normals, least + moved**2 / (8 * least))


def program_of(solved: Solved) -> Program:
    """The program that a solution belongs to."""
    return programs.build(solved.shape)
