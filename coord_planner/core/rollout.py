# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""States that follow from commands: a plan that no solver has finished, made consistent."""

from __future__ import annotations

import numpy as np

from . import se2
from .problem import (
    CURVATURE,
    CURVATURE_COMMAND,
    POSE,
    SPEED,
    SPEED_COMMAND,
    Problem,
)


def rolled_out(problem: Problem, rates: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Drive the rates of a plan, cut to the limits in force, from the problem's initial state.

    Args:
        rates: curvature rate and acceleration in the intervals, shape (N, M, 2); finite.

    Returns:
        states, shape (N, M + 1, 7), and the rates that were driven, shape (N, M, 2).
    """
    fleet, bounds, h = problem.fleet, problem.bounds, problem.intervals
    steer = fleet.limit("max_curvature_rate")[:, None]
    steer = np.broadcast_to(steer, rates.shape[:2])
    bend = _ramp(problem.initial[:, CURVATURE_COMMAND], rates[..., 0], h, (-steer, steer),
                 (-bounds.max_curvature, bounds.max_curvature))
    speed = _ramp(problem.initial[:, SPEED_COMMAND], rates[..., 1], h, problem.rates_of_speed,
                  (bounds.min_speed, bounds.max_speed))
    reached_bend, mean_bend = _reached(problem.initial[:, CURVATURE], bend, h, fleet.response("curvature_lag"))
    reached_speed, mean_speed = _reached(problem.initial[:, SPEED], speed, h, fleet.response("speed_lag"))
    distances = mean_speed * h
    poses = se2.rollout(problem.initial[:, POSE], distances, distances * mean_bend)
    states = np.concatenate([poses, np.stack([reached_bend, reached_speed, bend, speed], axis=2)], axis=2)
    return states, np.stack([np.diff(bend, axis=1) / h, np.diff(speed, axis=1) / h], axis=2)


def _ramp(
    first: np.ndarray, rates: np.ndarray, h: np.ndarray, fastest: tuple[np.ndarray, np.ndarray],
    bounds: tuple[np.ndarray, np.ndarray],
) -> np.ndarray:
    """Commands at the nodes, shape (N, M + 1), within their rates and, as far as those allow, their bounds."""
    nodes = [first]
    for i, step in enumerate(h):
        wanted = np.clip(nodes[-1] + step * rates[:, i], bounds[0][:, i], bounds[1][:, i])
        nodes.append(np.clip(wanted, nodes[-1] + step * fastest[0][:, i], nodes[-1] + step * fastest[1][:, i]))
    return np.stack(nodes, axis=1)


def _reached(first: np.ndarray, command: np.ndarray, h: np.ndarray, lag: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """What a first-order machine reaches at the nodes, and its mean in each interval (see ocp.lag_residual)."""
    reached = [first]
    for i, step in enumerate(h):
        rate = (command[:, i + 1] - command[:, i]) / step
        decay = np.where(lag > 0, np.exp(-step / np.maximum(lag, 1e-6)), 0.0)
        settled = command[:, i + 1] - rate * lag
        reached.append(settled + (reached[-1] - command[:, i] + rate * lag) * decay)
    nodes = np.stack(reached, axis=1)
    mean = (command[:, :-1] + command[:, 1:]) / 2 - lag[:, None] * np.diff(nodes, axis=1) / h
    return nodes, mean
