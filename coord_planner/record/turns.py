# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Turns in a record: where they are, when each robot began, how strongly it turned, and how the turn spread.

One set of definitions for rehearsals and recordings. Turn rates in rad/s, anticlockwise positive.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np
from scipy import stats

NOT_TURNING = 1e-3  # rad/s; a robot that never turns faster than this has no turn onset
_TENTH = 0.1
_SLOW_TURNING = 0.02  # rad/s; slower turning belongs to a turn, but makes none
_PAUSE = 1.0  # seconds of going straight within one robot's turn, more where samples are rarer
_APART = 2.0  # seconds after which a robot that begins to turn begins another turn of the fleet
_SMALLEST = 0.15  # rad; headings that stay within less make no turn
_SET_OUT = 10.0  # seconds round the turning in which a standstill belongs to the turn
_MARGIN = 1.0  # seconds that are added to a turn where nobody stands
_SURE = 0.05  # probability by chance below which a difference counts as one


@attrs.frozen
class Onset:
    """When a robot begins to turn.

    Attributes:
        time: when the magnitude of its turn rate first passes ``threshold``, seconds.
        sd: standard deviation of ``time``: of the turn rate over its slope there, and of the sampling.
        threshold: a tenth of the largest, but at least the noise and 1 mrad/s.
        peak: the turn rate of largest magnitude, signed, and its standard deviation ``peak_sd``.
    """

    time: float
    sd: float
    threshold: float
    peak: float
    peak_sd: float


@attrs.frozen
class Span:
    """One turn of the fleet, seconds. ``robots``: rows of those that make it."""

    from_s: float
    to_s: float
    robots: tuple[int, ...]


@attrs.frozen
class Spread:
    """How onsets grow with a distance from where the turn began; distance in hops or metres.

    Attributes:
        delay: seconds for each unit of distance, with its standard deviation ``delay_sd``.
        sure: whether onsets differ by more than the noise, and grow with the distance.
    """

    delay: float
    delay_sd: float
    sure: bool

    @property
    def speed(self) -> float:
        """Units of distance a second; NaN where the onsets do not tell."""
        return 1.0 / self.delay if self.sure else math.nan

    @property
    def speed_sd(self) -> float:
        return self.delay_sd / self.delay**2 if self.sure else math.nan


def deviation(values: np.ndarray) -> float:
    """Standard deviation of what is not smooth in a series.

    The second difference of white noise has sqrt(6) times its deviation; 1.4826 times the median of magnitudes
    estimates a normal deviation without minding outliers (both common practice).
    """
    known = values[np.isfinite(values)]
    if len(known) < 3:
        return 0.0
    return float(1.4826 * np.median(np.abs(np.diff(known, n=2))) / math.sqrt(6.0))


def onset(times: np.ndarray, rates: np.ndarray, sd: float | None = None) -> Onset | None:
    """When a robot begins to turn within a stretch of record; None when it does not turn.

    Args:
        times, rates: shape (S,), seconds and rad/s. sd: deviation of the rates, where it is known better than from
            their roughness (rates that were smoothed are smoother than they are exact).
    """
    if np.isfinite(rates).sum() < 2:
        return None
    rough = deviation(rates) if sd is None else max(sd, deviation(rates))
    sizes = np.abs(rates)
    largest = int(np.nanargmax(sizes))
    threshold = max(_TENTH * sizes[largest], 5.0 * rough, NOT_TURNING)
    if not sizes[largest] > threshold:
        return None
    time, slope, step = _first_passing(times, sizes, threshold)
    return Onset(time, math.hypot(rough / slope if slope > 0 else 0.0, step / math.sqrt(12.0)), threshold,
                 float(rates[largest]), rough)


def _first_passing(times: np.ndarray, values: np.ndarray, threshold: float) -> tuple[float, float, float]:
    """When values first pass the threshold, the slope there, and the spacing of the samples there."""
    after = int(np.argmax(values > threshold))
    if after == 0 or not np.isfinite(values[after - 1]):
        return float(times[after]), 0.0, 0.0
    before, step = values[after - 1], float(times[after] - times[after - 1])
    slope = float(values[after] - before) / step
    return float(times[after - 1] + (threshold - before) / slope), slope, step


def find(times: np.ndarray, rates: np.ndarray, speeds: np.ndarray, sds: Sequence[float]) -> list[Span]:
    """The turns of a fleet. In each of them a robot turns once, with pauses of at most a second.

    A robot turns while its turn rate passes 0.02 rad/s (or a tenth of its largest, if that is less) and the noise; its
    heading has to range over 0.15 rad. The tails belong to it, down to a tenth of its largest turn rate. Robots that
    begin while others turn, or within 2 s after them, turn with them. A turn reaches from the standstill before to the
    standstill after it where the fleet stands within 10 s, else one second beyond the turning.

    Args:
        times: shape (S,). rates, speeds: shape (N, S), NaN where nothing is known. sds: deviations of the rates, (N,).
    """
    episodes = sorted(
        (*episode, row) for row in range(len(rates)) for episode in _episodes(times, rates[row], sds[row])
    )
    groups: list[dict[int, tuple[float, float]]] = []
    for begin, end, row in episodes:
        if groups and row not in groups[-1] and begin <= max(last for _, last in groups[-1].values()) + _APART:
            groups[-1][row] = begin, end
        else:
            groups.append({row: (begin, end)})
    spans = [Span(min(b for b, _ in g.values()), max(e for _, e in g.values()), tuple(sorted(g))) for g in groups]
    return _with_standstills(spans, times, rates, speeds)


def _episodes(times: np.ndarray, rates: np.ndarray, sd: float) -> list[tuple[float, float]]:
    """Stretches in which one robot turns: first and last moment of each."""
    sizes = np.nan_to_num(np.abs(rates))
    floor = max(min(_SLOW_TURNING, _TENTH * float(sizes.max(initial=0.0))), 5.0 * sd, NOT_TURNING)
    turning = np.flatnonzero(sizes > floor)
    if not len(turning):
        return []
    pause = max(_PAUSE, 2.5 * float(np.median(np.diff(times))))  # of rare samples one or two may be missing
    parts = np.split(turning, np.flatnonzero(np.diff(times[turning]) > pause) + 1)
    headings = np.concatenate([[0.0], np.cumsum(np.diff(times) * np.nan_to_num(rates[1:]))])
    whole: list[tuple[int, int]] = []
    for part in parts:
        first, last = _widened(part[0], part[-1], sizes, sd)
        if whole and first <= whole[-1][1]:
            first = whole.pop()[0]
        whole.append((first, last))
    return [(float(times[first]), float(times[last])) for first, last in whole
            if np.ptp(headings[first:last + 1]) >= _SMALLEST]


def _widened(first: int, last: int, sizes: np.ndarray, sd: float) -> tuple[int, int]:
    """A stretch with its tails, down to a tenth of its largest turn rate and one and a half deviations of the noise."""
    low = np.flatnonzero(sizes <= max(_TENTH * float(sizes[first:last + 1].max()), 1.5 * sd))
    before, after = low[low < first], low[low > last]
    return (int(before[-1]) if len(before) else 0), (int(after[0]) if len(after) else len(sizes) - 1)


def _with_standstills(spans: list[Span], times: np.ndarray, rates: np.ndarray, speeds: np.ndarray) -> list[Span]:
    moving = (np.nan_to_num(np.abs(speeds)) > 0.02) | (np.nan_to_num(np.abs(rates)) > _SLOW_TURNING)
    still = times[~moving.any(axis=0)]
    widened = []
    for number, span in enumerate(spans):
        earliest = (spans[number - 1].to_s + span.from_s) / 2 if number else float(times[0])
        latest = (span.to_s + spans[number + 1].from_s) / 2 if number + 1 < len(spans) else float(times[-1])
        before = still[(still <= span.from_s) & (still >= span.from_s - _SET_OUT)]
        after = still[(still >= span.to_s) & (still <= span.to_s + _SET_OUT)]
        begin = float(before[-1]) if len(before) else span.from_s - _MARGIN
        end = float(after[0]) if len(after) else span.to_s + _MARGIN
        widened.append(attrs.evolve(span, from_s=max(begin, min(earliest, span.from_s)),
                                    to_s=min(end, max(latest, span.to_s))))
    return widened


def spread(distances: np.ndarray, onsets: Sequence[Onset]) -> Spread | None:
    """Delay by distance, by weighted least squares; None with fewer than three robots or one distance only.

    Sure only where a chi-square test says that the onsets differ at all, and a one-sided test that they grow with the
    distance, both with less than 5 % chance (common practice).
    """
    if len(onsets) < 3 or np.ptp(distances) <= 0.0:
        return None
    when, sd = np.array([one.time for one in onsets]), np.array([max(one.sd, 1e-6) for one in onsets])
    weights = 1.0 / sd**2
    from_mean = distances - np.average(distances, weights=weights)
    tightness = float((weights * from_mean**2).sum())
    delay = float((weights * from_mean * when).sum()) / tightness
    rest = when - np.average(when, weights=weights) - delay * from_mean
    scatter = math.sqrt(max(float((weights * rest**2).sum()) / max(len(onsets) - 2, 1), 1.0))  # where a line fits badly
    delay_sd = scatter / math.sqrt(tightness)
    grows = delay > 0.0 and float(stats.t.sf(delay / delay_sd, len(onsets) - 2)) < _SURE
    return Spread(delay, delay_sd, differ(onsets) and grows)


def differ(onsets: Sequence[Onset]) -> bool:
    """Whether onsets differ by more than their noise (chi-square test)."""
    if len(onsets) < 2:
        return False
    when, weights = np.array([one.time for one in onsets]), np.array([max(one.sd, 1e-6) for one in onsets]) ** -2.0
    misfit = float((weights * (when - np.average(when, weights=weights)) ** 2).sum())
    return float(stats.chi2.sf(misfit, len(onsets) - 1)) < _SURE
