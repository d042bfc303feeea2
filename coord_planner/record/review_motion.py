# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How a robot moved, from poses that may be noisy and irregular: speed, turn rate and curvature.

Over a window round each moment a parabola is fitted to x, y and heading, with weights that fall off towards its ends
(:mod:`local_fit`). The window is the shortest that brings the noise of the rates below a bound; what was taken is told.

Where the orientations say nothing, headings and curvatures come from the shape of the way, fitted over its length
(:mod:`review_path`): stamps that are late or rounded shift a pose along the way, but not aside.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from . import local_fit, review_path
from .bag_clock import Placed
from .turns import deviation

_FEWEST = 5  # poses in a window
_RATE_NOISE, _SPEED_NOISE = 0.01, 0.05  # rad/s, m/s: what the window is chosen for
_RATE_NOISE_OF_PATHS = 0.02  # rad/s; a way's bends are second derivatives, and noisier
_LONGEST = 2.0  # seconds of window, unless poses are so rare that five take longer
_GAP_FACTOR, _SHORTEST_GAP = 5.0, 0.5  # a gap: so many usual spacings, and so many seconds
_SLOW = 0.1  # part of the usual speed below which a curvature means nothing


@attrs.frozen
class Motion:
    """One robot's motion at its own times. S poses.

    Attributes:
        times: seconds, increasing, shape (S,). poses: x, y, heading (unwrapped), shape (S, 3).
        velocity: of x and y, shape (S, 2), m/s. speeds, rates: shape (S,), m/s (backward negative), rad/s.
        part: number of the piece without gaps or jumps that each pose belongs to, shape (S,).
        window: length of the smoothing window, seconds; 0 where nothing was smoothed.
        spacing: usual time between poses, seconds. irregular: 90th over 10th percentile of that time.
        rate_sd: standard deviation of the turn rates, rad/s. position_sd: of positions, metres.
        headings_from, rates_from: ``orientation`` or ``path``; ``twist`` or ``poses``.
        gaps: (from, to) in seconds. jumps: times at which the pose jumped.
        stale: poses that repeated the one before while the robot drove on. strays: poses far off their neighbours. Both
            were left out.
    """

    times: np.ndarray
    poses: np.ndarray
    velocity: np.ndarray
    speeds: np.ndarray
    rates: np.ndarray
    part: np.ndarray
    window: float
    spacing: float
    irregular: float
    rate_sd: float
    position_sd: float
    headings_from: str
    rates_from: str
    gaps: tuple[tuple[float, float], ...]
    jumps: tuple[float, ...]
    stale: int = 0
    strays: int = 0

    @property
    def curvatures(self) -> np.ndarray:
        """Turn rate over speed, 1/m; NaN where the robot is too slow for it to mean anything, shape (S,)."""
        return curvature(self.speeds, self.rates)


def curvature(speeds: np.ndarray, rates: np.ndarray) -> np.ndarray:
    """Turn rate over speed, 1/m; NaN below a tenth of the usual speed (at least 5 cm/s)."""
    moving = np.abs(speeds[np.isfinite(speeds) & (np.abs(np.nan_to_num(speeds)) > 0.05)])
    slow = max(0.05, _SLOW * float(np.median(moving))) if len(moving) else 0.05
    known = np.abs(np.nan_to_num(speeds)) > slow
    return np.where(known, rates / np.where(known, speeds, 1.0), np.nan)


def motion(placed: Placed, table: np.ndarray) -> Motion | None:
    """The motion in a table of poses; None with fewer than three usable ones.

    Args:
        placed: their times. table: received, stamp, x, y, heading, speed, turn rate; shape (S, 7).
    """
    order, stretch = _in_order(placed, table)
    kept, stale, strays = clean(placed.times[order], table[order, 2:4])
    order, stretch = order[kept], stretch[kept]
    if len(order) < 3:
        return None
    times, values = placed.times[order], table[order, 2:]
    spacing = np.diff(times)
    usual = float(np.median(spacing))
    gaps, jumps = _gaps(times, stretch, usual), _jumps(times, values[:, :2])
    part = np.concatenate([[0], np.cumsum(gaps | jumps)])
    headings = _headings(values, part)
    of = _along_path(times, values[:, :2], part) if headings is None else _by_orientation(times, values, headings, part)
    ends = np.percentile(spacing, [10, 90])
    return Motion(
        times, np.column_stack([values[:, :2], of.headings]), of.velocity, of.speeds, of.rates, part,
        of.window, usual, float(ends[1] / max(ends[0], 1e-9)), of.rate_sd, of.position_sd,
        "path" if headings is None else "orientation", "twist" if of.window == 0.0 else "poses",
        tuple((float(times[n]), float(times[n + 1])) for n in np.flatnonzero(gaps)),
        tuple(float(times[n + 1]) for n in np.flatnonzero(jumps & ~gaps)), stale, strays,
    )


@attrs.frozen
class _Worked:
    """What was worked out for the poses of a robot; see Motion."""

    headings: np.ndarray
    velocity: np.ndarray
    speeds: np.ndarray
    rates: np.ndarray
    window: float
    rate_sd: float
    position_sd: float


def _by_orientation(times: np.ndarray, values: np.ndarray, headings: np.ndarray, part: np.ndarray) -> _Worked:
    usual = float(np.median(np.diff(times)))
    noise = float(np.hypot(deviation(values[:, 0]), deviation(values[:, 1])) / math.sqrt(2.0))
    window = _window(usual, noise, deviation(headings))
    fitted = local_fit.fit(times, np.column_stack([values[:, :2], headings]), part, window)
    speeds = fitted[:, 1, 0] * np.cos(headings) + fitted[:, 1, 1] * np.sin(headings)
    rates, rate_sd = fitted[:, 1, 2], local_fit.slope_sd(deviation(headings), window, usual)
    if _agrees(values[:, 3:5], speeds, rates):
        speeds, rates, rate_sd, window = values[:, 3], values[:, 4], deviation(values[:, 4]), 0.0
    return _Worked(headings, fitted[:, 1, :2], speeds, rates, window, rate_sd, noise)


def _along_path(times: np.ndarray, places: np.ndarray, part: np.ndarray) -> _Worked:
    way = review_path.way(times, places, part, _RATE_NOISE_OF_PATHS)
    velocity = way.speeds[:, None] * np.column_stack([np.cos(way.headings), np.sin(way.headings)])
    return _Worked(way.headings, velocity, way.speeds, way.speeds * way.curvatures, way.window, way.rate_sd, way.noise)


def clean(times: np.ndarray, places: np.ndarray) -> tuple[np.ndarray, int, int]:
    """Numbers of the poses that can be believed, and how many were stale and how many strayed."""
    stale = _stale(times, places)
    kept = np.flatnonzero(~stale)
    strays = 0
    for _ in range(3):  # a stray pose hides its neighbours
        astray = _astray(times[kept], places[kept])
        strays += int(astray.sum())
        kept = kept[~astray]
        if not astray.any():
            break
    return kept, int(stale.sum()), strays


def _stale(times: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Positions that repeat the one before to the last digit, although the robot then turns out to have driven on."""
    if len(times) < 3:
        return np.zeros(len(times), dtype=bool)
    steps = np.hypot(*np.diff(places, axis=0).T)
    repeats = np.concatenate([[False], steps == 0.0])
    if not repeats.any() or not (steps > 0.0).any():
        return np.zeros(len(times), dtype=bool)
    fresh = np.flatnonzero(~repeats)
    speeds = np.hypot(*np.diff(places[fresh], axis=0).T) / np.diff(times[fresh]) if len(fresh) > 1 else np.zeros(0)
    drove = np.concatenate([speeds > 0.2 * float(np.median(speeds)), [False]]) if len(speeds) else np.zeros(1, bool)
    return repeats & drove[np.cumsum(~repeats) - 1]


def _astray(times: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Poses far off the line between their neighbours: by the standard of the series, and there and back."""
    if len(times) < 5:
        return np.zeros(len(times), dtype=bool)
    part = ((times[1:-1] - times[:-2]) / (times[2:] - times[:-2]))[:, None]
    chord = places[2:] - places[:-2]
    off = np.hypot(*(places[1:-1] - places[:-2] - part * chord).T)
    limit = np.maximum(0.3 + 8.0 * 1.4826 * float(np.median(off)), np.hypot(*chord.T))
    peak = np.concatenate([[False], (off[1:-1] > off[:-2]) & (off[1:-1] >= off[2:]), [False]])
    return np.concatenate([[False], peak & (off > limit), [False]])


def _in_order(placed: Placed, table: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Usable rows by time, each time once, and the stretches they are in."""
    known = np.flatnonzero(np.isfinite(table[:, 2:4]).all(axis=1) & np.isfinite(placed.times))
    order = known[np.lexsort((placed.times[known], placed.stretch[known]))]
    fresh = np.concatenate([[True], np.diff(placed.times[order]) > 1e-6]) if len(order) else np.zeros(0, dtype=bool)
    return order[fresh], placed.stretch[order[fresh]]


def _gaps(times: np.ndarray, stretch: np.ndarray, usual: float) -> np.ndarray:
    """Between which poses nothing was heard for too long, or time jumped; shape (S - 1,), bool."""
    return (np.diff(times) > max(_GAP_FACTOR * usual, _SHORTEST_GAP)) | (np.diff(stretch) != 0)


def _jumps(times: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Where a localisation corrected itself: faster than anything round it, and by more than 0.3 m; (S - 1,), bool."""
    steps = np.hypot(*np.diff(places, axis=0).T)
    speeds = steps / np.diff(times)
    return (steps > 0.3) & (speeds > 1.0 + 4.0 * float(np.percentile(speeds, 95)))


def _headings(values: np.ndarray, part: np.ndarray) -> np.ndarray | None:
    """Unwrapped headings; None where the orientations say nothing.

    They say nothing where most are no rotation, or where they stay the same while the robot drives in other directions.
    """
    headings = values[:, 2]
    known = np.isfinite(headings)
    if known.mean() < 0.5:
        return None
    headings = np.interp(np.arange(len(headings)), np.flatnonzero(known), np.unwrap(headings[known]))
    if np.ptp(headings) < 1e-9:
        steps = np.diff(values[:, :2], axis=0)[np.diff(part) == 0]
        length = np.hypot(*steps.T)
        moved = length > max(3.0 * float(np.median(length)), 0.02) if len(length) else np.zeros(0, dtype=bool)
        ways = np.arctan2(steps[moved, 1], steps[moved, 0]) - headings[0]
        way = math.hypot(float(np.ptp(values[:, 0])), float(np.ptp(values[:, 1])))
        if way > 1.0 and (not len(ways) or float(np.mean(np.abs(np.sin(ways)))) > 0.1):
            return None
    return headings


def _window(usual: float, noise: float, heading_noise: float) -> float:
    """Length of the window, seconds: the shortest that keeps the noise of the rates below the bounds."""
    longest = max(_LONGEST, (_FEWEST - 1) * usual)
    for window in np.geomspace((_FEWEST - 1) * usual, longest, 12).tolist():
        speed_sd, rate_sd = (local_fit.slope_sd(sd, window, usual) for sd in (noise, heading_noise))
        if speed_sd <= _SPEED_NOISE and rate_sd <= _RATE_NOISE:
            return float(window)
    return float(longest)


def _agrees(told: np.ndarray, speeds: np.ndarray, rates: np.ndarray) -> bool:
    """Whether a twist is there and says what the poses say (many recordings leave it empty)."""
    if not np.isfinite(told).all():
        return False
    off_speed, off_rate = np.abs(told[:, 0] - speeds), np.abs(told[:, 1] - rates)
    turning = np.abs(rates) > 6.0 * _RATE_NOISE
    return bool(
        np.median(off_speed) <= 0.05 + 0.1 * np.median(np.abs(speeds))
        and np.percentile(off_speed, 90) <= 0.1 + 0.2 * np.percentile(np.abs(speeds), 90)
        and (not turning.any() or np.median(off_rate[turning]) <= 0.02 + 0.2 * np.median(np.abs(rates[turning])))
    )
