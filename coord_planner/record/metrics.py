# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The figures of a run: the one JSON object that ``simulate --json`` prints and the page tabulates."""

from __future__ import annotations

import math
from enum import Enum
from typing import Any

import numpy as np

from ..core import se2
from ..trial.run import Run
from . import turns
from .adherence import violations
from .nearness import Nearness, nearness


def summary(run: Run, near: Nearness | None = None) -> dict[str, Any]:
    """What happened in a run, as plain JSON values: no NaN, no infinity, None where there is nothing to say.

    Seconds are counted from the beginning of the motion. Keys that hold a figure for each robot name every robot.

    ``contacts``: stretches of time in which two footprints overlapped or touched, over all pairs.
    ``limit_violations``: see :func:`coord_planner.record.adherence.violations`.
    ``heading_spread_max_rad``: largest difference of two robots' heading changes since the beginning, at equal time.
    ``curvature_spread_max_per_m``: largest difference of two robots' true curvatures, at equal time.
    ``turn_onset_s``: None for a robot that does not turn.
    ``heading_change_rad``: from the beginning to the last sample.
    ``end_error_m``, ``end_heading_error_rad``: at the last sample, at least 0; None where no such end was asked.

    Args:
        run: the record. near: its clearances, if they are at hand (they are worked out otherwise).
    """
    near = nearness(run) if near is None else near
    heading_spread, curvature_spread = _spreads(run)
    end_errors, heading_errors = _end_errors(run)
    figures = {
        "completed": bool(run.completed),
        "state": run.state,
        "duration_s": run.ended - run.began,
        "contacts": near.contacts,
        "min_clearance_m": near.smallest,
        "limit_violations": violations(run),
        "heading_spread_max_rad": heading_spread,
        "curvature_spread_max_per_m": curvature_spread,
        "turn_onset_s": _by_robot(run, turn_onsets(run)),
        "heading_change_rad": _by_robot(run, _heading_changes(run)),
        "end_error_m": _by_robot(run, end_errors),
        "end_heading_error_rad": _by_robot(run, heading_errors),
        "warnings": _warnings(run),
        "tick_ms": _tick_times(run.tick_ms),
        "real_time_factor": _real_time_factor(run),
    }
    return {key: plain(value) for key, value in figures.items()}


def plain(value: Any) -> Any:
    """The value in types that strict JSON knows; numbers that are not finite become None."""
    if isinstance(value, Enum):
        return plain(value.value)
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple, np.ndarray)):
        return [plain(item) for item in value]
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        return float(value) if math.isfinite(value) else None
    return value if value is None else str(value)


def turn_onsets(run: Run) -> np.ndarray:
    """When each robot's turn rate first passes a tenth of its largest, and the noise; (N,), NaN for never.

    Seconds since the beginning of the motion, interpolated between samples.
    """
    inside = _inside(run)
    times, rates = run.times[inside] - run.began, (run.speeds * run.curvatures)[:, inside]
    found = [turns.onset(times, rate) for rate in rates]
    return np.array([math.nan if one is None else one.time for one in found])


def _inside(run: Run) -> np.ndarray:
    """Samples between the beginning and the end of the motion, shape (S,), bool; none if it never began."""
    until = run.ended if math.isfinite(run.ended) else math.inf
    return (run.times >= run.began) & (run.times <= until)


def _spreads(run: Run) -> tuple[float, float]:
    inside = _inside(run)
    if not inside.any():
        return math.nan, math.nan
    headings = run.poses[:, inside, 2]
    spreads = np.ptp(headings - headings[:, :1], axis=0), np.ptp(run.curvatures[:, inside], axis=0)
    return float(spreads[0].max()), float(spreads[1].max())


def _heading_changes(run: Run) -> np.ndarray:
    inside = _inside(run)
    if not inside.any():
        return np.full(len(run.fleet), math.nan)
    return run.poses[:, -1, 2] - run.poses[:, int(np.argmax(inside)), 2]


def _end_errors(run: Run) -> tuple[np.ndarray, np.ndarray]:
    """Distance and angle from each asked end at the last sample, each (N,); NaN where none was asked."""
    if not len(run.times):
        unknown = np.full(len(run.fleet), math.nan)
        return unknown, unknown
    off = run.poses[:, -1] - run.end_poses
    return np.hypot(off[:, 0], off[:, 1]), np.abs(se2.wrap(off[:, 2]))


def _by_robot(run: Run, values: np.ndarray) -> dict[str, float]:
    return dict(zip(run.fleet.names, (float(value) for value in values)))


def _warnings(run: Run) -> list[dict[str, Any]]:
    return [
        {"code": caution.code, "robot": caution.subject, "first_s": first - run.began, "last_s": last - run.began,
         "text": caution.text}
        for first, last, caution in run.cautions
    ]


def _tick_times(tick_ms: np.ndarray) -> dict[str, float]:
    if not len(tick_ms):
        return {"median": math.nan, "p99": math.nan, "max": math.nan}
    median, p99, largest = np.percentile(tick_ms, [50, 99, 100])
    return {"median": float(median), "p99": float(p99), "max": float(largest)}


def _real_time_factor(run: Run) -> float:
    if len(run.times) < 2 or run.wall_time <= 0.0:
        return math.nan
    return float(run.times[-1] - run.times[0]) / run.wall_time
