# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Should the planner fall silent: do robots that time out separately, and brake by themselves, stay clear?"""

from __future__ import annotations

import attrs
import numpy as np

from .fleet import Fleet
from .motion import drive, lags
from .plan import closest_along
from .problem import CURVATURE, CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND
from .reference import Reference

_STEP = 0.05  # seconds
_EVERY = 0.25  # seconds of the manoeuvre between the instants that are tried


@attrs.frozen
class Silence:
    """The worst instant at which the planner could fall silent.

    Attributes:
        instant: seconds of the manoeuvre. clearance: smallest exact clearance until all stand, metres.
        pair: who comes that near.
    """

    instant: float
    clearance: float
    pair: tuple[str, str]


def worst(reference: Reference, fleet: Fleet) -> Silence | None:
    """Try every quarter of a second of a reference; None for a fleet of one.

    Each robot holds its last command until its own time-out, then brakes at its own rate along its last curvature.
    """
    if len(fleet) < 2:
        return None
    start = float(reference.plan.times[0])
    instants = np.arange(start, reference.end + 1e-9, _EVERY)
    paths = _paths(reference, fleet, instants)
    found = [(closest_along(fleet, path), instant) for path, instant in zip(paths, instants)]
    (clearance, pair), instant = min(found, key=lambda entry: entry[0][0])
    return Silence(float(instant), clearance, (fleet.names[pair[0]], fleet.names[pair[1]]))


def _paths(reference: Reference, fleet: Fleet, instants: np.ndarray) -> np.ndarray:
    """Poses from each instant to standstill, shape (K, N, S, 3)."""
    states = reference.states(instants)  # (N, K, 7)
    count, moments = states.shape[:2]
    timeout = fleet.timeouts()[:, None] + fleet.response("command_delay")[:, None]
    brake = fleet.limit("max_braking")[:, None]
    longest = float((timeout + np.abs(states[:, :, SPEED_COMMAND]) / brake).max()) + 4.0 * float(lags(fleet).max())
    steps = int(np.ceil(longest / _STEP)) + 1
    since = _STEP * (np.arange(steps) + 0.5)
    asked = states[:, :, SPEED_COMMAND, None]
    braked = np.abs(asked) - brake[:, :, None] * np.maximum(since - timeout[:, :, None], 0.0)
    speed = np.sign(asked) * np.maximum(braked, 0.0)
    curvature = np.broadcast_to(states[:, :, CURVATURE_COMMAND, None], speed.shape)
    commands = np.stack([speed, curvature], axis=3).reshape(count * moments, steps, 2)
    flat = states.reshape(count * moments, -1)
    path, _ = drive(
        flat[:, POSE], flat[:, [SPEED, CURVATURE]], commands, np.full(len(flat), _STEP),
        np.repeat(lags(fleet), moments, axis=0), np.ones(len(flat)),
    )
    return np.swapaxes(path.reshape(count, moments, steps + 1, 3), 0, 1)
