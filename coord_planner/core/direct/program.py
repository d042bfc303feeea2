# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem, in its own units -> nonlinear program. Curvature and speed are constant in each interval: steps are arcs."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import attrs
import casadi as ca
import numpy as np

from .. import ocp, se2
from ..blocks import Blocks
from .problem import DirectProblem

POSE = ("x", "y", "theta")
_SHORTEST = 1e-3  # of the duration: a phase between changes of gear
_FEASIBLE_FIRST = 1e-7  # price of the cost itself where what is missed is minimised: it only picks among equals

Named = dict[str, Any]


@attrs.frozen
class DirectShape:
    """What a compiled program depends on.

    ``phases``: numbers of intervals between changes of gear, whose moments are free; empty where nobody reverses.
    ``soft``: ends and clearances may be missed, at the price of what is missed.
    """

    robots: int
    intervals: int
    edges: tuple[tuple[int, int], ...]
    pairs: tuple[tuple[int, int], ...]
    free_speed: bool
    points: bool
    limited: tuple[str, ...]
    phases: tuple[int, ...] = ()
    soft: bool = False

    @classmethod
    def of(cls, problem: DirectProblem, phases: tuple[int, ...] = (), soft: bool = False) -> DirectShape:
        caps, free = problem.caps, not problem.speeds.fixed
        rows = {"curvature_rate": caps.max_curvature_rate}
        if free:
            rows |= {"turn_rate": caps.max_turn_rate, "lateral": caps.max_lateral_acceleration,
                     "acceleration": np.minimum(caps.max_acceleration, caps.max_braking)}
        return cls(
            len(problem), problem.intervals, tuple(map(tuple, problem.edges.tolist())),
            tuple(map(tuple, problem.pairs.tolist())), free, problem.points_only,
            tuple(name for name, limits in rows.items() if np.isfinite(limits).any()), phases, soft,
        )


@attrs.frozen(eq=False)
class Program:
    """A nonlinear program and the layouts of its vectors.

    ``states`` and ``dynamics`` are the blocks of variables and rows that belong together: given all other variables,
    the rows determine the states.
    """

    variables: Blocks
    parameters: Blocks
    rows: Blocks
    x: Any
    p: Any
    f: Any
    g: Any
    states: tuple[str, ...]
    dynamics: tuple[str, ...]


@attrs.frozen(eq=False)
class Lines:
    """What the clearance rows are given: unit vectors (P, M, 2) between the pairs, and gaps (P, M) to keep."""

    normals: np.ndarray
    gaps: np.ndarray


def variable_blocks(shape: DirectShape) -> Blocks:
    n, m = shape.robots, shape.intervals
    blocks = {**dict.fromkeys(POSE, (n, m + 1)), "curvature": (n, m)}
    if shape.free_speed:
        blocks["speed"] = (n, m)
    if shape.phases:
        blocks["span"] = (1, len(shape.phases))
    if shape.soft:
        blocks |= {"over": (n, 3), "under": (n, 3), "short": (len(shape.pairs), m)}
    return Blocks(blocks)


def parameter_blocks(shape: DirectShape) -> Blocks:
    n, m, e, p = shape.robots, shape.intervals, len(shape.edges), len(shape.pairs)
    return Blocks({
        "asked": (1, 1), "gear": (n, m), "coupling": (e, 1), "alignment": (e, 1), "target": (n, 3),
        "price_curvature_rate": (1, 1), "price_acceleration": (1, 1), "price_speed": (1, 1),
        "normal_x": (p, m), "normal_y": (p, m), "gap": (p, m),
        "half_length": (n, 1), "half_width": (n, 1), "offset_x": (n, 1), "offset_y": (n, 1),
    })


def row_blocks(shape: DirectShape) -> Blocks:
    n, m = shape.robots, shape.intervals
    blocks = {**{f"step_{name}": (n, m) for name in POSE}, "end": (n, 3), "clearance": (len(shape.pairs), m)}
    if shape.phases:
        blocks["whole"] = (1, 1)
    lengths = {"curvature_rate": m - 1, "acceleration": m - 1, "turn_rate": m, "lateral": m}
    return Blocks(blocks | {name: (n, lengths[name]) for name in shape.limited})


@lru_cache(maxsize=8)
def build(shape: DirectShape) -> Program:
    """The program for problems of a shape."""
    variables, parameters, rows = variable_blocks(shape), parameter_blocks(shape), row_blocks(shape)
    x, v = variables.symbols()
    p_all, p = parameters.symbols()
    n, m = shape.robots, shape.intervals
    speed = v["speed"] if shape.free_speed else ca.repmat(p["asked"], n, m)
    h = _intervals(v, shape)
    f = _cost(v, p, speed, h, shape)
    if shape.soft:
        f = _FEASIBLE_FIRST * f + ca.sum1(ca.vec(v["over"] + v["under"])) + ca.sum1(ca.vec(v["short"])) / m
    last = ca.horzcat(*[v[name][:, -1] for name in POSE]) - p["target"]
    rows_of = {**_steps(v, speed, h), "end": last - v["over"] + v["under"] if shape.soft else last,
               "clearance": _clearances(v, p, shape), **_limited(v, speed, h)}
    if shape.phases:
        rows_of["whole"] = ca.sum2(v["span"]) - 1
    g = rows.stack({name: rows_of[name] for name in rows.shapes})
    return Program(variables, parameters, rows, x, p_all, f, g, POSE, tuple(f"step_{name}" for name in POSE))


def _intervals(v: Named, shape: DirectShape) -> Any:
    """Lengths of the intervals, shape (1, M): equal, or equal between changes of gear."""
    if not shape.phases:
        return ca.repmat(ca.SX(1 / shape.intervals), 1, shape.intervals)
    return ca.horzcat(*[ca.repmat(v["span"][i] / count, 1, count) for i, count in enumerate(shape.phases)])


def _steps(v: Named, speed: Any, h: Any) -> Named:
    distance = speed * ca.repmat(h, speed.shape[0], 1)
    x, y, theta = (v[name][:, :-1] for name in POSE)
    ends = se2.arc(x, y, theta, distance, distance * v["curvature"])
    return {f"step_{name}": v[name][:, 1:] - end for name, end in zip(POSE, ends)}


def _cost(v: Named, p: Named, speed: Any, h: Any, shape: DirectShape) -> Any:
    turning = v["curvature"] * (speed / p["asked"] if shape.free_speed else 1)
    cost = ocp.turning_cost(turning, p["coupling"], shape.edges, h)
    cost += ocp.alignment_cost(v["theta"], p["alignment"], shape.edges, h)
    between = (h[:, 1:] + h[:, :-1]) / 2
    cost += p["price_curvature_rate"] * ca.dot(ca.sum1(_change(v["curvature"]) ** 2), 1 / between) / 2
    if shape.free_speed:
        cost += p["price_acceleration"] * ca.dot(ca.sum1(_change(speed) ** 2), 1 / between) / 2
        cost += p["price_speed"] * ca.dot(ca.sum1((p["gear"] * speed / p["asked"] - 1) ** 2), h) / 2
    return cost


def _limited(v: Named, speed: Any, h: Any) -> Named:
    between = ca.repmat((h[:, 1:] + h[:, :-1]) / 2, speed.shape[0], 1)
    return {
        "curvature_rate": _change(v["curvature"]) / between, "acceleration": _change(speed) / between,
        "turn_rate": speed * v["curvature"], "lateral": speed**2 * v["curvature"],
    }


def _clearances(v: Named, p: Named, shape: DirectShape) -> Any:
    """Between points the distance itself, squared: its gradient exists everywhere. Else the separating lines."""
    count, m = len(shape.pairs), shape.intervals
    short = v["short"] if shape.soft else ca.SX(count, m)
    if not shape.points:
        v = {**v, "short": short}
        v["centre_x"], v["centre_y"] = ocp.footprint_centres(v, p)
        return ocp.clearance_rows(v, p, shape.pairs)
    rows = []
    for i, (k, j) in enumerate(shape.pairs):
        apart = (v["x"][j, 1:] - v["x"][k, 1:]) ** 2 + (v["y"][j, 1:] - v["y"][k, 1:]) ** 2
        rows.append((apart - p["gap"][i, :] ** 2) / (2 * p["gap"][i, :]))
    return ca.vertcat(*rows) + short if rows else short


def _change(values: Any) -> Any:
    return values[:, 1:] - values[:, :-1]


def numbers(problem: DirectProblem, lines: Lines, gears: np.ndarray) -> np.ndarray:
    """The parameter vector of a problem in its own units; ``gears`` (N, M) are 1 and -1."""
    weights = problem.coupling * problem.weights[:, None]
    length, width, ahead, left = problem.boxes.T[:, :, None]
    return parameter_blocks(DirectShape.of(problem)).pack({
        "asked": problem.speeds.asked, "gear": gears, "coupling": weights, "alignment": problem.alignment * weights,
        "target": np.nan_to_num(problem.ends), "price_curvature_rate": problem.prices.curvature_rate,
        "price_acceleration": problem.prices.acceleration, "price_speed": problem.prices.speed,
        "normal_x": lines.normals[..., 0], "normal_y": lines.normals[..., 1], "gap": lines.gaps,
        "half_length": length / 2, "half_width": width / 2, "offset_x": ahead, "offset_y": left,
    })


def variable_bounds(
    problem: DirectProblem, shape: DirectShape, gears: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Lower and upper bounds: the first pose is fixed, limits are boxes, what is missed is >= 0."""
    n, m = shape.robots, shape.intervals
    layout = variable_blocks(shape)
    lower: dict[str, Any] = dict.fromkeys(layout.shapes, -np.inf)
    upper: dict[str, Any] = dict.fromkeys(layout.shapes, np.inf)
    for column, name in enumerate(POSE):
        lower[name], upper[name] = np.full((n, m + 1), -np.inf), np.full((n, m + 1), np.inf)
        lower[name][:, 0] = upper[name][:, 0] = problem.starts[:, column]
    sharpest = problem.caps.curvature(problem.speeds)[:, None]
    lower["curvature"], upper["curvature"] = -sharpest, sharpest
    if shape.free_speed:
        lowest, highest = problem.speeds.lowest, problem.speeds.highest
        lower["speed"] = np.where(gears > 0, max(lowest, 0.0), lowest)
        upper["speed"] = np.where(gears > 0, highest, min(highest, 0.0))
    if shape.phases:
        lower["span"] = _SHORTEST
    if shape.soft:
        lower |= dict.fromkeys(("over", "under", "short"), 0.0)
        for name in ("over", "under"):
            upper[name] = np.where(np.isnan(problem.ends), 0.0, np.inf)
    return layout.pack(lower), layout.pack(upper)


def row_bounds(problem: DirectProblem, shape: DirectShape) -> tuple[np.ndarray, np.ndarray]:
    """Lower and upper bounds of the rows."""
    layout, caps = row_blocks(shape), problem.caps
    lower: dict[str, Any] = dict.fromkeys(layout.shapes, 0.0)
    upper: dict[str, Any] = dict(lower)
    free = np.isnan(problem.ends)
    lower["end"], upper["end"] = np.where(free, -np.inf, 0.0), np.where(free, np.inf, 0.0)
    upper["clearance"] = np.inf
    both = {"curvature_rate": caps.max_curvature_rate, "turn_rate": caps.max_turn_rate,
            "lateral": caps.max_lateral_acceleration}
    for name in shape.limited:
        if name != "acceleration":
            upper[name] = both[name][:, None]
            lower[name] = -upper[name]
            continue
        slowing, speeding = caps.max_braking[:, None], caps.max_acceleration[:, None]
        if problem.speeds.reversing:  # whether a change of speed is braking depends on the gear: the weaker of the two
            slowing = speeding = np.minimum(slowing, speeding)
        lower[name], upper[name] = -slowing, speeding
    return layout.pack(lower), layout.pack(upper)
