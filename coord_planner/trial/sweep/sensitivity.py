# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Which parameters matter: rank correlation with intervals, and the share of the spread that a parameter explains."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import attrs
import numpy as np
from scipy.stats import kruskal, norm, rankdata

from .choice import Setting

_CONFIDENCE = 0.95
_FEWEST = 5  # settings, below which nothing is said
_BINS = 5  # of a continuously varied parameter
_CHANCE = 0.01  # of an effect as clear by chance, below which one without a trend is believed
_HARDLY = 0.1  # of the spread of ranks, explained
_LITTLE = 0.3  # size of a rank correlation: less is called little


@attrs.frozen
class Effect:
    """What one parameter does to one measure.

    Attributes:
        parameter, measure: names. settings: how many it rests on.
        correlation: Spearman's rank correlation; NaN for values without an order. low, high: its 95% interval.
        explained: share of the spread of ranks that its values explain, 0 to 1, less what chance would explain.
        verdict: ``matters``, ``leave alone`` or ``cannot tell``.
    """

    parameter: str
    measure: str
    settings: int
    correlation: float
    low: float
    high: float
    explained: float
    verdict: str


def effects(settings: Sequence[Setting], measures: Sequence[str], ordered: Mapping[str, bool]) -> tuple[Effect, ...]:
    """Effect of every varied parameter on every measure, over the settings that were carried out.

    Args:
        ordered: whether larger and smaller mean something, by parameter.
    """
    found = []
    for parameter, has_order in ordered.items():
        for measure in measures:
            pairs = [(setting.labels[parameter], setting.mean[measure]) for setting in settings
                     if parameter in setting.labels and math.isfinite(setting.mean[measure])]
            found.append(_effect(parameter, measure, pairs, has_order))
    return tuple(found)


def _effect(parameter: str, measure: str, pairs: Sequence[tuple[Any, float]], has_order: bool) -> Effect:
    count = len(pairs)
    nothing = (math.nan, math.nan, math.nan)
    if count < _FEWEST or len({value for value, _ in pairs}) < 2:
        return Effect(parameter, measure, count, *nothing, math.nan, "cannot tell")
    outcome = rankdata([value for _, value in pairs])
    if np.ptp(outcome) == 0.0:
        return Effect(parameter, measure, count, 0.0, 0.0, 0.0, 0.0, "leave alone")
    correlation, low, high = nothing
    if has_order:
        correlation = float(np.corrcoef(rankdata([value for value, _ in pairs]), outcome)[0, 1])
        low, high = interval(correlation, count)
    groups = _groups([value for value, _ in pairs], has_order)
    explained, chance = _explained(groups, outcome)
    verdict = _verdict(low, high, explained, chance)
    return Effect(parameter, measure, count, correlation, low, high, explained, verdict)


def interval(correlation: float, count: int) -> tuple[float, float]:
    """95% interval of a rank correlation: Fisher's transform with the variance (1 + r^2/2) / (n - 3).

    Bonett & Wright, *Psychometrika* 65 (2000) 23, from memory.
    """
    half = float(norm.ppf(0.5 + _CONFIDENCE / 2)) * math.sqrt((1 + correlation**2 / 2) / (count - 3))
    centre = math.atanh(min(max(correlation, -1 + 1e-12), 1 - 1e-12))
    return math.tanh(centre - half), math.tanh(centre + half)


def _explained(groups: np.ndarray, outcome: np.ndarray) -> tuple[float, float]:
    """Adjusted share of the variance of ranks between groups (epsilon squared), and how probable it is by chance.

    The test of Kruskal & Wallis (1952), by scipy: unlike a correlation it also sees what rises and falls again.
    """
    count, kinds = len(outcome), len(set(groups))
    if kinds < 2 or count < 2 * kinds:
        return math.nan, math.nan
    chance = float(kruskal(*(outcome[groups == group] for group in np.unique(groups))).pvalue)
    total = float(np.sum((outcome - outcome.mean()) ** 2))
    inside = sum(float(np.sum((outcome[groups == group] - outcome[groups == group].mean()) ** 2))
                 for group in np.unique(groups))
    return max(0.0, 1.0 - inside / (count - kinds) / (total / (count - 1))), chance


def _groups(values: Sequence[Any], has_order: bool) -> np.ndarray:
    kinds = sorted(set(values)) if has_order else list(dict.fromkeys(values))
    if not has_order or len(kinds) <= max(2, len(values) // _BINS):
        return np.array([kinds.index(value) for value in values])
    ranks = rankdata(values)
    return np.minimum((ranks - 1) * _BINS // len(values), _BINS - 1).astype(int)


def _verdict(low: float, high: float, explained: float, chance: float) -> str:
    if low > 0.0 or high < 0.0 or chance < _CHANCE:
        return "matters"
    small = math.isnan(low) or (low > -_LITTLE and high < _LITTLE)
    if small and explained < _HARDLY:
        return "leave alone"
    return "cannot tell"
