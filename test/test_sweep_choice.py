# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the rows of a sweep say together: rules, the best, the front, and which parameters matter."""

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import spearmanr

from coord_planner.trial.sweep.choice import best, front, judged
from coord_planner.trial.sweep.measures import MEASURES
from coord_planner.trial.sweep.sensitivity import effects, interval

SPREAD, CLEARANCE = "heading_spread_deg", "min_clearance_m"


def row(setting: int, **figures: Any) -> dict[str, Any]:
    """A rehearsal that went well."""
    return {"setting": setting, "status": "done", "reason": "", "completed": True, "state": "ended", "contacts": 0,
            "limit_violations": 0, CLEARANCE: 1.0, "site_min_clearance_m": 0.85, SPREAD: 2.0, "duration_s": 10.0,
            "effort": 1.0, **figures}


def settings(*rows: dict[str, Any], objective: dict[str, float], within: dict[str, float] | None = None) -> Any:
    return judged(rows, [{"x": n} for n in range(max(each["setting"] for each in rows) + 1)], objective, within or {})


@pytest.mark.parametrize(("fault", "words"), [
    ({"contacts": 1}, "a contact"), ({"limit_violations": 2}, "outside a limit"), ({CLEARANCE: 0.84}, "nearer than"),
    ({"completed": False, "state": "held"}, "not completed, the fleet is held"),
    ({SPREAD: 9.5}, "heading spread above 9"),
    ({"status": "refused", "reason": "too tight"}, "refused: too tight"), ({CLEARANCE: 0.89}, "clearance below 0.9"),
])
def test_one_rehearsal_that_breaks_a_rule_takes_its_setting_out(fault: dict[str, Any], words: str) -> None:
    found = settings(row(0, **{SPREAD: 0.1}), row(0, **{SPREAD: 0.1, **fault}), row(1), objective={SPREAD: 1.0},
                     within={SPREAD: 9.0, CLEARANCE: 0.9} if "0.9" in words or "above" in words else None)
    assert not found[0].keeps and words in found[0].broken[0]
    assert best(found) is found[1]


def test_the_best_is_the_cheapest_on_average_and_clearance_counts_the_other_way() -> None:
    found = settings(row(0, **{SPREAD: 1.0}), row(0, **{SPREAD: 3.0}), row(1, **{SPREAD: 1.9, CLEARANCE: 0.95}),
                     objective={SPREAD: 1.0, CLEARANCE: 10.0})
    assert found[0].objective == pytest.approx(2.0 - 10.0) and found[1].objective == pytest.approx(1.9 - 9.5)
    assert found[0].doubt == pytest.approx(1.0)  # deviation sqrt(2), over sqrt(2)
    assert best(found) is found[0]
    two = (row(0, manoeuvre=name, **{SPREAD: more + n}) for name, more in (("a", 0.0), ("b", 9.0)) for n in (0, 2))
    dearer = settings(*two, objective={SPREAD: 1.0})
    assert dearer[0].doubt == pytest.approx(1 / np.sqrt(2)), "that one manoeuvre costs more is no doubt"
    assert best(settings(row(0, contacts=1), objective={SPREAD: 1.0})) is None


@given(st.lists(st.tuples(st.integers(0, 4), st.integers(0, 4), st.integers(0, 4)), min_size=1, max_size=12))
def test_the_front_holds_what_nobody_beats(figures: list[tuple[int, int, int]]) -> None:
    """The definition (Pareto), pair by pair."""
    names = (SPREAD, "duration_s", CLEARANCE)
    rows = [row(n, **{SPREAD: a, "duration_s": b, CLEARANCE: 1 + c}) for n, (a, b, c) in enumerate(figures)]
    found = front(settings(*rows, objective={SPREAD: 1.0}), names)
    costs = [(a, b, -c) for a, b, c in figures]
    for n, mine in enumerate(costs):
        beaten = any(other != mine and all(x <= y for x, y in zip(other, mine)) for other in costs)
        assert (n in found) == (not beaten)


def judged_curve(outcome: Any, count: int = 40, levels: int = 0) -> Any:
    """Settings along x = 0 .. 1 whose heading spread is a function of x and a number."""
    spread = np.linspace(0.0, 1.0, count)
    if levels:
        spread = np.round(spread * (levels - 1)) / (levels - 1)
    rows = [row(n, **{SPREAD: float(outcome(x, n))}) for n, x in enumerate(spread)]
    found = judged(rows, [{"x": float(x)} for x in spread], {SPREAD: 1.0}, {})
    return effects(found, [SPREAD], {"x": True})[0]


def test_what_matters_and_what_can_be_left_alone() -> None:
    noise = np.random.default_rng(2).normal(size=300)
    rising = judged_curve(lambda x, n: x + 0.1 * noise[n])
    assert rising.verdict == "matters" and rising.low > 0.9 and rising.explained > 0.8
    hump = judged_curve(lambda x, n: (x - 0.5) ** 2 + 0.01 * noise[n])
    assert hump.verdict == "matters" and abs(hump.correlation) < 0.2 and hump.explained > 0.5, "seen without a trend"
    assert judged_curve(lambda _x, n: noise[n], 300, levels=5).verdict == "leave alone"
    assert judged_curve(lambda _x, n: noise[n], 6).verdict == "cannot tell", "six settings say little"
    assert judged_curve(lambda _x, _n: 3.0).verdict == "leave alone"


def test_the_correlation_is_spearmans() -> None:
    """Held against scipy.stats.spearmanr, with ties."""
    values = np.random.default_rng(3).normal(size=40)
    found = judged_curve(lambda x, n: np.round(x + values[n], 1), levels=5)
    x = np.round(np.linspace(0, 1, 40) * 4) / 4
    expected = spearmanr(x, np.round(x + values, 1)).statistic
    assert found.correlation == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize("true", [0.0, 0.5, 0.9])
def test_the_interval_holds_the_true_correlation_in_95_of_100_samples(true: float) -> None:
    """Of a normal pair with correlation rho Spearman's is 6/pi arcsin(rho/2) (Pearson 1907, from memory)."""
    rng = np.random.default_rng(4)
    rho = 2 * math.sin(math.pi * true / 6)
    held = 0
    for _ in range(1000):
        x = rng.normal(size=30)
        y = rho * x + math.sqrt(1 - rho**2) * rng.normal(size=30)
        low, high = interval(float(spearmanr(x, y).statistic), 30)
        held += low <= true <= high
    assert 0.92 <= held / 1000 <= 0.98


def test_values_without_an_order_have_no_correlation_and_may_matter_all_the_same() -> None:
    labels = [{"graph.edges": ("line", "ring")[n % 2]} for n in range(20)]
    rows = [row(n, **{SPREAD: float(n % 2) + 0.01 * n}) for n in range(20)]
    effect = effects(judged(rows, labels, {SPREAD: 1.0}, {}), [SPREAD], {"graph.edges": False})[0]
    assert math.isnan(effect.correlation) and effect.verdict == "matters" and effect.explained > 0.5


def test_every_measure_says_which_way_is_better() -> None:
    assert [name for name, measure in MEASURES.items() if measure.larger_is_better] == [CLEARANCE]
