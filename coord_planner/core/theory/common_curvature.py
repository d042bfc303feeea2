# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One curvature profile for the whole fleet: a first guess, and a plan of last resort for any number of robots.

Definition: of all curvature profiles that, driven by every robot at once, miss the asked ends by the least sum of
squares (positions and headings each), the one of least effort. When all turn alike they all see the same displacement
and turning from their own starts, so the least sum of squares is where these are the means of the asked ones: a
problem of one robot, whatever the size of the fleet. It is the limit of the coupled problem for strong coupling where
the ends permit a common curvature.
"""

from __future__ import annotations

import numpy as np

from ...errors import SolveError
from .classical import ClassicalProblem
from .coarse import minimise
from .search import resampled, shapes

_SEARCHED = 32  # intervals on which the shape is chosen; a finer profile starts from it
_SHORTENED = (1.0, 0.99, 0.97, 0.94, 0.9, 0.8, 0.6)


def common_curvature(starts: np.ndarray, ends: np.ndarray, duration: float, intervals: int,
                     speed: float = 1.0) -> np.ndarray:
    """Curvature on each interval, shape (intervals,), 1/m.

    Where the way is too short for the mean displacement and turning, the displacement is shortened, by 1% at
    first, until it fits: the fleet then goes about as far as it can. Nothing is limited: ask the profile for its
    largest curvature.

    Args:
        starts, ends: (N, 3) x, y, heading in m, m, rad, headings unwrapped; NaN in ends where free.
        duration: s. intervals: of equal time. speed: m/s, above 0.

    Raises:
        ValueError: shapes or numbers that cannot be used.
        SolveError: no profile was found, however much the displacement was shortened.
    """
    starts, ends = np.atleast_2d(np.asarray(starts, float)), np.atleast_2d(np.asarray(ends, float))
    length = duration * speed
    if starts.shape != ends.shape or starts.shape[1] != 3 or not (0 < length < np.inf) or intervals < 1:
        raise ValueError(f"starts {starts.shape}, ends {ends.shape}, duration {duration:g}, speed {speed:g}, "
                         f"intervals {intervals}; allowed: (N, 3) both, all above 0")
    displacement, turning = _means(starts, ends)
    if displacement is None:
        return np.full(intervals, turning / length)
    displacement *= min(1.0, length / max(abs(displacement), 1e-300))
    for share in _SHORTENED:
        end = [share * displacement.real, share * displacement.imag, turning]
        profile = _profile(ClassicalProblem(np.zeros(3), end, np.zeros((1, 1)), 0.0, length), intervals)
        if profile is not None:
            return profile / length
    raise SolveError(f"no common curvature leads towards {abs(displacement):.3g} m from the start with a turn of "
                     f"{np.degrees(turning):.1f} degrees in {length:.3g} m; give the manoeuvre more time or intervals")


def _profile(problem: ClassicalProblem, intervals: int) -> np.ndarray | None:
    try:
        best = shapes(problem, min(intervals, _SEARCHED)).best
    except SolveError:
        return None
    if intervals > _SEARCHED:
        best = minimise(problem, resampled(best.curvature, intervals))
    return best.curvature[0] if best.converged else None


def _means(starts: np.ndarray, ends: np.ndarray) -> tuple[complex | None, float]:
    """Mean asked displacement seen from the starts (None when no position is asked) and mean turning (0 likewise)."""
    moved = (ends[:, 0] - starts[:, 0] + 1j * (ends[:, 1] - starts[:, 1])) * np.exp(-1j * starts[:, 2])
    turns = ends[:, 2] - starts[:, 2]
    placed, headed = ~np.isnan(moved), ~np.isnan(turns)
    turning = float(turns[headed].mean()) if headed.any() else 0.0
    return (complex(moved[placed].mean()) if placed.any() else None), turning
