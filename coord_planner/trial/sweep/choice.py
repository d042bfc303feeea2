# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Figures of each setting over its rehearsals, which settings keep the rules, the best, the trade-off front."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Optional

import attrs
import numpy as np

from .measures import MEASURES

Row = Mapping[str, Any]


@attrs.frozen(eq=False)
class Setting:
    """One choice of the varied values, over all manoeuvres and seeds.

    Attributes:
        number: which. labels: the varied values as tables show them. rows: of its rehearsals.
        mean: of each measure over the rehearsals that were carried out; NaN where there is none.
        worst: the same, the worst of them.
        broken: rules that some rehearsal did not keep, in words; empty: it is within the rules.
        objective: mean price, the less the better; NaN where a priced measure has no value.
        doubt: standard error of that mean, from the spread over the seeds; NaN with one seed.
    """

    number: int
    labels: Mapping[str, Any]
    rows: tuple[Row, ...]
    mean: Mapping[str, float]
    worst: Mapping[str, float]
    broken: tuple[str, ...]
    objective: float
    doubt: float

    @property
    def keeps(self) -> bool:
        """Whether it is within the site's rules and the sweep's own in every rehearsal."""
        return not self.broken and math.isfinite(self.objective)


def judged(
    rows: Sequence[Row], labels: Sequence[Mapping[str, Any]], objective: Mapping[str, float],
    within: Mapping[str, float],
) -> tuple[Setting, ...]:
    """Every setting, in order.

    Args:
        rows: of all rehearsals. labels: of each setting. objective: price of each measure. within: limit of each.
    """
    by_setting: dict[int, list[Row]] = {}
    for row in rows:
        by_setting.setdefault(int(row["setting"]), []).append(row)
    return tuple(
        _judge(number, labels[number], tuple(by_setting.get(number, [])), objective, within)
        for number in range(len(labels))
    )


def best(settings: Iterable[Setting]) -> Optional[Setting]:
    """The setting with the least objective among those that keep the rules; the first of equals."""
    kept = [setting for setting in settings if setting.keeps]
    return min(kept, key=lambda setting: setting.objective) if kept else None


def front(settings: Iterable[Setting], measures: Sequence[str]) -> tuple[int, ...]:
    """Numbers of the settings that keep the rules and that no other such setting beats in all measures (Pareto)."""
    kept = [setting for setting in settings
            if setting.keeps and all(math.isfinite(setting.mean[name]) for name in measures)]
    if not kept or not measures:
        return ()
    costs = np.array([[MEASURES[name].cost(setting.mean[name]) for name in measures] for setting in kept])
    found = []
    for setting, cost in zip(kept, costs):
        beaten = (costs <= cost).all(axis=1) & (costs < cost).any(axis=1)
        if not beaten.any():
            found.append(setting.number)
    return tuple(found)


def price(row: Row, objective: Mapping[str, float]) -> float:
    """What one rehearsal costs; NaN where a priced measure has no value."""
    parts = [weight * MEASURES[name].cost(_number(row.get(name))) for name, weight in objective.items() if weight]
    return float(sum(parts))


def _judge(
    number: int, labels: Mapping[str, Any], rows: tuple[Row, ...], objective: Mapping[str, float],
    within: Mapping[str, float],
) -> Setting:
    done = [row for row in rows if row["status"] == "done"]
    broken = tuple(dict.fromkeys(words for row in rows for words in broken_rules(row, within)))
    prices = [price(row, objective) for row in done]
    return Setting(
        number, labels, rows,
        {name: _mean([_number(row.get(name)) for row in done]) for name in MEASURES},
        {name: _worst([_number(row.get(name)) for row in done], MEASURES[name].larger_is_better) for name in MEASURES},
        broken if rows else ("it was not rehearsed",), _mean(prices), _doubt(done, prices),
    )


def broken_rules(row: Row, within: Mapping[str, float]) -> list[str]:
    """What one rehearsal did not keep, in words without figures, so that equal ones can be told together."""
    if row["status"] != "done":
        return [f"{row['status']}: {row['reason']}"]
    found = []
    if not row["completed"]:
        found.append(f"not completed, the fleet is {row['state']}")
    if row["contacts"]:
        found.append("a contact")
    if row["limit_violations"]:
        found.append("a command outside a limit")
    clearance = row["min_clearance_m"]
    if clearance is not None and clearance < row["site_min_clearance_m"]:
        found.append("nearer than the site allows")
    for name, limit in within.items():
        measure, value = MEASURES[name], row.get(name)
        if value is not None and measure.cost(value) > measure.cost(limit):
            side = "below" if measure.larger_is_better else "above"
            found.append(f"{measure.words} {side} {limit:g} {measure.unit}")
    return found


def _number(value: Any) -> float:
    return math.nan if value is None else float(value)


def _mean(values: Sequence[float] | np.ndarray) -> float:
    return float(np.mean(values)) if len(values) else math.nan


def _doubt(rows: Sequence[Row], prices: Sequence[float]) -> float:
    """Standard error of the mean price; what one manoeuvre costs more than another is no doubt."""
    by_manoeuvre: dict[Any, list[float]] = {}
    for row, each in zip(rows, prices):
        by_manoeuvre.setdefault(row.get("manoeuvre"), []).append(each)
    groups = list(by_manoeuvre.values())
    if not groups or min(map(len, groups)) < 2:
        return math.nan
    return math.sqrt(sum(len(group) * float(np.var(group, ddof=1)) for group in groups)) / len(prices)


def _worst(values: Sequence[float], larger_is_better: bool) -> float:
    if not values:
        return math.nan
    return float(min(values) if larger_is_better else max(values))
