# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""An active-set step as active.Held takes it, in parts that see rows flat: limits (A), ends (B), clearances (C).

Between the parts the matrix is made (matrix.py) and commands answer to forces (point.py).
"""

from __future__ import annotations

import numpy as np

from .compiled import inner

_COMPLIANCE = 1e-8
_PASSED = 1e-7
_NO_ROOM = 1e-9


def want(lower, upper, values, missed, clear, of_limits, met_limits, met_ends, met_clear):
    """By how much multipliers change if nothing moves: those of met rows take what is missed, of other limits they go.

    Args:
        met_..: see active.Met.

    Returns:
        changes of limits, ends and clearances; how stiffly each is held.
    """
    limits, ends, apart = np.empty(len(values)), np.empty(len(missed)), np.empty(len(clear))
    stiff_limits, stiff_ends, stiff_clear = np.empty(len(values)), np.empty(len(missed)), np.empty(len(clear))
    for q in range(len(values)):
        bound = upper[q] if met_limits[q] > 0.0 else lower[q]
        limits[q] = -of_limits[q] if met_limits[q] == 0.0 else (values[q] - bound) / _COMPLIANCE
        stiff_limits[q] = abs(met_limits[q]) / _COMPLIANCE
    for q in range(len(missed)):
        ends[q] = missed[q] / _COMPLIANCE if met_ends[q] else 0.0
        stiff_ends[q] = 1.0 / _COMPLIANCE if met_ends[q] else 0.0
    for q in range(len(clear)):
        apart[q] = -clear[q] / _COMPLIANCE if met_clear[q] else 0.0
        stiff_clear[q] = 1.0 / _COMPLIANCE if met_clear[q] else 0.0
    return limits, ends, apart, stiff_limits, stiff_ends, stiff_clear


def settle(
    lower, upper, price, short_price, values, missed, clear, of_limits, of_ends, of_clear, more_limits, more_ends,
    more_clear, moved_limits, moved_ends, moved_clear, met_limits, met_ends, met_clear,
):
    """Which rows are met after a move, and their multipliers: active._met_after.

    Args:
        values, missed, clear: rows after the move. of_..: multipliers before it. more_..: of ``want``. moved_..:
            first-order changes of the rows.

    Returns:
        multipliers and met rows; how many rows changed; cost of what met rows still miss.
    """
    limits, ends, apart = np.empty(len(values)), np.empty(len(missed)), np.empty(len(clear))
    sets, end_sets, clear_sets = np.empty(len(values)), np.empty(len(missed), np.bool_), np.empty(len(clear), np.bool_)
    changed, left_over, m = 0, 0.0, len(short_price)
    for q in range(len(values)):
        was, now = met_limits[q], 0.0
        pushed = of_limits[q] + more_limits[q] + moved_limits[q] / _COMPLIANCE if was != 0.0 else 0.0
        if was == 0.0:
            now = (1.0 if values[q] > upper[q] + _PASSED else 0.0) - (1.0 if values[q] < lower[q] - _PASSED else 0.0)
        elif was * pushed > 0.0 or upper[q] - lower[q] < _NO_ROOM:
            now = was
        sets[q], limits[q] = now, pushed if now != 0.0 else 0.0
        changed += 1 if now != was else 0
    for q in range(len(missed)):
        pushed = of_ends[q] + (more_ends[q] + moved_ends[q] / _COMPLIANCE if met_ends[q] else 0.0)
        side = 1.0 if pushed > 0.0 else -1.0 if pushed < 0.0 else 0.0
        held = abs(pushed) <= price[q] if met_ends[q] else side * missed[q] < -_PASSED
        held = held and price[q] > 0.0
        end_sets[q], ends[q] = held, min(max(pushed, -price[q]), price[q])
        changed += 1 if held != met_ends[q] else 0
        left_over += price[q] * abs(missed[q]) if held else 0.0
    for q in range(len(clear)):
        pushed = of_clear[q] + (more_clear[q] - moved_clear[q] / _COMPLIANCE if met_clear[q] else 0.0)
        held = _touches(met_clear[q], pushed, short_price[q % m], clear[q])
        clear_sets[q], apart[q] = held, min(max(pushed, 0.0), short_price[q % m])
        changed += 1 if held != met_clear[q] else 0
        left_over += max(-clear[q], 0.0) * short_price[q % m] if held else 0.0
    return limits, ends, apart, sets, end_sets, clear_sets, changed, left_over


@inner
def _touches(met, pushed, price, clear):
    if met:
        return pushed >= 0.0 and pushed <= price
    return clear > _PASSED if pushed > 0.0 else clear < -_PASSED
