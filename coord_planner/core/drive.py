# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One robot's speed along its way: forward and backward stretches with standstills between them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Union

import attrs
import numpy as np

from .profile import SpeedProfile, speed_profile

_SAME = 1e-6  # seconds


@attrs.frozen(eq=False)
class Stretch:
    """A part of a way that is driven in one gear, and how long the robot stands after it.

    Attributes:
        length: metres, negative when driven backward. stand: seconds.
    """

    length: float
    stand: float = 0.0


@attrs.frozen(eq=False)
class Drive:
    """Speed over the seconds of a profile, straight between K moments; the first and last values hold outside.

    Attributes:
        times: shape (K,), seconds, increasing. speeds: shape (K,), m/s, backward negative.
        gears: between the moments, shape (K - 1,): 1 forward, -1 backward, 0 where the robot stands.
    """

    times: np.ndarray
    speeds: np.ndarray
    gears: np.ndarray

    @property
    def duration(self) -> float:
        """Seconds until it has come to its end."""
        return float(self.times[-1])

    @property
    def full(self) -> float:
        """Largest speed either way, m/s."""
        return float(np.abs(self.speeds).max())

    def speed(self, t: np.ndarray) -> np.ndarray:
        """Signed speed at seconds of the profile."""
        return np.interp(t, self.times, self.speeds)

    def distance(self, t: np.ndarray) -> np.ndarray:
        """Metres along the way, backward ones counted positive; on at the last speed after the end."""
        return self._integral(t, np.abs(self.speeds))

    def furthest(self, t: np.ndarray) -> np.ndarray:
        """The same, of whom it is in step with: of itself."""
        return self.distance(t)

    def advance(self, t: np.ndarray) -> np.ndarray:
        """Metres forward less metres backward."""
        return self._integral(t, self.speeds)

    def gear(self, t: np.ndarray) -> np.ndarray:
        """1, -1, or 0 where the robot has to stand, the ends of a standstill included; the last one after the end."""
        t = np.asarray(t, dtype=float)
        piece = np.clip(np.searchsorted(self.times, t + _SAME, side="right") - 1, 0, len(self.gears) - 1)
        found = self.gears[piece]
        for begins, ends in zip(self.times[:-1][self.gears == 0], self.times[1:][self.gears == 0]):
            found = np.where((t > begins - _SAME) & (t < ends + _SAME), 0, found)
        return found

    def direction(self, t: float) -> int:
        """1 or -1: the gear, and while the robot stands the one that it drove in last, or first of all."""
        driven = np.flatnonzero(self.gears)
        if not len(driven):
            return 1
        begun = driven[self.times[driven] <= t + _SAME]
        return int(self.gears[begun[-1] if len(begun) else driven[0]])

    def _integral(self, t: np.ndarray, speeds: np.ndarray) -> np.ndarray:
        inside = np.clip(np.asarray(t, dtype=float), self.times[0], self.times[-1])
        step = np.diff(self.times)
        passed = np.concatenate([[0.0], np.cumsum((speeds[1:] + speeds[:-1]) / 2 * step)])
        piece = np.clip(np.searchsorted(self.times, inside, side="right") - 1, 0, len(step) - 1)
        since, gain = inside - self.times[piece], np.diff(speeds) / step
        along = passed[piece] + speeds[piece] * since + gain[piece] * since**2 / 2
        return along + speeds[-1] * np.maximum(np.asarray(t, dtype=float) - self.times[-1], 0.0)


@attrs.frozen(eq=False)
class InStep:
    """Forward only, along with the others: they share a profile and pass certain marks at the same moments.

    Attributes:
        profile: of whoever drives furthest between two marks.
        common: metres of the profile at the marks, shape (K,). metres: of this robot's way there, shape (K,).
    """

    profile: SpeedProfile
    common: np.ndarray
    metres: np.ndarray
    gears: np.ndarray = attrs.field(factory=lambda: np.ones(1, dtype=int))

    @property
    def duration(self) -> float:
        """Seconds until it has come to its end."""
        return self.profile.duration

    @property
    def full(self) -> float:
        """Mean speed between starting and stopping, m/s."""
        return float(self.profile.speeds[1] * self.metres[-1] / max(self.common[-1], 1e-9))

    def speed(self, t: np.ndarray) -> np.ndarray:
        """Speed at seconds of the profile."""
        passed = self.profile.distance(t)
        piece = np.clip(np.searchsorted(self.common, passed, side="right") - 1, 0, len(self.common) - 2)
        return np.asarray(self.profile.speed(t) * self._shares[piece])

    def distance(self, t: np.ndarray) -> np.ndarray:
        """Metres along the way; beyond its end at the profile's own last speed."""
        passed = self.profile.distance(t)
        return np.interp(passed, self.common, self.metres) + np.maximum(passed - self.common[-1], 0.0)

    def furthest(self, t: np.ndarray) -> np.ndarray:
        """Metres of whoever drives furthest between any two marks."""
        return self.profile.distance(t)

    def advance(self, t: np.ndarray) -> np.ndarray:
        """The same: it never drives backward."""
        return self.distance(t)

    def gear(self, t: np.ndarray) -> np.ndarray:
        """Always 1."""
        return np.ones(np.shape(t), dtype=int)

    def direction(self, _t: float) -> int:
        """Always 1."""
        return 1

    @property
    def _shares(self) -> np.ndarray:
        return np.asarray(np.diff(self.metres) / np.maximum(np.diff(self.common), 1e-9))


AnyDrive = Union[Drive, InStep]


def stretches(segments: Sequence[tuple[float, float]], stand: float) -> list[Stretch]:
    """The stretches of a way, one for each gear, from its segments (curvature, signed length).

    Args:
        stand: seconds for which the robot stands where it changes gear.
    """
    lengths: list[float] = []
    for _, length in segments:
        if lengths and (length == 0.0 or lengths[-1] * length > 0.0):
            lengths[-1] += length
        elif length != 0.0:
            lengths.append(length)
    return [Stretch(length, stand) for length in lengths[:-1]] + [Stretch(length) for length in lengths[-1:]]


def along(
    way: Sequence[Stretch], *, wait: float, first: float, forward: float, backward: float, last: float,
    acceleration: float, braking: float, step: float,
) -> Drive:
    """The quickest drive over stretches; standstills end at whole multiples of ``step``.

    Args:
        wait: seconds until it sets out. first, last: speeds at the beginning and the end, m/s.
        forward, backward: highest speeds, m/s. acceleration, braking: m/s^2. step: seconds.
    """
    times, speeds, gears = [0.0], [first], []

    def stand(seconds: float) -> None:
        until = step * math.ceil((times[-1] + seconds) / step - 1e-9)
        if until > times[-1] + _SAME and seconds > 0.0:
            times.append(until)
            speeds.append(0.0)
            gears.append(0)

    stand(wait)
    for i, stretch in enumerate(way):
        gear, top = (1, forward) if stretch.length >= 0.0 else (-1, backward)
        profile = speed_profile(
            abs(stretch.length), abs(speeds[-1]), top, last if i == len(way) - 1 else 0.0, acceleration, braking
        )
        for duration, speed in zip(profile.durations, (profile.speeds[1], profile.speeds[1], profile.speeds[2])):
            if duration > _SAME:
                times.append(times[-1] + duration)
                speeds.append(gear * speed)
                gears.append(gear)
        stand(stretch.stand)
    if not gears:
        times, speeds, gears = [0.0, step], [last, last], [1]
    return Drive(np.array(times), np.array(speeds), np.array(gears))
