# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A manoeuvre worked out: where everyone ends, on which guessed way, and when."""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np

from ...errors import ArrivedError
from ..drive import AnyDrive
from ..fleet import Fleet
from ..settings import Settings
from .course import Course, as_given
from .driving import COMFORT as COMFORT
from .driving import arriving_together, check_standing, drive_along
from .scene import Laid

_MARKS = 60  # at which what is left of a manoeuvre is passed together
_SHORTEST_WAY = 0.01  # metres; a fleet that has less to drive is where it is to end
_SETTLE_LAGS = 5.0  # response lags after which a machine has reached what it was told, to a hundredth
_LEAST_PART = 0.1  # of the fleet's speed, by which deviations of a robot that hardly drives are priced


@attrs.frozen(eq=False, kw_only=True)
class Task(Course):
    """A manoeuvre worked out for the poses in which it begins. N robots.

    Attributes:
        name: of the manoeuvre.
        speed: asked speed of the fleet, m/s. asked: of each robot, shape (N,): who has a shorter way drives slower.
        end_speed: m/s.
        arrival: seconds until the fleet is at its ends as far as commands go, a whole number of intervals.
        duration: seconds until the machines have settled there too, a whole number of intervals; in between
            the manoeuvre goes straight on at the end speed.
        drives: how fast each robot goes along its way, in seconds of a common clock of their own.
        pacing: seconds of the manoeuvre and the seconds of the drives that they stand for, joined by straight lines.
        coupling, alignment: in force for this manoeuvre. own_coupling, own_alignment: whether they are its own and not
            those of the settings.
        hazard: a point that everybody keeps away from; None when there is none.
        otherwise: another way to do the same, to be tried when this one cannot be kept.
        stands: positions of robots that the manoeuvre is not for: they come to a stand and have no end.
    """

    name: str
    speed: float
    asked: np.ndarray
    end_speed: float
    arrival: float
    duration: float
    drives: tuple[AnyDrive, ...]
    pacing: tuple[tuple[float, ...], tuple[float, ...]]
    coupling: float
    alignment: float
    own_coupling: bool = False
    own_alignment: bool = False
    hazard: Optional[tuple[float, float]] = None
    otherwise: Optional[Task] = None
    stands: tuple[int, ...] = ()

    @property
    def reversing(self) -> np.ndarray:
        """Who drives backward somewhere on its way, shape (N,)."""
        return np.array([bool((drive.gears < 0).any()) for drive in self.drives])

    def asked_speed(self, s: np.ndarray) -> np.ndarray:
        """Mean asked speed between seconds of the manoeuvre, shape (K,) -> (N, K - 1): speed up, hold, slow down.

        Backward speeds are negative.
        """
        moments = self.profile_time(s)
        steps = np.stack([np.diff(drive.advance(moments)) for drive in self.drives])
        return steps / np.maximum(np.diff(s), 1e-9)

    def gears(self, s: np.ndarray) -> np.ndarray:
        """1, -1, or 0 where a robot has to stand, at seconds of the manoeuvre, shape (K,) -> (N, K)."""
        moments = self.profile_time(s)
        return np.stack([drive.gear(moments) for drive in self.drives])

    def directions(self, s: float) -> np.ndarray:
        """1 forward or -1 backward at a second of the manoeuvre, also while a robot stands, shape (N,)."""
        moment = float(self.profile_time(np.array(s)))
        return np.array([drive.direction(moment) for drive in self.drives])

    def passed(self, s: np.ndarray) -> np.ndarray:
        """Metres that whoever drives furthest has driven at seconds of the manoeuvre."""
        moments = self.profile_time(s)
        return np.stack([drive.furthest(moments) for drive in self.drives]).max(axis=0)

    def under(self, settings: Settings) -> Task:
        """The same task under other settings: where the manoeuvre has no coupling of its own, theirs counts."""
        coupling = self.coupling if self.own_coupling else settings.coupling.strength
        return attrs.evolve(
            self, coupling=coupling if self.alike else 0.0,
            alignment=self.alignment if self.own_alignment else settings.coupling.alignment,
        )

    def slower(self, stretch: float, settings: Settings) -> Task:
        """The same task from its beginning in ``stretch`` times the time."""
        return self.stretched(0.0, stretch, settings.horizon.interval)

    def stretched(self, start: float, stretch: float, step: float) -> Task:
        """The same task with what is left of it at second ``start`` in ``stretch`` times the time.

        Args:
            step: arrival is a whole number of these, seconds.
        """
        if start >= self.arrival - 1e-9:  # it only settles
            return self
        arrival = step * math.ceil((start + (self.arrival - start) * stretch) / step - 1e-9)
        moments, passed = np.array(self.pacing)
        left = moments > start + 1e-9
        late = (moments[left] - start) * (arrival - start) / (self.arrival - start)
        pacing = (
            (start, *(start + late).tolist()), (float(self.profile_time(np.array(start))), *passed[left].tolist())
        )
        return attrs.evolve(self, arrival=arrival, duration=arrival + self.duration - self.arrival, pacing=pacing)

    def marks_left(self, start: float) -> Optional[np.ndarray]:
        """Parts of what is left of each way at second ``start`` that are passed together, shape (N, K), for lay_out.

        None where each robot drives at its own times.
        """
        if self.waits is not None or self.reversing.any():
            return None
        moments = np.linspace(float(self.profile_time(np.array(start))), self.driven, _MARKS)
        passed = np.stack([drive.distance(moments) for drive in self.drives])
        passed = passed - passed[:, :1]
        furthest = passed[np.argmax(passed[:, -1])]
        if furthest[-1] < _SHORTEST_WAY:
            return None
        whole = passed[:, -1:]
        return np.where(whole > _SHORTEST_WAY, passed / np.maximum(whole, 1e-9), furthest / furthest[-1])

    @property
    def driven(self) -> float:
        """Seconds of the drives' own clock until all have arrived."""
        return max(drive.duration for drive in self.drives)

    def profile_time(self, s: np.ndarray) -> np.ndarray:
        """Seconds of the profile, that is of the drives, at seconds of the manoeuvre; after arrival both run alike."""
        inside = np.interp(s, *self.pacing)
        return inside + np.maximum(np.asarray(s) - self.arrival, 0.0)

    def _rate(self, s: np.ndarray) -> np.ndarray:
        """Seconds of the profile per second of the manoeuvre until arrival."""
        moments, passed = np.array(self.pacing)
        piece = np.clip(np.searchsorted(moments, s, side="right") - 1, 0, len(moments) - 2)
        return np.asarray((np.diff(passed) / np.maximum(np.diff(moments), 1e-9))[piece])

    def guess(self, times: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Guessed poses (N, K, 3), speeds (N, K) and curvatures (N, K) at seconds since the beginning."""
        moments = self.profile_time(times)
        passed, rate = [drive.distance(moments) for drive in self.drives], self._rate(times)
        poses = np.stack([way.sample(along) for way, along in zip(self.ways, passed)])
        curvatures = np.stack([way.curvature(along) for way, along in zip(self.ways, passed)])
        return poses, np.stack([drive.speed(moments) * rate for drive in self.drives]), curvatures


def lay_out(
    name: str, fleet: Fleet, settings: Settings, laid: Laid, *, speed: float, end_speed: float, speed_now: float,
    coupling: Optional[float], alignment: Optional[float],
) -> Task:
    """Times and speeds for ways that are known; RefusedError when there is nothing to drive.

    A given duration stretches or squeezes the drives: everything is then slower or faster than asked.

    Args:
        speed: asked, m/s; not that of ``laid``.
        coupling, alignment: of the manoeuvre; None where those of the settings count.
    """
    longest = max(way.length for way in laid.ways)
    if longest < _SHORTEST_WAY:
        raise ArrivedError(f"{name}: every robot is where it is to end already", "ask for something else")
    drives: tuple[AnyDrive, ...]
    if laid.waits is None or laid.speeds is None:
        drives = arriving_together(fleet, settings, laid.ways, laid.marks, speed, end_speed, speed_now)
    else:
        drives = tuple(
            drive_along(robot, settings, way, float(top), wait=float(wait), first=speed_now, last=end_speed)
            for robot, way, top, wait in zip(fleet.robots, laid.ways, laid.speeds, laid.waits)
        )
    check_standing(name, fleet, drives, end_speed)
    step = settings.horizon.interval
    driven = max(drive.duration for drive in drives)
    arrival = step * max(4, math.ceil((laid.duration or driven) / step - 1e-9))
    # Machines that answer late come to rest late; the end holds the whole state.
    slowest = float(np.max(np.maximum(fleet.response("speed_lag"), fleet.response("curvature_lag"))))
    settled = arrival + step * max(1, math.ceil(_SETTLE_LAGS * slowest / step - 1e-9))
    full = np.array([drive.full for drive in drives])
    asked = np.maximum(full, max(_LEAST_PART * float(full.max()), 1e-9))
    return Task(
        **as_given(laid), name=name, speed=speed, asked=asked, end_speed=end_speed, arrival=arrival, duration=settled,
        drives=drives, pacing=((0.0, arrival), (0.0, driven)),
        coupling=(settings.coupling.strength if coupling is None else coupling) if laid.alike else 0.0,
        alignment=settings.coupling.alignment if alignment is None else alignment,
        own_coupling=coupling is not None, own_alignment=alignment is not None,
    )
