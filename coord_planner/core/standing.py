# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots in the arrays that the manoeuvre is not for: they brake along their way, then stand, and are kept clear of."""

from __future__ import annotations

import attrs
import numpy as np

from .fleet import Fleet
from .manoeuvre.task import COMFORT
from .problem import CURVATURE_COMMAND, SPEED, SPEED_COMMAND, Bounds

_STILL = 5e-3  # m/s


def held(bounds: Bounds, fleet: Fleet, initial: np.ndarray, times: np.ndarray, stands: tuple[int, ...]) -> Bounds:
    """Bounds that bring some robots to a stand: none faster than braking with ease from its speed allows.

    Args:
        initial: shape (N, 7). times: nodes, shape (M + 1,). stands: positions of those robots.
    """
    if not stands:
        return bounds
    rows = list(stands)
    elapsed = (times[1:] - times[0])[None, :]
    speed = initial[rows, SPEED_COMMAND][:, None]
    left = np.maximum(np.abs(speed) - COMFORT * fleet.limit("max_braking")[rows, None] * elapsed, 0.0)
    bend, least, most = bounds.max_curvature.copy(), bounds.min_speed.copy(), bounds.max_speed.copy()
    least[rows], most[rows] = np.where(speed < 0.0, -left, 0.0), np.where(speed > 0.0, left, 0.0)
    # Wheels that stand may stay as they are, also where the others straighten theirs.
    bend[rows] = np.maximum(bend[rows], np.abs(initial[rows, CURVATURE_COMMAND])[:, None])
    return attrs.evolve(bounds, max_curvature=bend, min_speed=least, max_speed=most)


def where_seen(guess: np.ndarray, initial: np.ndarray, stands: tuple[int, ...]) -> np.ndarray:
    """Guessed states, shape (N, K, 7), in which those that stand already stay where they are seen."""
    moving = np.abs(initial[:, [SPEED, SPEED_COMMAND]]).max(axis=1) > _STILL
    seen = guess.copy()
    for k in stands:
        if not moving[k]:
            seen[k] = initial[k]
    return seen
