# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Random ticks of invented fleets: with room and in contact, with fences, free ends, lags, odd footprints."""

from __future__ import annotations

import attrs
import numpy as np

from coord_planner.core import outline
from coord_planner.core.fleet import Fleet, Footprint, Limits, Response, Robot
from coord_planner.core.problem import (
    POSE,
    STATES,
    Bounds,
    Comparison,
    Fences,
    Problem,
    Watch,
    bounds_in_force,
    no_fences,
)
from coord_planner.core.rectangles import separating_normals
from coord_planner.core.rollout import rolled_out
from coord_planner.core.settings import Prices

INTERVALS, INTERVAL = 16, 0.25
NOISE = 0.03  # m, rad
LIMITS = Limits(max_curvature=0.8, max_curvature_rate=0.6, max_speed=1.4, max_acceleration=0.6)
# Few shapes, since the general solver that stands beside is built anew for each.
GRAPHS = {2: ((0, 1),), 3: ((0, 1), (1, 2)), 4: ((0, 1), (1, 2), (2, 3), (0, 2))}


def problem(seed: int, contact: bool, fenced: bool = False) -> tuple[Problem, np.ndarray]:
    """A problem, and states to start from, shape (N, M + 1, 7).

    Args:
        contact: pairs come nearer than they may on the way that the ends come from; otherwise they keep clear.
        fenced: a line before every robot that it passes a little on that way.
    """
    rng = np.random.default_rng(seed)
    count = int(rng.integers(2, 5))
    fleet = _fleet(rng, count)
    driven, guess = _way(rng, fleet)
    initial = guess[:, 0].copy()
    initial[:, POSE] += rng.normal(size=(count, 3)) * NOISE
    target = guess[:, -1] + rng.normal(size=(count, 7)) * np.array([0.05, 0.05, 0.05, 0.0, 0.0, 0.0, 0.0])
    target[rng.random(count) < 0.25] = np.nan  # who only copies
    target[rng.random(count) < 0.25, :2] = np.nan  # a heading only
    return attrs.evolve(
        driven, initial=initial, target=target, coupling=float(rng.choice([0.0, 0.3, 2.0, 20.0])),
        alignment=float(rng.choice([0.0, 0.0, 1.0])),
        bounds=_bounds(driven, initial),
        watch=_watch(rng, fleet, guess, contact),
        fences=_fences(fleet, guess) if fenced else no_fences(INTERVALS),
        compared=_comparison(rng, driven.edges) if rng.random() < 0.3 else None,
    ), guess


def _comparison(rng: np.random.Generator, edges: np.ndarray) -> Comparison:
    """In each interval the first of an edge is compared with what the second turned three intervals earlier."""
    count, width = len(edges) * INTERVALS, 3
    m = np.tile(np.arange(INTERVALS), len(edges))
    at = np.clip(m - 3, 0, INTERVALS - width)
    first = (np.arange(width) == (m - np.minimum(m, INTERVALS - width))[:, None]).astype(float)
    second = rng.uniform(0.2, 0.5, (count, width)) * (m >= 3)[:, None]
    return Comparison(
        np.repeat(np.arange(len(edges)), INTERVALS), np.minimum(m, INTERVALS - width), at, first, second,
        np.where(m >= 3, 0.0, -0.1), np.where(rng.random(count) < 0.1, 0.0, INTERVAL),
    )


def _bounds(driven: Problem, initial: np.ndarray) -> Bounds:
    return bounds_in_force(driven.fleet, initial, driven.times, 99.0, 1.0, 1.3, 0.7)


def disturbed(given: Problem, seed: int) -> Problem:
    """The same problem with the robots a little elsewhere."""
    initial = given.initial.copy()
    initial[:, POSE] += np.random.default_rng(seed).normal(size=(len(initial), 3)) * NOISE
    return attrs.evolve(given, initial=initial)


def _fleet(rng: np.random.Generator, count: int) -> Fleet:
    mixed = rng.random() < 0.5
    robots = []
    for k in range(count):
        lag = rng.choice([0.0, 0.15, 0.3], size=2) if mixed else np.array([0.25, 0.2])
        shape = Footprint() if rng.random() < 0.6 else Footprint(
            footprint_length=1.6, footprint_width=1.0, footprint_offset_x=0.4, footprint_offset_y=-0.1
        )
        robots.append(Robot(f"robot_{k + 1}", LIMITS, shape, Response(speed_lag=lag[0], curvature_lag=lag[1])))
    return Fleet(tuple(robots))


def _way(rng: np.random.Generator, fleet: Fleet) -> tuple[Problem, np.ndarray]:
    """A problem without ends or pairs, and a way that smooth random commands lead along."""
    count = len(fleet)
    times = np.concatenate([[0.0], INTERVAL * (rng.uniform(0.2, 1.0) + np.arange(INTERVALS))])
    initial = np.zeros((count, len(STATES)))
    spread = np.arange(count)[:, None] * (rng.uniform(1.9, 2.6) * np.array([[0.15, -1.0]]))
    initial[:, :2] = spread + rng.normal(size=(count, 2)) * 0.1
    initial[:, 2] = rng.uniform(-3.0, 3.0) + rng.normal(size=count) * 0.1
    turned = np.array([np.cos(initial[:, 2].mean()), np.sin(initial[:, 2].mean())])
    initial[:, :2] = initial[:, :1] * turned + initial[:, 1:2] * np.array([-turned[1], turned[0]])
    speed = rng.uniform(0.6, 1.1)
    initial[:, [4, 6]] = speed
    initial[:, [3, 5]] = rng.uniform(-0.2, 0.2)
    asked = np.full((count, INTERVALS), speed)
    problem = Problem(
        fleet=fleet, edges=np.array(GRAPHS[count]), weights=rng.uniform(0.5, 2.0, len(GRAPHS[count])), coupling=1.0,
        alignment=0.0, prices=Prices(), times=times, pace=float(rng.uniform(0.5, 1.0)), initial=initial,
        asked_speed=asked, turn_speed=np.maximum(asked, 0.3), full_speed=np.full(count, speed),
        target=np.full((count, 7), np.nan), bounds=bounds_in_force(fleet, initial, times, 99.0, 1.0, 1.3, 0.7),
        watch=Watch(np.zeros((0, 2), dtype=int), np.zeros((0, INTERVALS, 2)), np.zeros((0, INTERVALS))),
    )
    wave = np.sin(rng.uniform(0.3, 1.2) * times[1:] + rng.uniform(0.0, 6.0))
    rates = np.stack([np.tile(0.4 * wave, (count, 1)), 0.1 * rng.normal(size=(count, INTERVALS))], axis=2)
    return problem, rolled_out(problem, rates)[0]


def _watch(rng: np.random.Generator, fleet: Fleet, guess: np.ndarray, contact: bool) -> Watch:
    pairs = outline.all_pairs(len(fleet))
    pairs = pairs[pairs[:, 1] - pairs[:, 0] <= 2]
    polygons = outline.outlines(fleet.corners(), guess[:, 1:, POSE])
    nearest = outline.clearances(polygons, pairs).min(axis=1)
    kept = nearest + (rng.uniform(-0.02, 0.08, len(pairs)) if contact else -0.3)
    return Watch(
        pairs, separating_normals(fleet.corners(), guess[:, 1:, POSE], pairs),
        np.repeat(np.maximum(kept, 0.02)[:, None], INTERVALS, axis=1),
    )


def _fences(fleet: Fleet, guess: np.ndarray) -> Fences:
    """A line square to each robot's last heading, 5 cm nearer than its front would be in the end."""
    corners = fleet.corners()
    robots, normals, reaches = np.arange(len(fleet)), [], []
    for k in robots:
        x, y, heading = guess[k, -1, POSE]
        ahead = np.array([np.cos(heading), np.sin(heading)])
        normals.append(np.tile(ahead, (INTERVALS, 1)))
        reach = np.full(INTERVALS, ahead @ np.array([x, y]) + corners[k, :, 0].max() - 0.05)
        reach[: INTERVALS // 2] = np.inf
        reaches.append(reach)
    return Fences(robots, np.stack(normals), np.stack(reaches))
