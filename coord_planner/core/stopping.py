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
    return _slow_down(schedule, at, fleet, together=True)


def slowed(schedule: Schedule, at: float, fleet: Fleet, ratio: float) -> Schedule:
    """Everybody's progress along the schedule slows, in step, to a part of what it was."""
    return _slow_down(schedule, at, fleet, together=True, ratio_kept=ratio)


def apart(schedule: Schedule, at: float, fleet: Fleet) -> Schedule:
    """Each robot slows along its own curve as hard as its own brake allows."""
    return _slow_down(schedule, at, fleet, together=False)


def choose(
    schedule: Schedule, at: float, fleet: Fleet, estimate: Estimate, now: float, fencing: Fencing = OPEN
) -> Stop:
    """The stop with the larger predicted clearance, between robots or to keep-outs; in step when both keep the same.

    Args:
        schedule: in effect so far. at: moment from which it can still be changed.
        estimate: of the robots at ``now``. fencing: what is to be kept away from.
    """
    stops = [
        _predicted(now, fleet, estimate, schedule, manner, make(schedule, at, fleet), fencing)
        for manner, make in (("in step", in_step), ("apart", apart))
    ]
    return stops[1] if stops[1].nearest > stops[0].nearest + 1e-3 else stops[0]


def _slow_down(
    schedule: Schedule, at: float, fleet: Fleet, together: bool, ratio_kept: float = 0.0
) -> Schedule:
    """Commands along the schedule at a falling rate, down to a part of it: to standstill or to the schedule's end."""
    count = len(fleet)
    braking = _HARDEST * fleet.limit("max_braking") * _STEP  # largest drop of speed in a step
    along = np.full(count, at)
    ratio = np.ones(count)
    command = schedule.at(along)
    times, values = [at], [command]
    last = float(schedule.times[-1])
    # A stop goes on past the schedule's end, where the last values hold; who only slows down has come to its end.
    while (
        np.any(np.abs(command[:, 0]) > 1e-9) and times[-1] - at < _LONGEST and (ratio_kept == 0.0 or along.min() < last)
    ):
        ahead = schedule.at(along + ratio * _STEP)
        speed = np.abs(ahead[:, 0])
        least = np.where(speed > 1e-9, (np.abs(command[:, 0]) - braking) / np.maximum(speed, 1e-9), 0.0)
        wanted = np.clip(least, ratio_kept, ratio)
        following = np.full(count, wanted.max()) if together else wanted
        along = along + _STEP * (ratio + following) / 2
        there = schedule.at(along)
        slowest = np.maximum(np.abs(command[:, 0]) - braking, 0.0)
        speeds = np.sign(there[:, 0]) * np.maximum(following * np.abs(there[:, 0]), slowest)
        command = np.stack([speeds, there[:, 1]], axis=1)
        ratio = following
        times.append(times[-1] + _STEP)
        values.append(command)
    return Schedule(np.array(times), np.stack(values, axis=1))


def _predicted(
    now: float, fleet: Fleet, estimate: Estimate, before: Schedule, manner: str, stop: Schedule, fencing: Fencing
) -> Stop:
    states, factor = estimate.states, estimate.speed_factor
    settle = 4.0 * float(lags(fleet).max()) + _STEP
    until = float(stop.times[-1]) + settle
    steps = max(1, int(np.ceil((until - now) / _STEP)))
    h = (until - now) / steps
    moments = np.broadcast_to(now + h * (np.arange(steps) + 0.5), (len(fleet), steps))
    reached = np.stack([states[:, SPEED] / np.maximum(factor, 0.05), states[:, CURVATURE]], axis=1)
    commands = np.where((moments < stop.times[0])[..., None], before.at(moments), stop.at(moments))
    path, _ = drive(states[:, POSE], reached, commands, np.full(len(fleet), h), lags(fleet), factor)
    clearance, pair = closest_along(fleet, path, estimate.growth)
    spare = fencing.least(fleet, path, estimate.growth)
    return Stop(stop, manner, clearance, pair, float(stop.times[-1] - stop.times[0]), spare)
