"""How a robot moved, from poses that may be noisy and irregular: speed, turn rate and curvature.

Over a window round each moment a parabola is fitted to x, y and heading, with weights that fall off towards its ends
(local regression: Savitzky & Golay, Anal. Chem. 36, 1964, for even spacing; Cleveland, JASA 74, 1979, for uneven; both
from memory). The window is the shortest that brings the noise of the rates below a bound; what was taken is told.
"""

from __future__ import annotations

import math

import attrs
import numpy as np

from .bag_clock import Placed
from .turns import deviation

_FEWEST = 5  # poses in a window
_RATE_NOISE, _SPEED_NOISE = 0.02, 0.05  # rad/s, m/s: what the window is chosen for
_LONGEST = 2.0  # seconds of window, unless poses are so rare that five take longer
_LONGEST_OF_PATHS = 10.0  # seconds; a path's turning needs second derivatives, which take longer
_GAP_FACTOR, _SHORTEST_GAP = 5.0, 0.5  # a gap: so many usual spacings, and so many seconds
_SLOW = 0.1  # part of the usual speed below which a path has no direction
_BLOCK = 20_000  # rows of a fit that are in memory at once


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
    if len(order) < 3:
        return None
    times, values = placed.times[order], table[order, 2:]
    spacing = np.diff(times)
    usual = float(np.median(spacing))
    gaps, jumps = _gaps(times, stretch, usual), _jumps(times, values[:, :2])
    part = np.concatenate([[0], np.cumsum(gaps | jumps)])
    headings = _headings(values, part)
    from_path = headings is None
    headings = np.zeros(len(times)) if headings is None else headings
    noise = float(np.hypot(deviation(values[:, 0]), deviation(values[:, 1])) / math.sqrt(2.0))
    window = _window(usual, noise, deviation(headings), from_path, values)
    fitted = _fit(times, np.column_stack([values[:, :2], headings]), part, window)
    if from_path:
        headings, speeds, rates, rate_sd = _along_path(fitted, noise, window, usual)
    else:
        speeds = fitted[:, 1, 0] * np.cos(headings) + fitted[:, 1, 1] * np.sin(headings)
        rates, rate_sd = fitted[:, 1, 2], _slope_sd(deviation(headings), window, usual)
    told = not from_path and _agrees(values[:, 3:5], speeds, rates)
    if told:
        speeds, rates, rate_sd = values[:, 3], values[:, 4], deviation(values[:, 4])
    ends = np.percentile(spacing, [10, 90])
    return Motion(
        times, np.column_stack([values[:, :2], headings]), fitted[:, 1, :2], speeds, rates, part,
        0.0 if told else window, usual, float(ends[1] / max(ends[0], 1e-9)), rate_sd, noise,
        "path" if from_path else "orientation", "twist" if told else "poses",
        tuple((float(times[n]), float(times[n + 1])) for n in np.flatnonzero(gaps)),
        tuple(float(times[n + 1]) for n in np.flatnonzero(jumps & ~gaps)),
    )


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


def _window(usual: float, noise: float, heading_noise: float, from_path: bool, values: np.ndarray) -> float:
    """Length of the window, seconds: the shortest that keeps the noise of the rates below the bounds."""
    longest = max(_LONGEST_OF_PATHS if from_path else _LONGEST, (_FEWEST - 1) * usual)
    lengths = np.geomspace((_FEWEST - 1) * usual, longest, 12)
    for window in lengths:
        speed_sd = _slope_sd(noise, window, usual)
        if from_path:
            good = _bend_sd(noise, window, usual) <= _RATE_NOISE * max(_usual_speed(values[:, :2], usual), 0.1)
        else:
            good = speed_sd <= _SPEED_NOISE and _slope_sd(heading_noise, window, usual) <= _RATE_NOISE
        if good:
            return float(window)
    return float(longest)


def _usual_speed(places: np.ndarray, usual: float) -> float:
    steps = np.hypot(*np.diff(places, axis=0).T)
    return float(np.percentile(steps, 75)) / usual


def _slope_sd(sd: float, window: float, usual: float) -> float:
    """Deviation of a fitted slope: sd sqrt(12 / n) / window for n even samples (common practice)."""
    return sd * math.sqrt(12.0 / (window / usual + 1.0)) / window


def _bend_sd(sd: float, window: float, usual: float) -> float:
    """Deviation of a fitted second derivative: sd sqrt(720 / n) / window^2 (common practice)."""
    return sd * math.sqrt(720.0 / (window / usual + 1.0)) / window**2


def _fit(times: np.ndarray, values: np.ndarray, part: np.ndarray, window: float) -> np.ndarray:
    """Value and first two derivatives of local parabolas, shape (S, 3, columns).

    Tricube weights over the window, which never reaches across the end of a part.
    """
    out = np.empty((len(times), 3, values.shape[1]))
    for number in range(int(part[-1]) + 1):
        rows = np.flatnonzero(part == number)
        for begin in range(0, len(rows), _BLOCK):
            block = rows[begin:begin + _BLOCK]
            out[block] = _fit_block(times, values, rows, block, window)
    return out


def _fit_block(times: np.ndarray, values: np.ndarray, rows: np.ndarray, block: np.ndarray, window: float) -> np.ndarray:
    own, centres = times[rows], times[block]
    # at least five poses, also where they are rarer than usual
    half = np.full(len(block), window / 2)
    many = min(_FEWEST, len(rows))
    left = np.clip(np.searchsorted(own, centres) - many // 2, 0, len(rows) - many)
    half = np.maximum(half, np.maximum(centres - own[left], own[left + many - 1] - centres)) * (1.0 + 1e-9)
    first = np.searchsorted(own, centres - half)
    count = int((np.searchsorted(own, centres + half, side="right") - first).max())
    index = np.minimum(first[:, None] + np.arange(count), len(rows) - 1)
    away = own[index] - centres[:, None]
    repeated = first[:, None] + np.arange(count) > len(rows) - 1
    scaled = np.where(repeated, 2.0, np.abs(away) / (half * 1.1)[:, None])
    weights = np.clip(1.0 - scaled**3, 0.0, None) ** 3
    x = away / half[:, None]
    powers = np.stack([weights * x**k for k in range(5)]).sum(axis=2)
    normal = np.stack([np.stack([powers[i + k] for k in range(3)], axis=-1) for i in range(3)], axis=1)
    normal += 1e-9 * normal[:, :1, :1] * np.eye(3)  # two or three poses still have a solution
    data = values[rows[index]]
    right = np.stack([(weights[:, :, None] * x[:, :, None] ** k * data).sum(axis=1) for k in range(3)], axis=1)
    solution = np.linalg.solve(normal, right)
    scale = np.stack([np.ones(len(block)), 1.0 / half, 2.0 / half**2], axis=1)
    return solution * scale[:, :, None]


def _along_path(fitted: np.ndarray, noise: float, window: float, usual: float
                ) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """Headings, speeds, turn rates and their deviation from positions alone; forward driving is taken for granted."""
    velocity, bend = fitted[:, 1, :2], fitted[:, 2, :2]
    speeds = np.hypot(*velocity.T)
    typical = float(np.median(speeds[speeds > 0.05])) if (speeds > 0.05).any() else 1.0
    slow = max(0.05, _SLOW * typical, 3.0 * _slope_sd(noise, window, usual))
    known = speeds > slow
    cross = velocity[:, 0] * bend[:, 1] - velocity[:, 1] * bend[:, 0]
    rates = np.where(known, cross / np.where(known, speeds, 1.0) ** 2, 0.0)
    if not known.any():
        return np.zeros(len(speeds)), speeds, rates, 0.0
    headings = np.unwrap(np.arctan2(velocity[known, 1], velocity[known, 0]))
    held = np.interp(np.arange(len(speeds)), np.flatnonzero(known), headings)
    return held, speeds, rates, _bend_sd(noise, window, usual) / typical


def _agrees(told: np.ndarray, speeds: np.ndarray, rates: np.ndarray) -> bool:
    """Whether a twist is there and says what the poses say (many recordings leave it empty)."""
    if not np.isfinite(told).all():
        return False
    off_speed, off_rate = np.abs(told[:, 0] - speeds), np.abs(told[:, 1] - rates)
    turning = np.abs(rates) > 3.0 * _RATE_NOISE
    return bool(
        np.median(off_speed) <= 0.05 + 0.1 * np.median(np.abs(speeds))
        and np.percentile(off_speed, 90) <= 0.1 + 0.2 * np.percentile(np.abs(speeds), 90)
        and (not turning.any() or np.median(off_rate[turning]) <= 0.02 + 0.2 * np.median(np.abs(rates[turning])))
    )
