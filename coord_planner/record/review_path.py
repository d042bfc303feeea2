# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Headings, curvatures and speeds from positions alone: the shape of the way, fitted over its length.

A stamp that is rounded to a second, or a position that is a second old, shifts a pose along the way by metres, but not
aside: over time it would look like accelerations, over the length of the way it does no harm. Forward driving is taken
for granted.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from . import local_fit

_APART = 3.0  # deviations between two points of the way that are kept: standing adds no length
_LONGEST_TIME, _MOST_POINTS = 10.0, 15  # of a window: seconds for the speed; points of the way for its shape


@attrs.frozen
class Way:
    """Along a way of S poses.

    Attributes:
        headings: unwrapped, rad. curvatures: 1/m. speeds: m/s. Each of shape (S,).
        window: length of the window in which speeds were smoothed, seconds. length: of that for the shape, metres.
        rate_sd: deviation of speed times curvature, rad/s. noise: of positions aside of the way, metres.
    """

    headings: np.ndarray
    curvatures: np.ndarray
    speeds: np.ndarray
    window: float
    length: float
    rate_sd: float
    noise: float


def way(times: np.ndarray, places: np.ndarray, part: np.ndarray, rate_noise: float) -> Way:
    """The way through positions of shape (S, 2); parts as in :func:`local_fit.fit`.

    Args:
        rate_noise: the windows are the shortest that bring the noise of the turn rate below it, rad/s.
    """
    noise = aside(places, part)
    kept = _apart(places, part, _APART * noise)
    length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(places[kept], axis=0).T))])
    run = np.interp(times, times[kept], length)
    usual = float(np.median(np.diff(times)))
    window = max(_LONGEST_TIME if noise > 0.0 else 0.0, (local_fit.FEWEST - 1) * usual)
    window = min(window, _window(usual, run, part, window))
    speeds = np.maximum(local_fit.fit(times, run[:, None], part, window)[:, 1, 0], 0.0)
    driving = speeds[speeds > 0.05]
    typical = float(np.median(driving)) if len(driving) else 1.0
    step = float(np.median(np.diff(length))) if len(length) > 1 else 1.0
    reach = _reach(max(step, 1e-6), noise, rate_noise / max(typical, 0.1))
    headings, curvatures = _shape(length, places[kept], part[kept], reach)
    sd = local_fit.bend_sd(noise, reach, max(step, 1e-6))
    return Way(np.interp(run, length, headings), np.interp(run, length, curvatures), speeds, window, reach,
               sd * typical, noise)


def aside(places: np.ndarray, part: np.ndarray) -> float:
    """Deviation of positions aside of the way: from how far each is off the line through its neighbours.

    Half the sum of two neighbours is subtracted, hence sqrt(1.5); 1.4826 as in :func:`turns.deviation`.
    """
    if len(places) < 3:
        return 0.0
    chord, first = places[2:] - places[:-2], places[1:-1] - places[:-2]
    size = np.hypot(*chord.T)
    steps = np.hypot(*np.diff(places, axis=0).T)
    moved, same = np.minimum(steps[1:], steps[:-1]) > 0, np.diff(part) == 0
    whole = same[1:] & same[:-1] & moved & (size > 1e-9)
    if not whole.any():
        return 0.0
    off = np.abs(first[:, 0] * chord[:, 1] - first[:, 1] * chord[:, 0])[whole] / size[whole]
    return float(1.4826 * np.median(off) / math.sqrt(1.5))


def _apart(places: np.ndarray, part: np.ndarray, least: float) -> np.ndarray:
    """Numbers of points that make the way: so far apart, the first of each part, and none that is a detour.

    A point is a detour where the way through it is twice as long as past it: no vehicle turns like that within a step.
    """
    kept: list[int] = []
    for number in range(len(places)):
        same = bool(kept) and part[kept[-1]] == part[number]
        while same and len(kept) > 1 and part[kept[-2]] == part[number] and _detour(*places[[*kept[-2:], number]]):
            kept.pop()
        if not same or math.dist(places[number], places[kept[-1]]) > max(least, 1e-6):
            kept.append(number)
    return np.array(kept)


def _detour(first: np.ndarray, second: np.ndarray, third: np.ndarray) -> bool:
    return math.dist(first, second) + math.dist(second, third) > 2.0 * math.dist(first, third)


def _window(usual: float, run: np.ndarray, part: np.ndarray, longest: float) -> float:
    """The shortest window that brings the noise of the speed below a twentieth of it."""
    from .turns import deviation

    steps = np.diff(run)[np.diff(part) == 0]
    speed = float(np.percentile(steps, 75)) / usual if len(steps) else 1.0
    for window in np.geomspace((local_fit.FEWEST - 1) * usual, longest, 8).tolist():
        if local_fit.slope_sd(deviation(run), window, usual) <= 0.05 * max(speed, 0.1):
            return float(window)
    return longest


def _reach(step: float, noise: float, curvature_noise: float) -> float:
    """Length of way over which its shape is fitted, metres."""
    shortest, longest = (local_fit.FEWEST - 1) * step, max(_MOST_POINTS * step, 40.0 * noise)
    for reach in np.geomspace(shortest, max(longest, shortest), 16).tolist():
        if local_fit.bend_sd(noise, reach, step) <= curvature_noise:
            return float(reach)
    return longest


def _shape(length: np.ndarray, places: np.ndarray, part: np.ndarray, reach: float) -> tuple[np.ndarray, np.ndarray]:
    """Unwrapped headings and curvatures at the points of the way.

    NaN curvature where there is no way to speak of: parts of a few points, and poses that go to and fro, where the
    fitted line does not advance by a metre a metre.
    """
    fitted = local_fit.robust_fit(length, places, part, reach)
    slope, bend = fitted[:, 1], fitted[:, 2]
    size = np.maximum(np.hypot(*slope.T), 1e-9)
    known = (size > 0.7) & (np.bincount(part)[part] >= local_fit.FEWEST)
    cross = slope[:, 0] * bend[:, 1] - slope[:, 1] * bend[:, 0]
    headings = np.arctan2(slope[:, 1], slope[:, 0])
    if known.any():
        headings = np.interp(length, length[known], np.unwrap(headings[known]))
    return headings, np.where(known, cross / size**3, math.nan)
