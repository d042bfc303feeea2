# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where the robots are and what they have reached: measured poses joined with what they were sent."""

from __future__ import annotations

from collections.abc import Mapping

import attrs
import numpy as np

from . import se2
from .fleet import Fleet
from .history import CommandHistory, Planned
from .messages import PoseSample
from .motion import drive, lags
from .settings import Poses

_SUBSTEP = 0.025  # seconds; fine against every response lag that matters
# How much less a model of first order knows after a second: metres, radians, and the part of the asked speed
# that a machine really reaches (it changes when wheels slip or a machine is held up).
_DRIFT = np.array([0.02, 0.02, 0.01, 0.25])
# A machine that is held up shows in innovations of one sign. Their running mean, in standard deviations, is
# 0.5 for noise alone; three times that is taken for a change of the factor, which then is looked for afresh.
_RUNNING = 0.4
_ONE_SIDED = 1.5
_AFRESH = 0.3
_LONGER = 0.25  # the same running mean over longer, for what is told rather than followed: 0.38 for noise alone
# A factor this far from 1, and by so many deviations, is no noise (fault-free rehearsals stay between 0.78 and 1.2, or
# within 1.6 deviations).
_HELD_UP, _RUNS_ON = 0.75, 1.3
_SURE = 2.0
_LONGEST = 30.0  # seconds over which anything is predicted: who was not heard of for so long is somewhere
_FRESH = 0.15  # seconds; up to this age an estimate is as good as the margin of the plan takes it to be
_SLOWLY = 0.08  # part of the newest in the running mean of squared innovations
_WIDEST = 400.0  # the most by which one pose counts there, in variances
_HANGS = 3.0  # times the noise of a position that a robot must have driven while its pose repeats exactly
_ROLLS = 0.05  # m/s from which a robot's pose must change
_TELLING = 0.2  # m/s from which a machine's factor may change as fast as _DRIFT says
_FACTOR_DOUBT = 0.08  # a speed factor nearer to 1 than this is taken for noise


@attrs.frozen(eq=False)
class Estimate:
    """N robots at one moment.

    Attributes:
        states: shape (N, 7), in the order of problem.STATES, headings unwrapped; NaN for robots never heard of.
        speed_factor: part of its expected speed that each robot reaches, shape (N,).
        age: seconds since the last believed pose of each robot, shape (N,), inf for none.
        jumped: robots whose last pose lay further than max_jump from where it was expected.
        growth: by how much a footprint must grow for doubt about where its robot is, beyond the usual noise, while
            no pose comes, shape (N,), metres.
        scatter: how much the poses scatter, in multiples of what the settings say, shape (N,).
        repeats: how far each robot must have driven while its pose repeats exactly, shape (N,), metres; 0 for one
            whose poses count. Poses that repeat so are no news of where it is.
        held_up: robots that surely do not reach the speed that they are told, shape (N,) of bool; runs_on: that
            surely exceed it.
        astray: how steadily each robot moves aside or turns otherwise than told, or moves at all when told to stand,
            shape (N,), in standard deviations.
    """

    states: np.ndarray
    speed_factor: np.ndarray
    age: np.ndarray
    jumped: tuple[str, ...] = ()
    growth: np.ndarray = attrs.field(factory=lambda: np.zeros(0))
    scatter: np.ndarray = attrs.field(factory=lambda: np.zeros(0))
    repeats: np.ndarray = attrs.field(factory=lambda: np.zeros(0))
    held_up: np.ndarray = attrs.field(factory=lambda: np.zeros(0, dtype=bool))
    runs_on: np.ndarray = attrs.field(factory=lambda: np.zeros(0, dtype=bool))
    astray: np.ndarray = attrs.field(factory=lambda: np.zeros(0))


class Observer:
    """An extended Kalman filter for each robot over (x, y, heading, speed factor), all robots at once.

    The motion model is the planner's own: commands take effect after a delay and are reached with a
    first-order lag. (Filter: Thrun, Burgard & Fox, *Probabilistic Robotics*, 2005, ch. 3, from memory.)

    How noisy poses really are is told by how much innovations change from one to the next, which a machine that is held
    up, and so innovates one way, hardly alters (mean square successive difference: von Neumann et al., Annals of
    Mathematical Statistics 12, 1941, from memory). Poses noisier than the settings say are trusted so much less.
    """

    def __init__(self, fleet: Fleet, settings: Poses, history: CommandHistory) -> None:
        count = len(fleet)
        self._fleet, self._settings, self._history = fleet, settings, history
        self._lags = lags(fleet)
        self._mean = np.full((count, 4), np.nan)
        self._cov = np.zeros((count, 4, 4))
        self._stamp = np.full(count, -np.inf)
        self._reached = np.zeros((count, 2))  # speed, curvature, before the speed factor
        self._one_sided = np.zeros(count)  # running mean of innovations along the heading, in standard deviations
        self._astray = np.zeros((count, 3))  # of those ahead while it is to stand, aside, and of the heading
        self.loose: frozenset[str] = frozenset()  # not under command: each pose tells afresh where they are
        self._squared = np.ones(count)  # running mean of squared innovations, each relative to its variance
        self._innovation = np.zeros((count, 3))  # the last one
        self._rough = np.ones((count, 2))  # variances of position and heading, in those of the settings
        self._newest = np.full((count, 3), np.nan)  # the last pose that came
        self._repeats = np.zeros(count)  # metres driven since a pose that repeats exactly
        self._hangs = np.zeros(count, dtype=bool)

    def configure(self, fleet: Fleet, settings: Poses) -> None:
        """New limits or noise; what is known about the robots stays."""
        self._fleet, self._settings = fleet, settings
        self._lags = lags(fleet)

    def grow(self, fleet: Fleet) -> None:
        """Room for robots that come last from now on; nothing is known of them yet."""
        fresh = Observer(fleet, self._settings, self._history)
        known = len(self._fleet)
        for name in (
            "_mean", "_cov", "_stamp", "_reached", "_one_sided", "_astray", "_squared", "_innovation", "_rough",
            "_newest", "_repeats", "_hangs",
        ):
            getattr(fresh, name)[:known] = getattr(self, name)
            setattr(self, name, getattr(fresh, name))
        self.configure(fleet, self._settings)

    def shift(self, by: float) -> None:
        """The clock was set: what was seen was seen so many seconds later by it."""
        self._stamp = self._stamp + by

    def observe(self, poses: Mapping[str, PoseSample], planned: Planned | None) -> tuple[str, ...]:
        """Take in newer poses; returns the names of robots that jumped (they start afresh where they are)."""
        fresh = [
            (k, poses[name]) for k, name in enumerate(self._fleet.names)
            if name in poses and poses[name].stamp > self._stamp[k] + 1e-9
        ]
        anew = [not np.isfinite(self._stamp[k]) or self._fleet.names[k] in self.loose for k, _ in fresh]
        first = [each for each, afresh in zip(fresh, anew) if afresh]
        later = [each for each, afresh in zip(fresh, anew) if not afresh]
        for k, pose in first:
            self._restart(k, pose)
        if not later:
            return ()
        which = np.array([k for k, _ in later])
        measured = np.array([[pose.x, pose.y, pose.heading] for _, pose in later])
        stamps = np.array([pose.stamp for _, pose in later])
        new = self._is_news(which, measured, stamps, planned)
        later, which, measured, stamps = [each for each, is_new in zip(later, new) if is_new], *(
            part[new] for part in (which, measured, stamps)
        )
        if not later:
            return ()
        self._propagate(which, stamps, planned)
        jumps = self._correct(which, measured)
        for place in np.flatnonzero(jumps):
            self._restart(*later[place], keep_motion=True)
        return tuple(self._fleet.names[k] for k in which[jumps])

    def _is_news(
        self, which: np.ndarray, measured: np.ndarray, stamps: np.ndarray, planned: Planned | None
    ) -> np.ndarray:
        """Which poses tell something: those that change, or of a robot that need not have moved, shape (n,) of bool."""
        repeated = (measured == self._newest[which]).all(axis=1)
        self._newest[which] = measured
        if not repeated.any():
            self._repeats[which], self._hangs[which] = 0.0, False
            return ~repeated
        mean, reached, way = self._predict(which, stamps, planned)
        driven = np.linalg.norm(way, axis=1) / np.maximum(mean[:, 3], 0.05)
        far = self._repeats[which] + driven
        hangs = repeated & (far > _HANGS * self._settings.noise_xy) & (np.abs(reached[:, 0]) > _ROLLS)
        self._hangs[which] = hangs
        # What hangs is counted from the last pose that was taken in, so nothing is added up for it.
        self._repeats[which] = np.where(hangs, self._repeats[which], np.where(repeated, far, 0.0))
        return ~hangs

    def estimate(self, now: float, planned: Planned | None) -> Estimate:
        """Predicted over to a moment, without changing what is known."""
        known = np.flatnonzero(np.isfinite(self._stamp) & np.isfinite(now))
        count = len(self._fleet)
        states = np.full((count, 7), np.nan)
        factor = np.ones(count)
        if len(known):
            to = np.full(len(known), now)
            mean, reached, _ = self._predict(known, to, planned)
            factor[known] = _doubted(mean[:, 3])
            commands = self._history.in_effect(np.full((count, 1), now), planned)[known, 0]
            states[known, :3] = mean[:, :3]
            states[known, 3], states[known, 4] = reached[:, 1], reached[:, 0] * factor[known]
            states[known, 5], states[known, 6] = commands[:, 1], commands[:, 0]
        growth = self._growth(now, states[:, 4])
        repeats = np.where(self._hangs, np.maximum(self._repeats, _HANGS * self._settings.noise_xy), 0.0)
        raw, doubt = np.nan_to_num(self._mean[:, 3], nan=1.0), np.sqrt(self._cov[:, 3, 3])
        held_up = (raw < _HELD_UP) & (1.0 - raw > _SURE * doubt)
        runs_on = (raw > _RUNS_ON) & (raw - 1.0 > _SURE * doubt)
        return Estimate(
            states, factor, now - self._stamp, (), growth, np.sqrt(self._squared), repeats, held_up, runs_on,
            np.abs(self._astray).max(axis=1, initial=0.0),
        )

    def _growth(self, now: float, speed: np.ndarray) -> np.ndarray:
        """Two standard deviations of where a robot is, less those of a fresh estimate, shape (N,), metres."""
        age = np.where(np.isfinite(self._stamp), np.clip(now - self._stamp - _FRESH, 0.0, _LONGEST), 0.0)
        drifted = _DRIFT[0] ** 2 * age + (np.sqrt(self._cov[:, 3, 3]) * np.nan_to_num(speed) * age) ** 2
        doubt = np.sqrt(np.maximum(self._cov[:, 0, 0], self._cov[:, 1, 1]))
        return 2.0 * np.sqrt(drifted) + 2.0 * np.maximum(doubt - self._settings.noise_xy, 0.0)

    def _restart(self, k: int, pose: PoseSample, keep_motion: bool = False) -> None:
        heading = pose.heading
        if np.isfinite(self._mean[k, 2]):
            heading = self._mean[k, 2] + float(se2.wrap(pose.heading - self._mean[k, 2]))
        factor = self._mean[k, 3] if keep_motion else 1.0
        self._mean[k] = [pose.x, pose.y, heading, factor]
        self._cov[k] = np.diag(np.append(np.diag(self._noise()), 0.05**2))
        self._newest[k], self._innovation[k] = (pose.x, pose.y, pose.heading), 0.0
        self._repeats[k], self._hangs[k], self._astray[k] = 0.0, False, 0.0
        self._stamp[k] = pose.stamp
        if not keep_motion:
            self._reached[k] = 0.0

    def _noise(self) -> np.ndarray:
        """Covariance of a pose as the settings say, shape (3, 3)."""
        s = self._settings
        return np.diag([s.noise_xy**2, s.noise_xy**2, np.radians(s.noise_heading_deg) ** 2])

    def _predict(
        self, which: np.ndarray, to: np.ndarray, planned: Planned | None
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Mean (n, 4), reached (n, 2) and the way made (n, 2) at each robot's own moment."""
        span = np.clip(to - self._stamp[which], 0.0, _LONGEST)
        steps = max(1, int(np.ceil(span.max() / _SUBSTEP)))
        h = span / steps
        times = np.zeros((len(self._fleet), steps))
        times[which] = self._stamp[which, None] + h[:, None] * (np.arange(steps) + 0.5)
        commands = self._history.in_effect(times, planned)[which]
        mean = self._mean[which].copy()
        path, reached = drive(mean[:, :3], self._reached[which], commands, h, self._lags[which], mean[:, 3])
        mean[:, :3] = path[:, -1]
        return mean, reached, path[:, -1, :2] - path[:, 0, :2]

    def _propagate(self, which: np.ndarray, to: np.ndarray, planned: Planned | None) -> None:
        before = self._mean[which].copy()
        span = np.clip(to - self._stamp[which], 0.0, _LONGEST)
        mean, reached, way = self._predict(which, to, planned)
        jacobian = np.tile(np.eye(4), (len(which), 1, 1))
        moved = mean - before
        jacobian[:, 0, 2], jacobian[:, 1, 2] = -moved[:, 1], moved[:, 0]
        factor = np.maximum(mean[:, 3], 0.05)
        jacobian[:, 0, 3], jacobian[:, 1, 3] = (way / factor[:, None]).T
        jacobian[:, 2, 3] = moved[:, 2] / factor
        drift = np.diag(_DRIFT**2)[None] * span[:, None, None]
        drift[:, 3, 3] *= np.clip(np.abs(reached[:, 0]) / _TELLING, 0.0, 1.0)  # who stands neither slips nor is held up
        self._cov[which] = jacobian @ self._cov[which] @ np.swapaxes(jacobian, 1, 2) + drift
        self._mean[which], self._reached[which], self._stamp[which] = mean, reached, to

    def _correct(self, which: np.ndarray, measured: np.ndarray) -> np.ndarray:
        """Kalman update; returns which poses lie too far off to be believed, shape (n,) of bool."""
        innovation = measured - self._mean[which, :3]
        innovation[:, 2] = se2.wrap(innovation[:, 2])
        jumps = np.hypot(innovation[:, 0], innovation[:, 1]) > self._settings.max_jump
        noise = self._noise_found(which, innovation)
        cov = self._look_afresh(which, innovation, noise)
        said = np.linalg.inv(cov[:, :3, :3] + self._noise())
        relative = np.einsum("ni,nij,nj->n", innovation, said, innovation) / 3.0
        self._squared[which] += _SLOWLY * (np.minimum(relative, 100.0) - self._squared[which])
        expected = np.linalg.inv(cov[:, :3, :3] + noise)
        gain = cov[:, :, :3] @ expected
        good = ~jumps
        corrected = self._mean[which] + np.einsum("nij,nj->ni", gain, innovation)
        corrected[:, 3] = np.clip(corrected[:, 3], 0.05, 1.5)
        self._mean[which[good]] = corrected[good]
        self._cov[which[good]] = (cov - gain @ cov[:, :3, :])[good]
        return jumps

    def _noise_found(self, which: np.ndarray, innovation: np.ndarray) -> np.ndarray:
        """Covariances of poses: the settings' own, or more where they scatter more, shape (n, 3, 3)."""
        said = self._noise()
        changed = (innovation - self._innovation[which]) ** 2 / (2.0 * np.diag(said))
        self._innovation[which] = innovation
        seen = np.stack([changed[:, :2].mean(axis=1), changed[:, 2]], axis=1)
        self._rough[which] += _SLOWLY * (np.minimum(seen, _WIDEST) - self._rough[which])
        found: np.ndarray = said * np.maximum(self._rough[which][:, [0, 0, 1]], 1.0)[:, None]
        return found

    def _look_afresh(self, which: np.ndarray, innovation: np.ndarray, noise: np.ndarray) -> np.ndarray:
        """Covariances, with more doubt about the factor of robots whose innovations keep one sign, shape (n, 4, 4).

        Args:
            noise: covariances of poses, shape (n, 3, 3).
        """
        cov = self._cov[which].copy()
        s, c, one = np.sin(self._mean[which, 2]), np.cos(self._mean[which, 2]), np.ones(len(which))
        turned = np.stack([c, s, 0 * one, -s, c, 0 * one, 0 * one, 0 * one, one], axis=1).reshape(-1, 3, 3)
        spread = np.einsum("nij,njk,nik->ni", turned, cov[:, :3, :3] + noise, turned)
        scaled = np.einsum("nij,nj->ni", turned, innovation) / np.sqrt(spread)
        self._one_sided[which] += _RUNNING * (scaled[:, 0] - self._one_sided[which])
        rolls = np.abs(self._reached[which, 0]) > _ROLLS
        strange = np.stack([np.where(rolls, 0.0, scaled[:, 0]), scaled[:, 1], scaled[:, 2]], axis=1)
        self._astray[which] += _LONGER * (strange - self._astray[which])
        changed = np.abs(self._one_sided[which]) > _ONE_SIDED
        cov[changed, 3, 3] += _AFRESH**2
        return cov


def _doubted(factor: np.ndarray) -> np.ndarray:
    """The factor, drawn to 1 by what may be noise."""
    off = factor - 1.0
    return 1.0 + np.sign(off) * np.maximum(np.abs(off) - _FACTOR_DOUBT, 0.0)
