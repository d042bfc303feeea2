# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem -> NLP: one small function for each term of the cost and each limit.

Expressions are CasADi matrices of N robots by M intervals (or M + 1 nodes); every term works on whole
matrices. The built program depends only on the shape of the problem; poses, prices, limits and
coupling are numbers handed to it.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import attrs
import casadi as ca
import numpy as np

from . import se2
from .blocks import Blocks
from .problem import STATES, Problem, Shape

Matrix = Any  # a CasADi SX matrix
Named = dict[str, Matrix]

# abs() of a direction's cosine is rounded off over this width, to the safe side: the shadow of a
# footprint grows by at most this part of its half length, where it stands square to the line.
_ROUNDING = 0.02


@attrs.frozen(eq=False)
class Program:
    """A nonlinear program and the layouts of its vectors."""

    shape: Shape
    variables: Blocks
    parameters: Blocks
    rows: Blocks
    x: Matrix
    p: Matrix
    f: Matrix
    g: Matrix


@lru_cache(maxsize=64)
def variable_blocks(shape: Shape) -> Blocks:
    """Node states, then rates in the intervals, then slacks."""
    n, m = shape.robots, shape.intervals
    states = dict.fromkeys(STATES, (n, m + 1))
    rates = {"curvature_rate": (n, m), "acceleration": (n, m)}
    missed = {"over": (n, len(STATES)), "under": (n, len(STATES))}
    slacks = {"short": (len(shape.pairs), m), "outside": (len(shape.fenced), m), **missed}
    return Blocks({**states, **rates, **slacks, "compared": (n if shape.compared else 0, m)})


@lru_cache(maxsize=64)
def parameter_blocks(shape: Shape) -> Blocks:
    """All numbers that a built program is given."""
    n, m, e, p, f = shape.robots, shape.intervals, len(shape.edges), len(shape.pairs), len(shape.fenced)
    r, w = (len(shape.compared), shape.compared[0][3]) if shape.compared else (0, 0)
    return Blocks({
        "h": (1, m), "cost_h": (1, m), "asked_speed": (n, m), "full_speed": (n, 1), "turn_speed": (n, m),
        "coupling": (e, 1), "alignment": (e, 1),
        "price_curvature_rate": (1, 1), "price_acceleration": (1, 1), "price_speed": (1, 1),
        "price_clearance": (1, 1), "price_end": (n, len(STATES)),
        "curvature_lag": (n, 1), "speed_lag": (n, 1), "target": (n, len(STATES)),
        "normal_x": (p, m), "normal_y": (p, m), "gap": (p, m),
        "fence_x": (f, m), "fence_y": (f, m), "fence_reach": (f, m),
        "half_length": (n, 1), "half_width": (n, 1), "offset_x": (n, 1), "offset_y": (n, 1),
        "compare_first": (r, w), "compare_second": (r, w), "compare_known": (r, 1), "compare_seconds": (r, 1),
    })


@lru_cache(maxsize=64)
def row_blocks(shape: Shape) -> Blocks:
    """Constraint rows: the motion (equal to 0), limits of products, clearances, fences, ends."""
    n, m = shape.robots, shape.intervals
    motion = {f"step_{name}": (n, m) for name in STATES}
    return Blocks({
        **motion, "turn_rate": (n, m), "lateral": (n, m), "clearance": (len(shape.pairs), m),
        "fence": (len(shape.fenced), m), "end": (n, len(STATES)), "compared": (n if shape.compared else 0, m),
    })


def mean_over_interval(command: Matrix, reached: Matrix, lag: Matrix, h: Matrix) -> Matrix:
    """Mean of what a first-order machine reaches while its command runs straight from node to node. Exact.

    From lag * reached' = command - reached: the mean of reached is that of the command, less
    lag * (change of reached) / h.
    """
    m = h.shape[1]
    return (command[:, :-1] + command[:, 1:]) / 2 - ca.repmat(lag, 1, m) * _change(reached) / _rows(h, command)


def lag_residual(command: Matrix, reached: Matrix, rate: Matrix, lag: Matrix, h: Matrix) -> Matrix:
    """What is reached at the next node, less the exact answer to a ramp of the command.

    reached(h) = command(h) - rate lag + (reached(0) - command(0) + rate lag) exp(-h / lag).
    """
    m = h.shape[1]
    lags: Matrix = ca.repmat(lag, 1, m)
    steps = _rows(h, command)
    decay = ca.if_else(lags > 0, ca.exp(-steps / ca.fmax(lags, 1e-6)), 0.0)
    settled = command[:, 1:] - rate * lags
    return reached[:, 1:] - settled - (reached[:, :-1] - command[:, :-1] + rate * lags) * decay


def turning_cost(turning: Matrix, weights: Matrix, edges: tuple[tuple[int, int], ...], h: Matrix) -> Matrix:
    """1/2 integral u'(I + chi L)u, the coupling times the weight of each edge in ``weights``."""
    own = ca.sum1(turning**2)
    for (k, j), weight in zip(edges, ca.vertsplit(weights) if edges else []):
        own = own + weight * (turning[k, :] - turning[j, :]) ** 2
    return ca.dot(own, h) / 2


def comparison_cost(v: Named, p: Named, shape: Shape) -> Matrix:
    """1/2 coupling times the squares of the differences that stand in the place of those at equal moments."""
    total: Matrix = ca.SX(0)
    for r, (e, first, second, width) in enumerate(shape.compared or ()):
        k, j = shape.edges[e]
        difference = ca.dot(p["compare_first"][r, :], v["compared"][k, first : first + width])
        difference -= ca.dot(p["compare_second"][r, :], v["compared"][j, second : second + width])
        total += p["coupling"][e] * p["compare_seconds"][r] * (difference + p["compare_known"][r]) ** 2
    return total / 2


def alignment_cost(theta: Matrix, weights: Matrix, edges: tuple[tuple[int, int], ...], h: Matrix) -> Matrix:
    """Integral of weight * 2 sin^2 of half the heading difference, over the edges."""
    total: Matrix = ca.SX(0)
    for (k, j), weight in zip(edges, ca.vertsplit(weights) if edges else []):
        half = (theta[k, 1:] - theta[j, 1:]) / 2
        total = total + weight * ca.dot(2 * ca.sin(half) ** 2, h)
    return total


def shadow(theta: Matrix, half_length: Matrix, half_width: Matrix, normal_x: Matrix, normal_y: Matrix) -> Matrix:
    """Half the width of a rectangle's shadow on a line, rounded off to the safe side."""
    s, c = ca.sin(theta), ca.cos(theta)
    along, across = normal_x * c + normal_y * s, normal_y * c - normal_x * s
    return half_length * _soft_abs(along) + half_width * _soft_abs(across)


def clearance_rows(v: Named, p: Named, pairs: tuple[tuple[int, int], ...]) -> Matrix:
    """Gap between the shadows of two footprints on their separating line, less the gap to keep, plus slack."""
    rows = [_clearance_row(v, p, i, k, j) for i, (k, j) in enumerate(pairs)]
    return ca.vertcat(*rows) + v["short"] if rows else ca.SX(0, v["short"].shape[1])


def _clearance_row(v: Named, p: Named, i: int, k: int, j: int) -> Matrix:
    normal_x, normal_y = p["normal_x"][i, :], p["normal_y"][i, :]
    between = normal_x * (v["centre_x"][j, :] - v["centre_x"][k, :])
    between = between + normal_y * (v["centre_y"][j, :] - v["centre_y"][k, :])
    for robot in (k, j):
        between = between - shadow(
            v["theta"][robot, 1:], p["half_length"][robot], p["half_width"][robot], normal_x, normal_y
        )
    return between - p["gap"][i, :]


def fence_rows(v: Named, p: Named, fenced: tuple[int, ...]) -> Matrix:
    """How far each footprint may still reach towards its fence, plus slack."""
    rows = []
    for i, k in enumerate(fenced):
        normal_x, normal_y = p["fence_x"][i, :], p["fence_y"][i, :]
        reaches = normal_x * v["centre_x"][k, :] + normal_y * v["centre_y"][k, :] + shadow(
            v["theta"][k, 1:], p["half_length"][k], p["half_width"][k], normal_x, normal_y
        )
        rows.append(p["fence_reach"][i, :] - reaches)
    return ca.vertcat(*rows) + v["outside"] if rows else ca.SX(0, v["outside"].shape[1])


def footprint_centres(v: Named, p: Named) -> tuple[Matrix, Matrix]:
    """Centres of the footprints at nodes 1 .. M."""
    theta = v["theta"][:, 1:]
    m = theta.shape[1]
    s, c = ca.sin(theta), ca.cos(theta)
    ahead, left = ca.repmat(p["offset_x"], 1, m), ca.repmat(p["offset_y"], 1, m)
    return v["x"][:, 1:] + c * ahead - s * left, v["y"][:, 1:] + s * ahead + c * left


def motion_rows(v: Named, p: Named, mean_speed: Matrix, mean_curvature: Matrix) -> Named:
    """Residuals of the motion over each interval: an exact arc, two ramps, two lags."""
    h = _rows(p["h"], mean_speed)
    distance = h * mean_speed
    x, y, theta = se2.arc(v["x"][:, :-1], v["y"][:, :-1], v["theta"][:, :-1], distance, distance * mean_curvature)
    kappa, speed = v["curvature_command"], v["speed_command"]
    return {
        "step_x": v["x"][:, 1:] - x,
        "step_y": v["y"][:, 1:] - y,
        "step_theta": v["theta"][:, 1:] - theta,
        "step_curvature": lag_residual(kappa, v["curvature"], v["curvature_rate"], p["curvature_lag"], p["h"]),
        "step_speed": lag_residual(speed, v["speed"], v["acceleration"], p["speed_lag"], p["h"]),
        "step_curvature_command": _change(kappa) - h * v["curvature_rate"],
        "step_speed_command": _change(speed) - h * v["acceleration"],
    }


def small_prices(v: Named, p: Named, mean_speed: Matrix) -> Matrix:
    """Prices on steering, on speeding up and braking, and on leaving the asked speed."""
    relative = (mean_speed - p["asked_speed"]) / ca.repmat(p["full_speed"], 1, mean_speed.shape[1])
    each = (
        p["price_curvature_rate"] * ca.sum1(v["curvature_rate"] ** 2)
        + p["price_acceleration"] * ca.sum1(v["acceleration"] ** 2)
        + p["price_speed"] * ca.sum1(relative**2)
    )
    return ca.dot(each, p["cost_h"]) / 2


def steep_prices(v: Named, p: Named) -> Matrix:
    """Exact penalties: metres of missing clearance or behind a fence (per second), metres by which ends are missed."""
    short = sum(ca.dot(ca.sum1(v[name]), p["h"]) for name in ("short", "outside") if v[name].shape[0])
    return p["price_clearance"] * short + ca.sum1(ca.vec(p["price_end"] * (v["over"] + v["under"])))


@lru_cache(maxsize=8)
def build(shape: Shape, joint: bool = True) -> Program:
    """The program for problems of a shape, as one expression.

    Args:
        joint: with what is compared at moments that lie apart, the only cost that is no sum over the intervals.
    """
    variables, parameters, rows = variable_blocks(shape), parameter_blocks(shape), row_blocks(shape)
    x, v = variables.symbols()
    p_all, p = parameters.symbols()
    mean_speed = mean_over_interval(v["speed_command"], v["speed"], p["speed_lag"], p["h"])
    mean_curvature = mean_over_interval(v["curvature_command"], v["curvature"], p["curvature_lag"], p["h"])
    turning = mean_speed * mean_curvature / p["turn_speed"]
    v["centre_x"], v["centre_y"] = footprint_centres(v, p)
    kappa, speed = v["curvature_command"][:, 1:], v["speed_command"][:, 1:]
    last = ca.horzcat(*[v[name][:, -1] for name in STATES])
    g = rows.stack({
        **motion_rows(v, p, mean_speed, mean_curvature),
        "turn_rate": speed * kappa,
        "lateral": speed**2 * kappa,
        "clearance": clearance_rows(v, p, shape.pairs),
        "fence": fence_rows(v, p, shape.fenced),
        "end": last - p["target"] - v["over"] + v["under"],
        "compared": turning - v["compared"] if shape.compared else v["compared"],
    })
    at_once = () if shape.compared else shape.edges
    f = (
        turning_cost(turning, p["coupling"], at_once, p["cost_h"])
        + (comparison_cost(v, p, shape) if joint else 0)
        + alignment_cost(v["theta"], p["alignment"], shape.edges, p["cost_h"])
        + small_prices(v, p, mean_speed)
        + steep_prices(v, p)
    )
    return Program(shape, variables, parameters, rows, x, p_all, f, g)


def numbers(problem: Problem) -> np.ndarray:
    """The parameter vector of a problem."""
    fleet, prices = problem.fleet, problem.prices
    footprints = [robot.footprint for robot in fleet.robots]
    free = np.isnan(problem.target)
    nothing = np.zeros((0, 0))
    compared = problem.compared if problem.shape.compared else None
    values = {
        "h": problem.intervals[None, :],
        "cost_h": problem.intervals[None, :] * problem.pace,
        "asked_speed": problem.asked_speed,
        "full_speed": problem.full_speed[:, None],
        "turn_speed": problem.turn_speed,
        "coupling": problem.coupling * problem.weights[:, None],
        "alignment": problem.coupling * problem.alignment * problem.weights[:, None],
        "price_curvature_rate": prices.curvature_rate,
        "price_acceleration": prices.acceleration,
        "price_speed": prices.speed,
        "price_clearance": prices.clearance,
        "price_end": np.where(free, 0.0, prices.end),
        "curvature_lag": fleet.response("curvature_lag")[:, None],
        "speed_lag": fleet.response("speed_lag")[:, None],
        "target": np.where(free, 0.0, problem.target),
        "normal_x": problem.watch.normals[..., 0],
        "normal_y": problem.watch.normals[..., 1],
        "gap": problem.watch.gaps,
        "fence_x": problem.fences.normals[..., 0],
        "fence_y": problem.fences.normals[..., 1],
        "fence_reach": np.where(np.isfinite(problem.fences.reaches), problem.fences.reaches, 0.0),
        "half_length": np.array([[f.footprint_length / 2] for f in footprints]),
        "half_width": np.array([[f.footprint_width / 2] for f in footprints]),
        "offset_x": np.array([[f.footprint_offset_x] for f in footprints]),
        "offset_y": np.array([[f.footprint_offset_y] for f in footprints]),
        "compare_first": nothing if compared is None else compared.first,
        "compare_second": nothing if compared is None else compared.second,
        "compare_known": np.zeros((0, 1)) if compared is None else compared.known[:, None],
        "compare_seconds": np.zeros((0, 1)) if compared is None else compared.seconds[:, None],
    }
    return parameter_blocks(problem.shape).pack(values)


def variable_bounds(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Lower and upper bounds of the variables: the initial state is fixed, limits are boxes, slacks are >= 0."""
    shape, fleet, bounds = problem.shape, problem.fleet, problem.bounds
    n, m = shape.robots, shape.intervals
    free = np.isnan(problem.target)
    lower: dict[str, np.ndarray] = {name: np.full((n, m + 1), -np.inf) for name in STATES}
    upper: dict[str, np.ndarray] = {name: np.full((n, m + 1), np.inf) for name in STATES}
    lower["curvature_command"][:, 1:], upper["curvature_command"][:, 1:] = -bounds.max_curvature, bounds.max_curvature
    lower["speed_command"][:, 1:], upper["speed_command"][:, 1:] = bounds.min_speed, bounds.max_speed
    for i, name in enumerate(STATES):
        lower[name][:, 0] = upper[name][:, 0] = problem.initial[:, i]
    steer = np.broadcast_to(fleet.limit("max_curvature_rate")[:, None], (n, m))
    lower["curvature_rate"], upper["curvature_rate"] = -steer, steer
    lower["acceleration"], upper["acceleration"] = problem.rates_of_speed
    lower["short"], upper["short"] = np.zeros((len(shape.pairs), m)), np.full((len(shape.pairs), m), np.inf)
    lower["outside"], upper["outside"] = np.zeros((len(shape.fenced), m)), np.full((len(shape.fenced), m), np.inf)
    for name in ("over", "under"):
        lower[name], upper[name] = np.zeros(free.shape), np.where(free, 0.0, np.inf)
    lower["compared"] = np.full((n if shape.compared else 0, m), -np.inf)
    upper["compared"] = -lower["compared"]
    layout = variable_blocks(shape)
    return layout.pack(lower), layout.pack(upper)


def row_bounds(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Lower and upper bounds of the constraint rows."""
    shape, bounds = problem.shape, problem.bounds
    free = np.isnan(problem.target)
    lower: dict[str, Any] = {f"step_{name}": 0.0 for name in STATES}
    upper: dict[str, Any] = dict(lower)
    lower["turn_rate"], upper["turn_rate"] = -bounds.max_turn_rate, bounds.max_turn_rate
    lower["lateral"], upper["lateral"] = -bounds.max_lateral_acceleration, bounds.max_lateral_acceleration
    lower["clearance"], upper["clearance"] = 0.0, np.inf
    lower["fence"], upper["fence"] = np.where(np.isfinite(problem.fences.reaches), 0.0, -np.inf), np.inf
    lower["end"], upper["end"] = np.where(free, -np.inf, 0.0), np.where(free, np.inf, 0.0)
    lower["compared"] = upper["compared"] = 0.0
    layout = row_blocks(shape)
    return layout.pack(lower), layout.pack(upper)


def _change(nodes: Matrix) -> Matrix:
    return nodes[:, 1:] - nodes[:, :-1]


def _rows(row: Matrix, like: Matrix) -> Matrix:
    return ca.repmat(row, like.shape[0], 1)


def _soft_abs(value: Matrix) -> Matrix:
    return ca.sqrt(value**2 + _ROUNDING**2)


@lru_cache(maxsize=8)
def _evaluated(shape: Shape) -> ca.Function:
    program = build(shape)
    return ca.Function("rows", [program.x, program.p], [program.g])


def violation(problem: Problem, vector: np.ndarray) -> float:
    """Largest violation of any row or bound by a primal vector, in the rows' own units; own evaluation."""
    rows = np.asarray(_evaluated(problem.shape)(vector, numbers(problem))).ravel()
    worst = 0.0
    for values, (lower, upper) in ((rows, row_bounds(problem)), (vector, variable_bounds(problem))):
        worst = max(worst, float(np.max(lower - values, initial=0.0)), float(np.max(values - upper, initial=0.0)))
    return worst
