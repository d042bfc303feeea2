# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Simulated machines: what they are sent arrives late, is reached with a lag and is seen through noise.

A simulated machine obeys: it does not clip what it is sent to its limits, so that a planner's error
shows in the run instead of being hidden by the simulation.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Mapping
from typing import TYPE_CHECKING

import attrs
import numpy as np

from ..core import se2
from ..core.fleet import Fleet
from ..core.messages import Command, PoseSample

if TYPE_CHECKING:
    from ..config import Simulation

# Longest arc between two corrections of speed and curvature. The step is of second order: at 1.5 m/s
# and a curvature that changes by 1 1/m in a second, 10 ms leave less than 1e-5 m after ten seconds.
_LONGEST_STEP = 0.01
_SAME_TIME = 1e-9  # seconds; events closer than this are one


@attrs.frozen
class _Motion:
    """Speed and curvature of N robots over one stretch without events, in closed form.

    Speed and curvature each go exponentially from what was reached to what is asked. A robot whose
    command has timed out brakes at a constant rate instead, to a standstill.

    Attributes:
        speed, curvature: at the beginning of the stretch, shape (N,).
        asked_speed, asked_curvature: what they tend to, shape (N,).
        speed_lag, curvature_lag: time constants, shape (N,), seconds; 0 is reached at once.
        braking: shape (N,), bool. brake: m/s^2, shape (N,).
    """

    speed: np.ndarray
    curvature: np.ndarray
    asked_speed: np.ndarray
    asked_curvature: np.ndarray
    speed_lag: np.ndarray
    curvature_lag: np.ndarray
    braking: np.ndarray
    brake: np.ndarray

    def rates(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Speed and curvature after ``t`` seconds, each of shape (N,)."""
        fading = _fading(t, self.speed_lag)
        driven = self.asked_speed + (self.speed - self.asked_speed) * fading
        braked = np.sign(self.speed) * np.maximum(np.abs(self.speed) - self.brake * t, 0.0)
        curvature = self.asked_curvature + (self.curvature - self.asked_curvature) * _fading(t, self.curvature_lag)
        return np.where(self.braking, braked, driven), curvature

    def travel(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Metres driven and radians turned since the beginning, at times of shape (T,): each (N, T)."""
        driven, braked = self._driven(t), self._braked(t)
        braking = self.braking[:, None]
        return np.where(braking, braked[0], driven[0]), np.where(braking, braked[1], driven[1])

    def _driven(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        tv, tk = self.speed_lag[:, None], self.curvature_lag[:, None]
        v, k = self.asked_speed[:, None], self.asked_curvature[:, None]
        dv, dk = self.speed[:, None] - v, self.curvature[:, None] - k
        both = tv * tk / np.where(tv + tk > 0.0, tv + tk, 1.0)
        iv, ik, ivk = _faded(t, tv), _faded(t, tk), _faded(t, both)
        return v * t + dv * iv, v * k * t + v * dk * ik + k * dv * iv + dv * dk * ivk

    def _braked(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        v, tk = self.speed[:, None], self.curvature_lag[:, None]
        slowing = np.sign(v) * self.brake[:, None]
        t = np.minimum(t, np.abs(v) / self.brake[:, None])
        distance = v * t - 0.5 * slowing * t * t
        k = self.asked_curvature[:, None]
        dk = self.curvature[:, None] - k
        ik = _faded(t, tk)
        # the last bracket is the integral of s exp(-s/tk) over 0..t
        return distance, k * distance + dk * (v * ik - slowing * tk * (ik - t * _fading(t, tk)))


def _fading(t: float | np.ndarray, lag: np.ndarray) -> np.ndarray:
    """exp(-t/lag), which for lag 0 is 0 at once."""
    return np.where(lag > 0.0, np.exp(-t / np.where(lag > 0.0, lag, 1.0)), 0.0)


def _faded(t: np.ndarray, lag: np.ndarray) -> np.ndarray:
    """Integral of exp(-s/lag) over 0..t."""
    return np.where(lag > 0.0, -lag * np.expm1(-t / np.where(lag > 0.0, lag, 1.0)), 0.0)


class SimulatedFleet:
    """N machines on one clock. Arrays are in the order of the fleet.

    A command given at ``now`` takes effect ``command_delay`` later. From then on the true speed tends to
    factor * commanded speed and the true curvature to the commanded one, each with its first-order lag.
    When no command has taken effect for a robot's time-out it brakes at its braking rate, steering on to
    the last curvature it was sent, until a new command takes effect. Between commands speed, curvature and
    heading are exact; positions are chains of arcs of at most 10 ms that carry the exact distance and turn.

    Args:
        fleet: the robots; their ``response`` holds unless ``simulation`` says otherwise.
        starts: x, y in metres and heading in radians of each robot; all stand still there.
        simulation: noise, delays and lags; a lag or delay below 0 means the robot's own value.
        timeouts: command time-out of each robot, seconds.
        rng: source of the pose noise.
        time: the clock's first value, seconds.

    Raises:
        KeyError: a robot without a start or a time-out.
    """

    def __init__(self, fleet: Fleet, starts: Mapping[str, tuple[float, float, float]], simulation: Simulation,
                 timeouts: Mapping[str, float], rng: np.random.Generator, time: float = 0.0) -> None:
        count = len(fleet)
        self.names = fleet.names
        self._index = {name: index for index, name in enumerate(fleet.names)}
        self._time = float(time)
        self._poses = np.array([starts[name] for name in fleet.names], dtype=float).reshape(count, 3)
        self._speed, self._curvature = np.zeros(count), np.zeros(count)
        self._asked_speed, self._asked_curvature = np.zeros(count), np.zeros(count)
        self._factor = np.full(count, float(simulation.speed_factor))
        self._healthy = self._factor.copy()
        self._speed_lag = _own_unless(simulation.speed_lag, fleet.response("speed_lag"))
        self._curvature_lag = _own_unless(simulation.curvature_lag, fleet.response("curvature_lag"))
        self._delay = _own_unless(simulation.command_delay, fleet.response("command_delay"))
        self._brake = fleet.limit("max_braking")
        self._timeout = np.array([float(timeouts[name]) for name in fleet.names])
        self._braking = np.zeros(count, dtype=bool)
        self._silent_at = np.full(count, math.inf)
        self._waiting: tuple[deque[tuple[float, Command]], ...] = tuple(deque() for _ in fleet.names)
        self._rng = rng
        self._noise = np.array([
            simulation.pose_noise_xy, simulation.pose_noise_xy, math.radians(simulation.pose_noise_heading_deg)
        ])
        self._pose_delay = float(simulation.pose_delay)
        self._past: deque[tuple[float, np.ndarray]] = deque([(self._time, self._poses)])

    @property
    def time(self) -> float:
        """The simulated clock, seconds."""
        return self._time

    def poses(self) -> np.ndarray:
        """True poses, shape (N, 3), headings unwrapped."""
        return self._poses.copy()

    def speeds(self) -> np.ndarray:
        """True speeds, shape (N,), m/s."""
        return self._speed.copy()

    def curvatures(self) -> np.ndarray:
        """True curvatures, shape (N,), 1/m; a standing robot has one too."""
        return self._curvature.copy()

    def slow(self, name: str, factor: float) -> None:
        """From now on the machine reaches only ``factor`` times the speed that a healthy one would; 1 heals it.

        Raises:
            KeyError: unknown robot. ValueError: a factor below 0 or not finite.
        """
        if not (math.isfinite(factor) and factor >= 0.0):
            raise ValueError(f"speed factor {factor!r} for {name}: it must be a number that is at least 0")
        index = self._index[name]
        self._factor[index] = factor * self._healthy[index]

    def command(self, name: str, command: Command, now: float) -> None:
        """A command sent at ``now``; one that would have had its effect in the past has it at once.

        Raises:
            KeyError: unknown robot. ValueError: a speed or curvature that is not finite.
        """
        if not (math.isfinite(command.speed) and math.isfinite(command.curvature)):
            raise ValueError(f"command {command} for {name}: speed and curvature must be finite")
        index = self._index[name]
        self._waiting[index].append((max(now + self._delay[index], self._time), command))

    def advance(self, to_time: float) -> None:
        """Let the machines run until ``to_time``; an earlier time changes nothing."""
        while True:
            self._take_effect()
            if self._time >= to_time - _SAME_TIME:
                return
            self._run(min(self._next_event(), to_time))

    def measure(self, now: float) -> dict[str, PoseSample]:
        """What localisation tells at ``now``: poses as they were ``pose_delay`` ago, noisy, heading wrapped.

        The clock is advanced to ``now`` if it is behind.
        """
        self.advance(now)
        stamp = now - self._pose_delay
        seen = self._at(stamp) + self._noise * self._rng.standard_normal((len(self.names), 3))
        return {
            name: PoseSample(stamp, float(pose[0]), float(pose[1]), float(se2.wrap(pose[2])))
            for name, pose in zip(self.names, seen)
        }

    def _take_effect(self) -> None:
        """Commands and time-outs that are due."""
        due = self._time + _SAME_TIME
        for index, waiting in enumerate(self._waiting):
            arrived: Command | None = None
            while waiting and waiting[0][0] <= due:
                arrived = waiting.popleft()[1]
            if arrived is not None:
                self._asked_speed[index], self._asked_curvature[index] = arrived.speed, arrived.curvature
                self._braking[index] = False
                self._silent_at[index] = self._time + self._timeout[index]
            elif self._silent_at[index] <= due:
                self._braking[index] = True
                self._silent_at[index] = math.inf

    def _next_event(self) -> float:
        arrivals = (waiting[0][0] for waiting in self._waiting if waiting)
        return min(min(arrivals, default=math.inf), float(self._silent_at.min()))

    def _run(self, until: float) -> None:
        """Move everybody to ``until``; nothing arrives and nothing times out on the way."""
        duration = until - self._time
        motion = _Motion(self._speed, self._curvature, self._factor * self._asked_speed, self._asked_curvature,
                         self._speed_lag, self._curvature_lag, self._braking, self._brake)
        steps = math.ceil(duration / _LONGEST_STEP - 1e-6)
        offsets = np.linspace(0.0, duration, max(steps, 1) + 1)
        distance, turn = motion.travel(offsets)
        track = se2.rollout(self._poses, np.diff(distance, axis=1), np.diff(turn, axis=1))
        if self._pose_delay > 0.0:
            self._remember(self._time + offsets[1:], track)
        self._speed, self._curvature = motion.rates(duration)
        self._poses, self._time = track[:, -1], until

    def _remember(self, times: np.ndarray, track: np.ndarray) -> None:
        self._past.extend((float(time), track[:, step + 1]) for step, time in enumerate(times))
        oldest = float(times[-1]) - self._pose_delay
        while len(self._past) > 2 and self._past[1][0] < oldest:
            self._past.popleft()

    def _at(self, time: float) -> np.ndarray:
        """True poses at a time that lies up to ``pose_delay`` in the past; before the beginning: the start."""
        if self._pose_delay == 0.0:
            return self._poses
        later = next((n for n, (then, _) in enumerate(self._past) if then >= time), len(self._past) - 1)
        if later == 0:
            return self._past[0][1]
        (t0, before), (t1, after) = self._past[later - 1], self._past[later]
        part = min((time - t0) / (t1 - t0), 1.0)
        return before + part * (after - before)


def _own_unless(value: float, own: np.ndarray) -> np.ndarray:
    """The simulation's value for every robot, or with a negative one each robot's own."""
    return own if value < 0.0 else np.full(len(own), float(value))
