# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How fast ticks are, beside a general solver on the same problems, and how near their cost is to the converged one."""

from __future__ import annotations

import functools
import multiprocessing
import resource
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import attrs
import casadi as ca
import numpy as np

from ..core import ocp, solver
from ..core.fast.solver import TickSolver
from ..core.plan import Plan
from ..core.problem import STATES, Problem, Shape
from ..core.settings import Horizon
from .bench_set import FORMATIONS, GRAPHS, INTERVALS, Course, Posed, driven

TICKS = 40  # ticks of a row that are also solved by the general solver
ROBOTS = (1, 2, 4, 6, 12, 24, 48, 64)
_PLAIN = {"print_level": 0, "sb": "yes", "tol": 1e-6}
_QUIET: dict[str, Any] = {"print_time": False, "calc_lam_p": False, "error_on_fail": False}
_BUDGET = Horizon().budget  # seconds
_REST = 0.1  # of the time that a tick and all beside it takes
_MEMORY_TICKS = 10  # of the process whose memory is measured

Progress = Callable[[float], None]  # told the part of a row that is done


@attrs.frozen
class Row:
    """Figures of one case and fleet size. Times in milliseconds; gaps are parts of the converged cost.

    Attributes:
        tick_ms_median, tick_ms_p99: preparing and feeding back. feedback_ms_median: from measured poses to the plan.
        plain_ms_median: the same problems by IPOPT with default options, tolerance 1e-6, from the last plan.
        tuned_ms_median: by IPOPT started with the last plan's multipliers and a small barrier.
        ratio, ratio_tuned: medians of plain and of tuned over the tick's.
        cost_gap_p95, cost_gap_max: cost above the converged one, of controls rolled out, with exact penalties.
        violation_max: of any limit or row, in its own unit. peak_rss_mb: of a process that only runs ticks.
        ticks, compared: ticks timed, and how many of them were solved by the general solver, too.
    """

    case: str
    robots: int
    intervals: int
    tick_ms_median: float
    tick_ms_p99: float
    feedback_ms_median: float
    plain_ms_median: float
    tuned_ms_median: float
    ratio: float
    ratio_tuned: float
    cost_gap_p95: float
    cost_gap_max: float
    violation_max: float
    peak_rss_mb: float
    ticks: int
    compared: int


@attrs.define
class _Measured:
    """What the ticks of a row add up to: seconds, gaps, violations."""

    tick: list[float] = attrs.Factory(list)
    feedback: list[float] = attrs.Factory(list)
    compared: list[tuple[float, float, float]] = attrs.Factory(list)  # tick, plain, tuned
    gap: list[float] = attrs.Factory(list)
    violation: list[float] = attrs.Factory(list)


def measure(case: str, robots: int, ticks: int = TICKS, progress: Progress = lambda _part: None) -> Row:
    """A row: the four courses of a case, each driven from end to end by the tick solver.

    Args:
        ticks: how many of them, evenly spread, are solved by the general solver as well, right beside.
    """
    found = _Measured()
    variants = [(form, graph) for form in FORMATIONS for graph in GRAPHS]
    for i, (formation, graph) in enumerate(variants):
        course = Course(case, robots, formation, graph, seed=i)
        for j, part in enumerate(_drive(course, ticks / len(variants), found)):
            if j % 5 == 0:
                progress((i + part) / len(variants))
    return _row(case, robots, found)


def peak_memory(case: str, robots: int) -> float:
    """Peak resident memory in MB of a fresh process that only runs ticks."""
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        return pool.apply(_ticks_alone, (case, robots))


def growth(rows: list[Row], case: str, first: int = 4, last: int = 64) -> float | None:
    """Exponent with which the tick's median grows from one fleet size to another; None where one is missing."""
    medians = {row.robots: row.tick_ms_median for row in rows if row.case == case}
    if first not in medians or last not in medians:
        return None
    return float(np.log(medians[last] / medians[first]) / np.log(last / first))


def exact_cost(problem: Problem, rates: np.ndarray) -> float:
    """Cost of controls: rolled out from the initial state step by step, every shortfall at its full price.

    Args:
        rates: curvature rate and acceleration in the intervals, shape (N, M, 2).
    """
    states = _rolled_out(problem, rates)
    missed = np.nan_to_num(states[:, -1] - problem.target)
    variables, rows = ocp.variable_blocks(problem.shape), ocp.row_blocks(problem.shape)
    named: dict[str, Any] = {
        **dict.fromkeys(variables.shapes, 0.0), **{name: states[:, :, i] for i, name in enumerate(STATES)},
        "curvature_rate": rates[:, :, 0], "acceleration": rates[:, :, 1],
        "over": np.maximum(missed, 0.0), "under": np.maximum(-missed, 0.0),
    }
    evaluated, numbers = _evaluated(problem.shape), ocp.numbers(problem)
    lacking = rows.unpack(np.asarray(evaluated(variables.pack(named), numbers)[1]).ravel())
    named["short"], named["outside"] = np.maximum(-lacking["clearance"], 0.0), np.maximum(-lacking["fence"], 0.0)
    return float(evaluated(variables.pack(named), numbers)[0])


def _drive(course: Course, compared: float, found: _Measured) -> Iterator[float]:
    """Drive a course to its end; yields the part of it that is done."""
    fast = TickSolver()
    count = max(round(compared), 1)
    picked = set(((np.arange(count) + 0.5) * course.ticks / count).astype(int).tolist())
    for done in range(course.ticks):
        began = time.perf_counter()
        posed = course.pose()
        plan, tick, feedback = _tick(fast, posed)
        found.tick.append(tick)
        found.feedback.append(feedback)
        if done in picked:
            _compare(posed, plan, tick, found)
        course.drive(posed, plan)
        time.sleep(_REST * (time.perf_counter() - began))  # as a planner does: who never rests is held up now and then
        yield (done + 1) / course.ticks


def _tick(fast: TickSolver, posed: Posed) -> tuple[Plan, float, float]:
    """The plan within the shipped budget, and seconds: prepare and feed back; feed back alone."""
    began = time.perf_counter()
    fast.prepare(posed.predicted, posed.start)
    ready = time.perf_counter()
    plan = fast.feedback(posed.problem.initial, _BUDGET - (ready - began), time.perf_counter)
    ended = time.perf_counter()
    return plan, ended - began, ended - ready


def _compare(posed: Posed, plan: Plan, tick: float, found: _Measured) -> None:
    """Solve the same problem plainly and tuned."""
    problem = posed.problem
    rates, plain = _plain(posed)
    began = time.perf_counter()
    solver.solve(problem, posed.start, warm=posed.start.multipliers is not None)
    tuned = time.perf_counter() - began
    converged = exact_cost(problem, rates)
    found.compared.append((tick, plain, tuned))
    found.gap.append((exact_cost(problem, plan.rates) - converged) / converged)
    found.violation.append(ocp.violation(problem, plan.vector))


def _plain(posed: Posed) -> tuple[np.ndarray, float]:
    """Rates of the converged solution, shape (N, M, 2), and seconds."""
    problem, layout = posed.problem, ocp.variable_blocks(posed.problem.shape)
    solve = _plain_solver(problem.shape)
    began = time.perf_counter()
    lower, upper = ocp.variable_bounds(problem)
    row_lower, row_upper = ocp.row_bounds(problem)
    result = solve(x0=posed.start.vector, p=ocp.numbers(problem), lbx=lower, ubx=upper, lbg=row_lower, ubg=row_upper)
    took = time.perf_counter() - began
    found = layout.unpack(np.asarray(result["x"]).ravel())
    return np.stack([found["curvature_rate"], found["acceleration"]], axis=2), took


@functools.lru_cache(maxsize=2)
def _plain_solver(shape: Shape) -> ca.Function:
    program = ocp.build(shape)
    nlp = {"x": program.x, "p": program.p, "f": program.f, "g": program.g}
    options: dict[str, Any] = {**_QUIET, "ipopt": _PLAIN}
    return ca.nlpsol("plain", "ipopt", nlp, options)


@functools.lru_cache(maxsize=2)
def _evaluated(shape: Shape) -> ca.Function:
    program = ocp.build(shape)
    return ca.Function("evaluated", [program.x, program.p], [program.f, program.g])


def _rolled_out(problem: Problem, rates: np.ndarray) -> np.ndarray:
    """States at the nodes, shape (N, M + 1, 7), one interval after the other."""
    states = [problem.initial]
    for i, h in enumerate(problem.intervals):
        states.append(driven(problem.fleet, states[-1], rates[:, i], float(h)))
    return np.stack(states, axis=1)


def _ticks_alone(case: str, robots: int) -> float:
    course, fast = Course(case, robots, FORMATIONS[0], GRAPHS[-1], seed=0), TickSolver()
    for _ in range(_MEMORY_TICKS):
        posed = course.pose()
        course.drive(posed, _tick(fast, posed)[0])
    status = Path("/proc/self/status")
    if status.exists():  # the other figure counts what the parent held before this process began
        kilobytes = [line.split()[1] for line in status.read_text(encoding="ascii").splitlines() if "VmHWM" in line]
        return float(kilobytes[0]) / 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def _row(case: str, robots: int, found: _Measured) -> Row:
    tick, feedback = 1e3 * np.array(found.tick), 1e3 * np.array(found.feedback)
    fast, plain, tuned = 1e3 * np.array(found.compared).T
    return Row(
        case=case, robots=robots, intervals=INTERVALS,
        tick_ms_median=float(np.median(tick)), tick_ms_p99=float(np.percentile(tick, 99)),
        feedback_ms_median=float(np.median(feedback)), plain_ms_median=float(np.median(plain)),
        tuned_ms_median=float(np.median(tuned)), ratio=float(np.median(plain) / np.median(tick)),
        ratio_tuned=float(np.median(tuned) / np.median(tick)), cost_gap_p95=float(np.percentile(found.gap, 95)),
        cost_gap_max=float(np.max(found.gap)), violation_max=float(np.max(found.violation)),
        peak_rss_mb=peak_memory(case, robots), ticks=len(found.tick), compared=len(found.compared),
    )
