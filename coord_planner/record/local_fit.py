# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Local parabolas: value, slope and bend of a noisy, unevenly sampled series.

Local regression: Savitzky & Golay, Anal. Chem. 36, 1964, for even spacing; Cleveland, JASA 74, 1979, for uneven (both
from memory).
"""

from __future__ import annotations

import math

import numpy as np

FEWEST = 5  # samples in a window, also where they are rarer than usual
_BLOCK = 20_000  # rows of a fit that are in memory at once


def slope_sd(sd: float, window: float, usual: float) -> float:
    """Deviation of a fitted slope: sd sqrt(12 / n) / window for n even samples (common practice)."""
    return sd * math.sqrt(12.0 / (window / usual + 1.0)) / window


def bend_sd(sd: float, window: float, usual: float) -> float:
    """Deviation of a fitted second derivative: sd sqrt(720 / n) / window^2 (common practice)."""
    return sd * math.sqrt(720.0 / (window / usual + 1.0)) / window**2


def robust_fit(at: np.ndarray, values: np.ndarray, part: np.ndarray, window: float) -> np.ndarray:
    """As :func:`fit`; samples far off the fit lose their weight (bisquare of six median residuals, Cleveland 1979)."""
    fitted = fit(at, values, part, window)
    for _ in range(2):
        off = np.linalg.norm(values - fitted[:, 0], axis=1)
        scale = 6.0 * float(np.median(off))
        if scale <= 0.0:
            return fitted
        trust = np.clip(1.0 - (off / scale) ** 2, 0.01, None) ** 2
        fitted = fit(at, values, part, window, trust)
    return fitted


def fit(at: np.ndarray, values: np.ndarray, part: np.ndarray, window: float, trust: np.ndarray | None = None
        ) -> np.ndarray:
    """Value and first two derivatives of local parabolas, shape (S, 3, columns).

    Args:
        at: where the values are, increasing within a part, shape (S,). values: shape (S, columns).
        part: number of the part each belongs to, shape (S,), increasing: no window reaches across its ends.
        window: length, in the unit of ``at``; weights fall off towards its ends (tricube).
        trust: weights of the samples beside that, shape (S,); all alike when left out.
    """
    trust = np.ones(len(at)) if trust is None else trust
    out = np.empty((len(at), 3, values.shape[1]))
    for rows in np.split(np.arange(len(at)), np.flatnonzero(np.diff(part)) + 1):
        for begin in range(0, len(rows), _BLOCK):
            block = slice(begin, begin + _BLOCK)
            out[rows[block]] = _fit(at[rows], values[rows], trust[rows], block, window)
    return out


def _fit(at: np.ndarray, values: np.ndarray, trust: np.ndarray, block: slice, window: float) -> np.ndarray:
    """The same for a block of a single part."""
    centres, count = at[block], len(at)
    many = min(FEWEST, count)
    left = np.clip(np.arange(count)[block] - many // 2, 0, count - many)
    half = np.maximum(window / 2, np.maximum(centres - at[left], at[left + many - 1] - centres)) * (1.0 + 1e-9)
    half = np.maximum(half, 1e-9)
    first = np.searchsorted(at, centres - half)
    widest = int((np.searchsorted(at, centres + half, side="right") - first).max())
    index = first[:, None] + np.arange(widest)
    beyond, index = index > count - 1, np.minimum(index, count - 1)
    x = (at[index] - centres[:, None]) / half[:, None]
    # a little wider than the window, so that its outermost samples still count
    weights = np.clip(1.0 - np.where(beyond, 1.0, np.abs(x) / 1.1) ** 3, 0.0, None) ** 3 * trust[index]
    powers = np.stack([(weights * x**k).sum(axis=1) for k in range(5)])
    normal = np.stack([np.stack([powers[i + k] for k in range(3)], axis=-1) for i in range(3)], axis=1)
    normal += 1e-9 * normal[:, :1, :1] * np.eye(3)  # two samples still have a solution
    data = values[index]
    right = np.stack([((weights * x**k)[:, :, None] * data).sum(axis=1) for k in range(3)], axis=1)
    scale = np.stack([np.ones(len(centres)), 1.0 / half, 2.0 / half**2], axis=1)
    return np.linalg.solve(normal, right) * scale[:, :, None]
