# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The driftless problem on the Heisenberg group: two controls a copy, coupled in both, without bounds.

x' = u, y' = v, z' = (x v - y u)/2; least sum of 1/2 integral of u'(I + chi L)u + v'(I + chi L)v. With controls constant
in each interval the steps are exact: z gains h (x v - y u)/2. (Brockett, in *New Directions in Applied Mathematics*,
1981; Montgomery, *A Tour of Subriemannian Geometries*, 2002; from memory.)

The problem looks the same from everywhere, and at every scale: it is solved from the origin, for ends about 1 away, in
unit time.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from functools import lru_cache
from typing import Any

import attrs
import casadi as ca
import numpy as np

from .. import ocp, optimality
from ..blocks import Blocks
from ..optimality import Check
from .evaluated import evaluated
from .problem import laplacian_of
from .program import Program
from .solution import OPTIONS, QUIET

PLACE = ("x", "y", "z")
_COARSE = 32  # intervals on which first guesses are compared
_GUESSES = 24
_FINER = 2  # of the best there that are solved on all intervals
_SLIGHT = 1e-3  # of the cost: a costate below it is hardly one
_SAME = 1e-5  # relative difference of cost below which two solutions count as one


def _rows(value: object) -> np.ndarray:
    return np.array(value, dtype=float, ndmin=2)


@attrs.frozen(eq=False)
class HeisenbergProblem:
    """N copies, M equal intervals; ``starts`` and ``ends`` (N, 3) hold x, y, z, NaN in ends: all three free."""

    names: tuple[str, ...]
    starts: np.ndarray = attrs.field(converter=_rows)
    ends: np.ndarray = attrs.field(converter=_rows)
    edges: np.ndarray
    weights: np.ndarray
    coupling: float
    duration: float
    intervals: int

    @property
    def moved(self) -> np.ndarray:
        """Ends seen from the starts, (N, 3): start^-1 end, with (a, b, c)(x, y, z) = (a + x, b + y, c + z +
        (a y - b x)/2).
        """
        moved = self.ends - self.starts
        moved[:, 2] -= (self.starts[:, 0] * self.ends[:, 1] - self.starts[:, 1] * self.ends[:, 0]) / 2
        return moved

    @property
    def size(self) -> float:
        """A length that is about as large as the longest path, by x, y and the area z; 1 where nothing moves."""
        moved = np.nan_to_num(self.moved)
        size = float((np.hypot(moved[:, 0], moved[:, 1]) + 2 * np.sqrt(np.pi * np.abs(moved[:, 2]))).max())
        return size if size > 0 else 1.0


@attrs.frozen(eq=False)
class HeisenbergPlan:
    """``status`` as for other plans; ``controls`` (N, M, 2), ``places`` (N, M + 1, 3) as driven with them; ``check``;
    ``energy_drift``, ``area_drift``: of the Hamiltonian and of the costates of z, relative; ``missed``: of the ends;
    ``reached``: distinct costs of the solutions on few intervals, ascending.
    """

    problem: HeisenbergProblem
    status: str
    reason: str
    controls: np.ndarray
    places: np.ndarray
    check: Check
    energy_drift: float
    area_drift: float
    missed: float
    tried: int
    converged: int
    reached: tuple[float, ...]

    @property
    def times(self) -> np.ndarray:
        """Nodes, shape (M + 1,), seconds."""
        return np.linspace(0.0, self.problem.duration, self.problem.intervals + 1)

    @property
    def effort(self) -> float:
        """1/2 integral of u'u + v'v."""
        return float(np.sum(self.controls**2)) * self.problem.duration / self.problem.intervals / 2

    @property
    def disagreement(self) -> float:
        """1/2 integral of u'Lu + v'Lv."""
        mixed = np.einsum("kj,jmc->kmc", laplacian_of(self.problem), self.controls)
        return float(np.sum(self.controls * mixed)) * self.problem.duration / self.problem.intervals / 2

    @property
    def cost(self) -> float:
        """What was minimised."""
        return self.effort + self.problem.coupling * self.disagreement


@attrs.frozen(eq=False)
class _Solved:
    controls: np.ndarray
    cost: float
    success: bool
    said: str
    vector: np.ndarray
    bounds: np.ndarray
    rows: np.ndarray


def plan(
    problem: HeisenbergProblem, *, seed: int = 0, progress: Callable[[float], None] = lambda _part: None
) -> HeisenbergPlan:
    """The best of several first guesses: circles that turn either way, arcs, and seeded random waves."""
    size = problem.size
    ends = problem.moved / np.array([size, size, size**2])
    few = min(problem.intervals, _COARSE)
    found = []
    for i, guess in enumerate(_guesses(ends, few, np.random.default_rng(seed))):
        found.append(_solve(problem, ends, guess))
        progress(0.8 * (i + 1) / _GUESSES)
    kept = _distinct(found)
    finer = _distinct([_solve(problem, ends, _on(solved.controls, problem.intervals)) for solved in kept[:_FINER]])
    best = finer[0] if finer else min(found, key=lambda solved: solved.cost)
    progress(1.0)
    return _judged(problem, ends, best, bool(finer), (len(found), sum(solved.success for solved in found)),
                   tuple(solved.cost for solved in kept))


def driven(starts: np.ndarray, controls: np.ndarray, duration: float) -> np.ndarray:
    """Places at the nodes, shape (N, M + 1, 3), from starts (N, 3) with controls (N, M, 2)."""
    h = duration / controls.shape[1]
    flat = np.cumsum(np.concatenate([starts[:, None, :2], h * controls], axis=1), axis=1)
    gained = h * (flat[:, :-1, 0] * controls[..., 1] - flat[:, :-1, 1] * controls[..., 0]) / 2
    area = np.cumsum(np.concatenate([starts[:, 2:], gained], axis=1), axis=1)
    return np.concatenate([flat, area[..., None]], axis=2)


def _judged(
    problem: HeisenbergProblem, ends: np.ndarray, best: _Solved, solved: bool, counts: tuple[int, int],
    reached: tuple[float, ...],
) -> HeisenbergPlan:
    shape = _shape(problem, best.controls.shape[1])
    check = optimality.check(evaluated(
        _build(*shape), _solver(*shape), _numbers(problem, ends), (best.vector, best.bounds, best.rows),
        _bounds(len(ends), shape[1]), _row_bounds(ends, shape[1])))
    size, duration = problem.size, problem.duration
    controls = best.controls * size / duration
    places = driven(problem.starts, controls, duration)
    asked = ~np.isnan(problem.ends)
    status, reason = "solved", ""
    if not (solved and check.clean):
        status, reason = "failed", f"the solver said {best.said!r}; {check.words}"
    weight = np.eye(len(ends)) + problem.coupling * laplacian_of(problem)
    energy = np.einsum("kmc,kj,jmc->m", controls, weight, controls) / 2
    area = _row_blocks(*shape[:2]).unpack(best.rows)["step_z"]
    return HeisenbergPlan(
        problem, status, reason, controls, places, check, _drift(energy[None], 0.0), _drift(area, _SLIGHT * best.cost),
        float(np.abs((places[:, -1] - problem.ends)[asked]).max(initial=0.0)), *counts,
        tuple(cost * size**2 / duration for cost in reached),
    )


def _drift(values: np.ndarray, least: float) -> float:
    """Largest range of a row (K, T), relative to the largest value, but at least to what is still something."""
    return float(np.ptp(values, axis=1).max() / max(np.abs(values).max(), least, 1e-12))


def _guesses(ends: np.ndarray, intervals: int, random: np.random.Generator) -> Iterator[np.ndarray]:
    """Controls (N, M, 2) in unit time: every copy on a circle of its area, alike or in any phase; waves beside it."""
    time = (np.arange(intervals) + 0.5) / intervals
    for i in range(_GUESSES):
        controls = np.zeros((len(ends), intervals), dtype=complex)
        common = random.uniform(0, 2 * np.pi)
        for k, (x, y, z) in enumerate(np.nan_to_num(ends)):
            phase = common if i % 2 == 0 else random.uniform(0, 2 * np.pi)
            controls[k] = complex(x, y) + 2 * math.sqrt(math.pi * abs(z)) * np.exp(
                1j * (phase + 2 * math.pi * math.copysign(1, z) * time))
        if i >= 2:
            size = np.abs(controls).mean() + 1
            for frequency in (1, -1, 2):
                waves = random.normal(size=(len(ends), 2)) * size / (2 if i < _GUESSES // 2 else 1)
                controls += (waves @ np.array([1, 1j]))[:, None] * np.exp(2j * np.pi * frequency * time)
        yield np.stack([controls.real, controls.imag], axis=2)


def _on(controls: np.ndarray, intervals: int) -> np.ndarray:
    """Controls on another number of intervals, linear between the middles of the intervals."""
    old, new = ((np.arange(count) + 0.5) / count for count in (controls.shape[1], intervals))
    return np.array([np.stack([np.interp(new, old, row) for row in copy.T], axis=1) for copy in controls])


def _distinct(found: list[_Solved]) -> list[_Solved]:
    kept: list[_Solved] = []
    for solved in sorted((each for each in found if each.success), key=lambda each: each.cost):
        if not kept or solved.cost > kept[-1].cost * (1 + _SAME) + 1e-12:
            kept.append(solved)
    return kept


# The program

Shape = tuple[int, int, tuple[tuple[int, int], ...]]


def _shape(problem: HeisenbergProblem, intervals: int) -> Shape:
    return len(problem.names), intervals, tuple(map(tuple, problem.edges.tolist()))


def _variable_blocks(n: int, m: int) -> Blocks:
    return Blocks({**dict.fromkeys(PLACE, (n, m + 1)), "u": (n, m), "v": (n, m)})


def _row_blocks(n: int, m: int) -> Blocks:
    return Blocks({**{f"step_{name}": (n, m) for name in PLACE}, "end": (n, 3)})


@lru_cache(maxsize=4)
def _build(n: int, m: int, edges: tuple[tuple[int, int], ...]) -> Program:
    variables, rows = _variable_blocks(n, m), _row_blocks(n, m)
    parameters = Blocks({"coupling": (len(edges), 1), "target": (n, 3)})
    x, v = variables.symbols()
    p_all, p = parameters.symbols()
    h: Any = ca.repmat(ca.SX(1 / m), 1, m)
    f = sum(ocp.turning_cost(v[name], p["coupling"], edges, h) for name in ("u", "v"))
    gained = {"x": v["u"], "y": v["v"], "z": (v["x"][:, :-1] * v["v"] - v["y"][:, :-1] * v["u"]) / 2}
    steps = {f"step_{name}": v[name][:, 1:] - v[name][:, :-1] - gained[name] / m for name in PLACE}
    g = rows.stack({**steps, "end": ca.horzcat(*[v[name][:, -1] for name in PLACE]) - p["target"]})
    return Program(variables, parameters, rows, x, p_all, f, g, PLACE, tuple(steps))


@lru_cache(maxsize=4)
def _solver(n: int, m: int, edges: tuple[tuple[int, int], ...]) -> ca.Function:
    built = _build(n, m, edges)
    settings: dict[str, Any] = {**QUIET, "ipopt": OPTIONS}
    return ca.nlpsol("solve", "ipopt", {"x": built.x, "p": built.p, "f": built.f, "g": built.g}, settings)


def _numbers(problem: HeisenbergProblem, ends: np.ndarray) -> np.ndarray:
    edges = len(problem.edges)
    return Blocks({"coupling": (edges, 1), "target": ends.shape}).pack(
        {"coupling": problem.coupling * problem.weights[:, None], "target": np.nan_to_num(ends)})


def _bounds(n: int, m: int) -> tuple[np.ndarray, np.ndarray]:
    layout = _variable_blocks(n, m)
    free = {name: np.full(shape, np.inf) for name, shape in layout.shapes.items()}
    for name in PLACE:
        free[name][:, 0] = 0.0
    return layout.pack({name: -values for name, values in free.items()}), layout.pack(free)


def _row_bounds(ends: np.ndarray, m: int) -> tuple[np.ndarray, np.ndarray]:
    layout = _row_blocks(len(ends), m)
    upper: dict[str, Any] = dict.fromkeys(layout.shapes, 0.0)
    upper["end"] = np.where(np.isnan(ends), np.inf, 0.0)
    return layout.pack({**upper, "end": -upper["end"]}), layout.pack(upper)


def _solve(problem: HeisenbergProblem, ends: np.ndarray, controls: np.ndarray) -> _Solved:
    n, m, edges = _shape(problem, controls.shape[1])
    layout = _variable_blocks(n, m)
    places = driven(np.zeros((n, 3)), controls, 1.0)
    start = {**{name: places[..., column] for column, name in enumerate(PLACE)},
             "u": controls[..., 0], "v": controls[..., 1]}
    lower, upper = _bounds(n, m)
    row_lower, row_upper = _row_bounds(ends, m)
    solver = _solver(n, m, edges)
    result = solver(x0=layout.pack(start), p=_numbers(problem, ends), lbx=lower, ubx=upper, lbg=row_lower,
                    ubg=row_upper)
    stats = solver.stats()
    vector, bounds, rows = (np.asarray(result[name]).ravel() for name in ("x", "lam_x", "lam_g"))
    named = layout.unpack(vector)
    finite = bool(np.isfinite(vector).all() and np.isfinite(rows).all())
    return _Solved(np.stack([named["u"], named["v"]], axis=2), float(result["f"]), bool(stats["success"]) and finite,
                   str(stats["return_status"]), vector, bounds, rows)

