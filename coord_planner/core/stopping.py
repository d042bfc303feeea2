# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Controlled stops along the planned curves: in step, or each as hard as it may."""

from __future__ import annotations

import attrs
import numpy as np

from .fence import OPEN, Fencing
from .fleet import Fleet
from .motion import drive, lags
from .observer import Estimate
from .plan import closest_along
from .problem import CURVATURE, POSE, SPEED
from .schedule import Schedule

_STEP = 0.05  # seconds
_HARDEST = 0.95  # part of the braking limit that a stop uses; the rest is for rounding and jitter
_LONGEST = 60.0  # seconds
_STANDS = 1e-9  # m/s
_MANNERS = ("in step", "apart")


@attrs.frozen(eq=False)
class Stop:
    """A chosen stop.

    Attributes:
        schedule: commands down to standstill.
        manner: "in step" or "apart".
        clearance: smallest exact clearance predicted on the way, metres. pair: who comes that near.
        spare: smallest distance to spare from what is fenced off, metres, inf where nothing is; who comes that near,
            and to what.
        duration: seconds to standstill of the commands.
    """

    schedule: Schedule
    manner: str
    clearance: float
    pair: tuple[int, int]
    duration: float
    spare: tuple[float, int, str] = (np.inf, -1, "")

    @property
    def nearest(self) -> float:
        """The smaller one of both distances, metres."""
        return min(self.clearance, self.spare[0])


def in_step(schedule: Schedule, at: float, fleet: Fleet) -> Schedule:
    """Everybody's progress along the schedule slows by one common factor, as fast as the weakest brake allows."""
    return _slow_down(schedule, at, fleet)[0]


def apart(schedule: Schedule, at: float, fleet: Fleet) -> Schedule:
    """Each robot slows along its own curve as hard as its own brake allows."""
    return _slow_down(schedule, at, fleet)[1]


def choose(
    schedule: Schedule, at: float, fleet: Fleet, estimate: Estimate, now: float, fencing: Fencing = OPEN
) -> Stop:
    """The stop with the larger predicted clearance, between robots or to keep-outs; in step when both keep the same.

    Args:
        schedule: in effect so far. at: moment from which it can still be changed.
        estimate: of the robots at ``now``. fencing: what is to be kept away from.
    """
    stops = _slow_down(schedule, at, fleet)
    paths = _paths(now, fleet, estimate, schedule, stops)
    found = []
    for stop, path, manner in zip(stops, paths, _MANNERS):
        clearance, pair = closest_along(fleet, path, estimate.growth)
        spare = fencing.least(fleet, path, estimate.growth)
        found.append(Stop(stop, manner, clearance, pair, float(stop.times[-1] - stop.times[0]), spare))
    return found[1] if found[1].nearest > found[0].nearest + 1e-3 else found[0]


def _slow_down(schedule: Schedule, at: float, fleet: Fleet) -> list[Schedule]:
    """Commands along the schedule at a falling rate, down to standstill: in step, and apart."""
    count = len(fleet)
    braking = (_HARDEST * fleet.limit("max_braking") * _STEP)[:, None]  # largest drop of speed in a step
    along, ratio = np.full((count, 2), at), np.ones((count, 2))
    command = schedule.at(along)
    values = [command]
    # A stop goes on past the schedule's end, where the last values hold.
    while np.abs(command[..., 0]).max() > _STANDS and len(values) * _STEP <= _LONGEST:
        speed = np.abs(schedule.at(along + ratio * _STEP)[..., 0])
        slowest = np.maximum(np.abs(command[..., 0]) - braking, 0.0)
        following = np.clip(np.where(speed > _STANDS, slowest / np.maximum(speed, _STANDS), 0.0), 0.0, ratio)
        following[:, 0] = following[:, 0].max()
        along = along + _STEP * (ratio + following) / 2
        there = schedule.at(along)
        speeds = np.sign(there[..., 0]) * np.maximum(following * np.abs(there[..., 0]), slowest)
        command = np.stack([speeds, there[..., 1]], axis=2)
        ratio = following
        values.append(command)
    times, both = at + _STEP * np.arange(len(values)), np.stack(values, axis=1)
    return [_until_standing(Schedule(times, both[:, :, manner])) for manner in range(2)]


def _until_standing(stop: Schedule) -> Schedule:
    """A stop without what comes after everybody's standstill."""
    moving = np.flatnonzero(np.abs(stop.values[..., 0]).max(axis=0) > _STANDS)
    count = 1 if not len(moving) else min(int(moving[-1]) + 2, len(stop.times))
    return Schedule(stop.times[:count], stop.values[:, :count])


def _paths(
    now: float, fleet: Fleet, estimate: Estimate, before: Schedule, stops: list[Schedule]
) -> list[np.ndarray]:
    """Where each stop leads the robots, poses of shape (N, K, 3)."""
    count, states, factor = len(fleet), estimate.states, estimate.speed_factor
    settle = 4.0 * float(lags(fleet).max()) + _STEP
    until = max(float(stop.times[-1]) for stop in stops) + settle
    steps = max(1, int(np.ceil((until - now) / _STEP)))
    h = (until - now) / steps
    moments = np.broadcast_to(now + h * (np.arange(steps) + 0.5), (count, steps))
    early = (moments < stops[0].times[0])[..., None]
    going_on = before.at(moments)
    commands = np.concatenate([np.where(early, going_on, stop.at(moments)) for stop in stops])
    reached = np.stack([states[:, SPEED] / np.maximum(factor, 0.05), states[:, CURVATURE]], axis=1)
    poses, reached, lag = (np.concatenate([part, part]) for part in (states[:, POSE], reached, lags(fleet)))
    path, _ = drive(poses, reached, commands, np.full(2 * count, h), lag, np.concatenate([factor, factor]))
    return [path[:count], path[count:]]
