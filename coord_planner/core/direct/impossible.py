# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What can be seen to be impossible before anything is solved, and what stood in the way of a solve that failed."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Optional

import attrs
import numpy as np

from .. import dubins, outline, reeds_shepp
from .problem import DirectProblem
from .solution import Solved

_TINY = 1e-9  # relative: rounding of what a person typed in
MISSED = 1e-6  # of the way's length, and rad: ends missed by more are missed
_SLIGHT = 1e-2  # of the most that is missed: less is not told
_COUNTS = 1e-3  # price, in what is missed, above which a limit stands in the way


@attrs.frozen
class Obstacle:
    """A limit of the problem file that stands in the way, the robots whose it is (or the pair), and the figures."""

    limit: str
    robots: tuple[str, ...]
    text: str


def obstacles(problem: DirectProblem) -> tuple[Obstacle, ...]:
    """Bounds from below that the problem cannot meet; empty when none is broken (it may be impossible all the same)."""
    found = [*_far(problem), *_winding(problem), *_apart(problem)]
    return tuple(found) or tuple(_shortest(problem))


def _far(problem: DirectProblem) -> Iterator[Obstacle]:
    """An end farther than the longest way; as far as it, but not straight ahead."""
    longest = problem.speeds.fastest * problem.duration
    for k in np.flatnonzero(problem.placed):
        start, end = problem.starts[k], problem.ends[k]
        moved = end[:2] - start[:2]
        distance = float(np.hypot(*moved))
        way = f"{problem.duration:g} s at {problem.speeds.fastest:g} m/s make a way of {longest:.4g} m"
        if distance > longest * (1 + _TINY):
            yield Obstacle("duration", (problem.names[k],),
                           f"{problem.names[k]}: its end lies {distance:.4g} m from its start, and {way}")
        elif distance > longest * (1 - _TINY):
            bearing = math.atan2(moved[1], moved[0])
            off = max(abs(math.remainder(start[2] - bearing, math.pi if problem.speeds.reversing else 2 * math.pi)),
                      abs(float(end[2] - start[2])))
            if off > 1e-6:
                yield Obstacle("duration", (problem.names[k],),
                               f"{problem.names[k]}: its end lies as far away as {way}, and not straight ahead")


def _winding(problem: DirectProblem) -> Iterator[Obstacle]:
    """More turning than the limits allow in the time."""
    fastest, duration = problem.speeds.fastest, problem.duration
    turns = np.abs(problem.ends[:, 2] - problem.starts[:, 2])
    rates = {"max_curvature": problem.caps.max_curvature * fastest, "max_turn_rate": problem.caps.max_turn_rate,
             "max_lateral_acceleration": _by_lateral(problem)}
    for name, rate in rates.items():
        for k in np.flatnonzero(turns > rate * duration * (1 + _TINY)):
            yield Obstacle(name, (problem.names[k],),
                           f"{problem.names[k]}: it has to turn by {turns[k]:.4g} rad, and its {name} of "
                           f"{getattr(problem.caps, name)[k]:g} allows {rate[k] * duration:.4g} rad in {duration:g} s")


def _by_lateral(problem: DirectProblem) -> np.ndarray:
    """Largest turn rate that the lateral acceleration allows at the lowest speed, shape (N,)."""
    slowest = problem.speeds.lowest
    return problem.caps.max_lateral_acceleration / slowest if slowest > 0 else np.full(len(problem), np.inf)


def _shortest(problem: DirectProblem) -> Iterator[Obstacle]:
    """No way with bounded curvature is shorter than the one of Dubins (of Reeds & Shepp where robots may reverse)."""
    sharpest = problem.caps.curvature(problem.speeds)
    longest = problem.speeds.fastest * problem.duration
    for k in np.flatnonzero(problem.placed & np.isfinite(sharpest)):
        start, end = problem.starts[k].tolist(), problem.ends[k].tolist()
        kind = reeds_shepp if problem.speeds.reversing else dubins
        least = kind.shortest(start, end, 1.0 / sharpest[k]).length
        if least > longest * (1 + _TINY):
            limit = _sharpest_by(problem, int(k))
            yield Obstacle(limit, (problem.names[k],),
                           f"{problem.names[k]}: with its {limit} of {getattr(problem.caps, limit)[k]:g} no way to its "
                           f"end is shorter than {least:.4g} m, and {problem.duration:g} s at "
                           f"{problem.speeds.fastest:g} m/s make {longest:.4g} m")


def _sharpest_by(problem: DirectProblem, k: int) -> str:
    """The limit that bounds a robot's curvature."""
    caps, v = problem.caps, abs(problem.speeds.asked)
    if not problem.speeds.fixed:
        return "max_curvature"
    by = {"max_curvature": caps.max_curvature[k], "max_turn_rate": caps.max_turn_rate[k] / v,
          "max_lateral_acceleration": caps.max_lateral_acceleration[k] / v**2}
    return min(by, key=lambda name: float(by[name]))


def _apart(problem: DirectProblem) -> Iterator[Obstacle]:
    """Starts and ends that are too near to each other."""
    pairs = problem.pairs
    for poses, verb in ((problem.starts, "start"), (problem.ends, "end")):
        asked = pairs[~np.isnan(poses[pairs, 0]).any(axis=1)] if len(pairs) else pairs
        if not len(asked):
            continue
        polygons = outline.outlines(problem.corners, np.nan_to_num(poses))
        for (k, j), gap in zip(asked, outline.clearances(polygons, asked)):
            if gap < problem.min_clearance * (1 - _TINY):
                names = (problem.names[k], problem.names[j])
                yield Obstacle("min_clearance", names, f"{names[0]} and {names[1]} {verb} {gap:.4g} m from each other, "
                                                       f"and min_clearance is {problem.min_clearance:g} m")


def in_the_way(problem: DirectProblem, nearest: Solved) -> tuple[Obstacle, ...]:
    """What stands in the way, from the plan that misses least (a soft solve of the problem in its own units)."""
    named, metre = nearest.named, problem.length
    found = []
    short = named["short"].max(axis=1, initial=0.0)
    prices = np.abs(nearest.row_multipliers["clearance"]).max(axis=1, initial=0.0)
    for (k, j), lacks, price in zip(problem.pairs, short, prices):
        if lacks > MISSED or price * problem.intervals > _COUNTS:
            found.append(_clearance(problem, (problem.names[k], problem.names[j]), lacks * metre))
    missed = named["over"] + named["under"]
    least = max(MISSED, _SLIGHT * max(float(short.max(initial=0.0)), float(missed.max(initial=0.0))))
    for k in np.flatnonzero(missed.max(axis=1) > least):
        limit = _busiest(nearest, int(k))
        name = problem.names[k]
        parts = [f"{value:.3g} {unit}" for value, unit, size in (
            (np.hypot(*missed[k, :2]) * metre, "m", missed[k, :2].max()), (missed[k, 2], "rad", missed[k, 2])
        ) if size > least]
        off = " and ".join(parts)
        about = f"its {limit} of {_figure(problem, limit, int(k)):g}"
        if limit == "duration":
            about = "the length of its way, which duration and speed give, or the number of intervals"
        found.append(Obstacle(
            limit, (name,), f"{name} misses its end by {off} in the nearest plan found; {about} stands in the way"))
    return tuple(found)


def _clearance(problem: DirectProblem, names: tuple[str, str], lacks: float) -> Obstacle:
    least = problem.min_clearance
    what = f"; {lacks:.3g} m of it are missing in the nearest plan found" if lacks > MISSED * problem.length else ""
    return Obstacle("min_clearance", names,
                    f"{names[0]} and {names[1]} cannot keep min_clearance, {least:g} m, from each other{what}")


def _busiest(nearest: Solved, k: int) -> str:
    """The limit whose easing would help a robot most: by the sum of its multipliers."""
    by: dict[str, float] = {}
    bounds, rows = nearest.bound_multipliers, nearest.row_multipliers
    by[_sharpest_by(nearest.problem, k)] = float(np.abs(bounds["curvature"][k]).sum())
    if "speed" in bounds:
        by["speed"] = float(np.abs(bounds["speed"][k]).sum())
    for row, limit in (("curvature_rate", "max_curvature_rate"), ("turn_rate", "max_turn_rate"),
                       ("lateral", "max_lateral_acceleration"), ("acceleration", "max_acceleration")):
        if row in rows:
            by[limit] = by.get(limit, 0.0) + float(np.abs(rows[row][k]).sum())
    limit = max(by, key=lambda name: by[name])
    return limit if by[limit] > _COUNTS / nearest.shape.intervals else "duration"


def _figure(problem: DirectProblem, limit: str, k: int) -> float:
    if limit == "duration":
        return problem.duration
    return problem.speeds.highest if limit == "speed" else float(getattr(problem.caps, limit)[k])


def sentence(found: tuple[Obstacle, ...], otherwise: Optional[str] = None) -> str:
    """All obstacles as one text."""
    return "; ".join(obstacle.text for obstacle in found) or otherwise or ""
