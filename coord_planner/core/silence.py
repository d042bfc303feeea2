# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Should the planner fall silent: do robots that time out separately, and brake by themselves, stay clear?

Of each other, and of what the site, a strip or a hazard keeps them out of.
"""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from .fence import Fencing
from .fleet import Fleet
from .motion import drive, lags
from .plan import SHORT, closest_along
from .problem import CURVATURE, CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND
from .reference import Reference

_STEP = 0.05  # seconds
_EVERY = 0.25  # seconds of the manoeuvre between the instants that are tried


@attrs.frozen
class Nearing:
    """The worst instant for two robots.

    Attributes:
        instant: seconds of the manoeuvre. clearance: smallest exact clearance until both stand, metres.
        pair: who comes that near.
    """

    instant: float
    clearance: float
    pair: tuple[str, str]


@attrs.frozen
class Entering:
    """The worst instant for a robot and what it is to be kept out of.

    Attributes:
        instant: seconds of the manoeuvre. spare: how much nearer the robot could come until it stands, metres; below
            0 by what is missing. robot, area: their names.
    """

    instant: float
    spare: float
    robot: str
    area: str


@attrs.frozen
class Silence:
    """What would come of the planner's silence at its worst; None where there is nobody, or nothing, to come near."""

    nearing: Optional[Nearing]
    entering: Optional[Entering]

    def unsafe(self, allowed: float) -> Silence:
        """What of it comes too near, None where nothing does. allowed: smallest clearance between robots, metres."""
        near, into = self.nearing, self.entering
        return Silence(
            near if near is not None and near.clearance < allowed - SHORT else None,
            into if into is not None and into.spare < -SHORT else None,
        )


def worst(reference: Reference, fleet: Fleet) -> Silence:
    """Try every quarter of a second of a reference.

    Each robot holds its last command until its own time-out, then brakes at its own rate along its last curvature.
    """
    instants = np.arange(float(reference.plan.times[0]), reference.end + 1e-9, _EVERY)
    paths = _paths(reference, fleet, instants)
    return Silence(_nearing(fleet, instants, paths), _entering(fleet, instants, paths, reference.fencing))


def _nearing(fleet: Fleet, instants: np.ndarray, paths: np.ndarray) -> Optional[Nearing]:
    if len(fleet) < 2:
        return None
    found = [(closest_along(fleet, path), instant) for path, instant in zip(paths, instants)]
    (clearance, pair), instant = min(found, key=lambda entry: entry[0][0])
    return Nearing(float(instant), clearance, (fleet.names[pair[0]], fleet.names[pair[1]]))


def _entering(fleet: Fleet, instants: np.ndarray, paths: np.ndarray, fencing: Fencing) -> Optional[Entering]:
    if not (fencing.pieces or fencing.lines):
        return None
    found = [(fencing.least(fleet, path), instant) for path, instant in zip(paths, instants)]
    (spare, robot, area), instant = min(found, key=lambda entry: entry[0][0])
    return Entering(float(instant), spare, fleet.names[robot], area)


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
