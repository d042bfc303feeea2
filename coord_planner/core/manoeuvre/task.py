"""A manoeuvre worked out: where everyone ends, on which guessed way, and when."""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np

from ...errors import ArrivedError
from ..dubins import ArcPath
from ..fleet import Fleet, weakest
from ..profile import SpeedProfile, speed_profile
from ..settings import Settings

# Part of a machine's rates that a manoeuvre is laid out with; the rest is left for corrections.
COMFORT = 0.7
_SHORTEST_WAY = 0.01  # metres; a fleet that has less to drive is where it is to end
_SETTLE_LAGS = 5.0  # response lags after which a machine has reached what it was told, to a hundredth


@attrs.frozen(eq=False)
class Task:
    """A manoeuvre worked out for the poses in which it begins. N robots.

    Attributes:
        name: of the manoeuvre.
        ends: shape (N, 3), headings unwrapped; NaN where nothing is asked.
        speed: asked speed of the fleet, m/s. asked: of each robot, shape (N,): who has a shorter way drives slower.
        end_speed: m/s.
        arrival: seconds until the fleet is at its ends as far as commands go, a whole number of intervals.
        duration: seconds until the machines have settled there too, a whole number of intervals; in between
            the manoeuvre goes straight on at the end speed.
        ways: a guessed way for each robot.
        profile: how far along the longest way the fleet is at which of its own seconds; shorter ways in proportion.
        pacing: seconds of the manoeuvre and the seconds of the profile that they stand for, joined by straight lines.
        coupling, alignment: in force for this manoeuvre.
        max_curvature: tightest bend that the manoeuvre asks for, 1/m; inf when only the machines' limits count.
        marks: metres along each robot's way that everybody passes at the same moment, shape (N, K), from 0 to its
            length; in between the ways are driven in proportion.
        turn_rates: neighbours compare turn rates, not turnings: the line turns as one.
        note: what was worked out and was not asked, in words.
        strip: lines that no footprint may cross: a unit normal towards the forbidden side and how far along it, from
            the origin of the frame, a footprint may reach, metres.
        stands: positions of robots that the manoeuvre is not for: they come to a stand and have no end.
    """

    name: str
    ends: np.ndarray
    speed: float
    asked: np.ndarray
    end_speed: float
    arrival: float
    duration: float
    ways: tuple[ArcPath, ...]
    profile: SpeedProfile
    pacing: tuple[tuple[float, ...], tuple[float, ...]]
    coupling: float
    alignment: float
    max_curvature: float = math.inf
    marks: np.ndarray = attrs.Factory(lambda self: ends_as_marks(self.ways), takes_self=True)
    turn_rates: bool = False
    note: str = ""
    strip: tuple[tuple[tuple[float, float], float], ...] = ()
    stands: tuple[int, ...] = ()

    def asked_speed(self, s: np.ndarray) -> np.ndarray:
        """Mean asked speed between seconds of the manoeuvre, shape (K,) -> (N, K - 1): speed up, hold, slow down."""
        passed = self.profile.distance(self.profile_time(s))
        on_way, beyond = np.diff(self._along(passed), axis=1), np.diff(np.maximum(passed - self._whole, 0.0))
        return (on_way + beyond) / np.maximum(np.diff(s), 1e-9)

    def slower(self, stretch: float, settings: Settings) -> Task:
        """The same task from its beginning in ``stretch`` times the time."""
        step = settings.horizon.interval
        arrival = step * math.ceil(self.arrival * stretch / step - 1e-9)
        return attrs.evolve(
            self, arrival=arrival, duration=arrival + self.duration - self.arrival,
            pacing=((0.0, arrival), (0.0, self.profile.duration)),
        )

    def profile_time(self, s: np.ndarray) -> np.ndarray:
        """Seconds of the profile at seconds of the manoeuvre; after arrival both run alike."""
        inside = np.interp(s, *self.pacing)
        return inside + np.maximum(np.asarray(s) - self.arrival, 0.0)

    def guess(self, times: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Guessed poses (N, K, 3), speeds (N, K) and curvatures (N, K) at seconds since the beginning."""
        scale = self.profile.duration / self.arrival
        moments = self.profile_time(times)
        passed, speed = self.profile.distance(moments), self.profile.speed(moments) * scale
        along = self._along(passed)
        poses = np.stack([way.sample(metres) for way, metres in zip(self.ways, along)])
        curvatures = np.stack([_curvatures(way, metres) for way, metres in zip(self.ways, along)])
        return poses, speed * self._shares(passed), curvatures

    @property
    def _whole(self) -> float:
        return float(common_marks(self.marks)[-1])

    def _along(self, passed: np.ndarray) -> np.ndarray:
        """Metres along each way, shape (N, K), where the fleet has passed so many of the profile's."""
        common = common_marks(self.marks)
        return np.stack([np.interp(passed, common, metres) for metres in self.marks])

    def _shares(self, passed: np.ndarray) -> np.ndarray:
        """Speed of each robot as a part of the profile's, shape (N, K)."""
        common = common_marks(self.marks)
        piece = np.clip(np.searchsorted(common, passed, side="right") - 1, 0, len(common) - 2)
        shares: np.ndarray = (np.diff(self.marks, axis=1) / np.maximum(np.diff(common), 1e-9))[:, piece]
        return shares


def ends_as_marks(ways: tuple[ArcPath, ...]) -> np.ndarray:
    """Marks at the beginning and the end of ways, shape (N, 2): everybody arrives at the same moment."""
    return np.array([[0.0, way.length] for way in ways])


def common_marks(marks: np.ndarray) -> np.ndarray:
    """Metres of the profile at marks of shape (N, K): between two of them those of the robot that drives furthest."""
    return np.concatenate([[0.0], np.cumsum(np.diff(marks, axis=1).max(axis=0))])


def lay_out(
    name: str, fleet: Fleet, settings: Settings, ends: np.ndarray, ways: tuple[ArcPath, ...], *, speed: float,
    end_speed: float, speed_now: float, duration: float, coupling: Optional[float], alignment: Optional[float],
    max_curvature: float = math.inf, marks: Optional[np.ndarray] = None, turn_rates: bool = False, note: str = "",
    strip: tuple[tuple[tuple[float, float], float], ...] = (),
) -> Task:
    """Times and speeds for ways that are known; RefusedError when there is nothing to drive.

    A given duration stretches or squeezes the profile: it is then driven slower or faster than asked.
    """
    marks = ends_as_marks(ways) if marks is None else marks
    longest = float(common_marks(marks)[-1])
    if longest < _SHORTEST_WAY:
        raise ArrivedError(f"{name}: every robot is where it is to end already", "ask for something else")
    profile = speed_profile(
        longest, speed_now, speed, end_speed,
        COMFORT * weakest(fleet.limit("max_acceleration")), COMFORT * weakest(fleet.limit("max_braking")),
    )
    step = settings.horizon.interval
    arrival = step * max(4, math.ceil((duration or profile.duration) / step - 1e-9))
    # Machines that answer late come to rest late; the end holds the whole state.
    slowest = float(np.max(np.maximum(fleet.response("speed_lag"), fleet.response("curvature_lag"))))
    settled = arrival + step * max(1, math.ceil(_SETTLE_LAGS * slowest / step - 1e-9))
    lengths = np.array([way.length for way in ways])
    asked = profile.speeds[1] * np.maximum(lengths / max(longest, 1e-9), 0.1)
    return Task(
        name, ends, speed, asked, end_speed, arrival, settled, ways, profile,
        ((0.0, arrival), (0.0, profile.duration)),
        settings.coupling.strength if coupling is None else coupling,
        settings.coupling.alignment if alignment is None else alignment,
        max_curvature, marks, turn_rates, note, strip,
    )


def _curvatures(way: ArcPath, along: np.ndarray) -> np.ndarray:
    curvatures = np.array([curvature for curvature, _ in way.segments])
    ends = np.cumsum([length for _, length in way.segments])
    return curvatures[np.minimum(np.searchsorted(ends, along), len(curvatures) - 1)]
