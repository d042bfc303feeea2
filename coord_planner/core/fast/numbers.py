# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem -> plain arrays: what every iteration of a tick needs, worked out once."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np

from ..fleet import Fleet
from ..problem import CURVATURE, CURVATURE_COMMAND, SPEED, SPEED_COMMAND, Problem
from .comparing import Comparing, comparing
from .response import Response, response

# Rows of each robot and interval (or node), in this order in every array of limits.
_FAR = 1e3  # metres that are free where a fence does not bind
LIMITS = ("curvature", "speed", "curvature_rate", "acceleration", "turn_rate", "lateral")


@attrs.frozen(eq=False)
class FleetNumbers:
    """What a fleet's robots are, one entry a robot."""

    curvature_lag: np.ndarray
    speed_lag: np.ndarray
    max_curvature_rate: np.ndarray
    half_length: np.ndarray
    half_width: np.ndarray
    offset_x: np.ndarray
    offset_y: np.ndarray


def fleet_numbers(fleet: Fleet) -> FleetNumbers:
    """Arrays of a fleet's lags, rates and footprints, each of shape (N,)."""
    footprints = [robot.footprint for robot in fleet.robots]
    return FleetNumbers(
        fleet.response("curvature_lag"), fleet.response("speed_lag"), fleet.limit("max_curvature_rate"),
        np.array([shape.footprint_length / 2 for shape in footprints]),
        np.array([shape.footprint_width / 2 for shape in footprints]),
        np.array([shape.footprint_offset_x for shape in footprints]),
        np.array([shape.footprint_offset_y for shape in footprints]),
    )


@attrs.frozen(eq=False)
class Beginning:
    """The initial state, shape (N, 7), and its part in what follows.

    Attributes:
        mean_curvature, mean_speed: its part in the means over the intervals, shape (N, M).
        curvature, speed: its part in what is reached at nodes 1 .. M, shape (N, M).
    """

    initial: np.ndarray
    mean_curvature: np.ndarray
    mean_speed: np.ndarray
    curvature: np.ndarray
    speed: np.ndarray


@attrs.frozen(eq=False)
class Numbers:
    """One problem as arrays. N robots, M intervals, E edges, P pairs.

    Attributes:
        h, cost_h: lengths of the intervals, and as the costs count them, shape (M,), seconds.
        curvature, speed: how curvature and speed answer to commands.
        begins: what the initial state brings.
        turn_speed: shape (N, M). full_speed: shape (N, 1). lower, upper: of LIMITS, shape (6, N, M).
        coupled: coupling * weighted Laplacian, shape (N, N). edges: (E, 2). alignment: price of each edge, (E,).
        comparing: where neighbours are compared otherwise than at equal moments, and coupled is 0.
        target: shape (N, 7), 0 where free. end_price: shape (N, 7), 0 where free.
        pairs: (P, 2): first those that are watched, then fences, which are pairs of a robot with nobody: the second is
            the first again and counts 0. watched: how many are no fences. second: 1, and 0 of fences, shape (P, 1).
        normals, gaps: as in Watch. short_price: of a metre of missing clearance at each node, (M,).
        half_length, half_width, offset_x, offset_y: footprints of the two robots of each pair, shape (2, P, 1).
        beside: 1 where a robot is the first, or the second, of a pair, shape (2, N, P). toward: the second less the
            first, shape (N, P).
    """

    fleet: FleetNumbers
    h: np.ndarray
    cost_h: np.ndarray
    curvature: Response
    speed: Response
    begins: Beginning
    asked_speed: np.ndarray
    turn_speed: np.ndarray
    full_speed: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    coupled: np.ndarray
    comparing: Comparing | None
    edges: np.ndarray
    alignment: np.ndarray
    price_curvature_rate: float
    price_acceleration: float
    price_speed: float
    target: np.ndarray
    end_price: np.ndarray
    pairs: np.ndarray
    watched: int
    second: np.ndarray
    normals: np.ndarray
    gaps: np.ndarray
    short_price: np.ndarray
    half_length: np.ndarray
    half_width: np.ndarray
    offset_x: np.ndarray
    offset_y: np.ndarray
    beside: np.ndarray
    toward: np.ndarray


def numbers(problem: Problem, fleet: FleetNumbers) -> Numbers:
    """The arrays of a problem whose fleet is known already."""
    h = problem.intervals
    curvature, speed = response(h, fleet.curvature_lag), response(h, fleet.speed_lag)
    free = np.isnan(problem.target)
    lower, upper = _limits(problem, fleet)
    prices = problem.prices
    return Numbers(
        fleet=fleet, h=h, cost_h=h * problem.pace, curvature=curvature, speed=speed,
        begins=_beginning(curvature, speed, problem.initial),
        asked_speed=problem.asked_speed, turn_speed=problem.turn_speed, full_speed=problem.full_speed[:, None],
        lower=lower, upper=upper, coupled=_coupled(problem),
        comparing=comparing(problem), edges=problem.edges,
        alignment=problem.coupling * problem.alignment * problem.weights,
        price_curvature_rate=prices.curvature_rate, price_acceleration=prices.acceleration, price_speed=prices.speed,
        target=np.where(free, 0.0, problem.target), end_price=np.where(free, 0.0, prices.end),
        short_price=prices.clearance * h, **_lines(problem, fleet),
    )


def started(known: Numbers, initial: np.ndarray) -> Numbers:
    """The same numbers with another state at the first node, shape (N, 7)."""
    return attrs.evolve(known, begins=_beginning(known.curvature, known.speed, initial))


def _beginning(curvature: Response, speed: Response, initial: np.ndarray) -> Beginning:
    bent, driven = initial[:, [CURVATURE, CURVATURE_COMMAND]], initial[:, [SPEED, SPEED_COMMAND]]
    return Beginning(
        initial,
        curvature.forward(curvature.mean_start, bent), speed.forward(speed.mean_start, driven),
        curvature.forward(curvature.reached_start, bent), speed.forward(speed.reached_start, driven),
    )


def _lines(problem: Problem, fleet: FleetNumbers) -> dict[str, Any]:
    """Pairs and fences: their lines, and what the two robots of each are."""
    watch, fences = problem.watch, problem.fences
    binding = np.isfinite(fences.reaches)
    two = np.concatenate([watch.pairs, np.repeat(fences.robots[:, None], 2, axis=1)]).T
    second = np.ones((two.shape[1], 1))
    second[len(watch.pairs) :] = 0.0
    counts = np.stack([np.ones_like(second), second])
    beside = (two[:, None, :] == np.arange(len(fleet.half_length))[:, None]).astype(float) * counts[:, None, :, 0]
    return {
        "pairs": np.ascontiguousarray(two.T), "watched": len(watch.pairs), "second": second,
        "normals": np.concatenate([watch.normals, fences.normals * binding[..., None]]),
        "gaps": np.concatenate([watch.gaps, np.where(binding, -fences.reaches, -_FAR)]),
        "half_length": fleet.half_length[two][..., None] * counts,
        "half_width": fleet.half_width[two][..., None] * counts,
        "offset_x": fleet.offset_x[two][..., None] * counts, "offset_y": fleet.offset_y[two][..., None] * counts,
        "beside": beside, "toward": beside[1] - beside[0],
    }


def _coupled(problem: Problem) -> np.ndarray:
    laplacian = np.zeros((len(problem.fleet),) * 2)
    if problem.compared is not None and len(problem.compared.edges):
        return laplacian
    first, second = problem.edges[:, 0], problem.edges[:, 1]
    weights = problem.coupling * problem.weights
    np.add.at(laplacian, (first, first), weights)
    np.add.at(laplacian, (second, second), weights)
    np.subtract.at(laplacian, (first, second), weights)
    np.subtract.at(laplacian, (second, first), weights)
    return laplacian


def _limits(problem: Problem, fleet: FleetNumbers) -> tuple[np.ndarray, np.ndarray]:
    bounds = problem.bounds
    lower, upper = np.empty((2, len(LIMITS)) + bounds.max_curvature.shape)
    upper[0], upper[1] = bounds.max_curvature, bounds.max_speed
    upper[2] = fleet.max_curvature_rate[:, None]
    upper[4], upper[5] = bounds.max_turn_rate, bounds.max_lateral_acceleration
    np.negative(upper, out=lower)
    lower[1] = bounds.min_speed
    lower[3], upper[3] = problem.rates_of_speed
    return lower, upper
