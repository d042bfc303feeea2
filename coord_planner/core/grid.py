# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Nodes at fixed moments of the manoeuvre: the first interval shrinks, the others stay where they are."""

from __future__ import annotations

import numpy as np

_SHORTEST = 0.2  # of an interval: a shorter first one is joined with the next


def nodes(start: float, step: float, count: int) -> np.ndarray:
    """``count`` + 1 nodes: ``start``, then whole multiples of ``step``, seconds of the manoeuvre."""
    first = int(np.ceil(start / step + _SHORTEST - 1e-9))
    return np.concatenate([[start], step * (first + np.arange(count))])


def until(start: float, end: float, step: float) -> np.ndarray:
    """Nodes from ``start`` to ``end``, which is a whole multiple of ``step``."""
    count = int(round(end / step)) - int(np.ceil(start / step + _SHORTEST - 1e-9)) + 1
    return nodes(start, step, max(count, 1))
