# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The table of rules is what the README shows, and every warning defers to the site's own document."""

from __future__ import annotations

from pathlib import Path

import attrs
import pytest

from coord_planner.core import rules
from coord_planner.core.messages import Level
from coord_planner.core.settings import Settings, SiteRules
from coord_planner.core.silence import Entering, Nearing

README = Path(__file__).parent.parent / "README.md"
SETTINGS = Settings(site_rules=SiteRules(reference="the yard's rules, edition 3"))
RAISED = [
    rules.pose_invalid(SETTINGS, "a"),
    rules.pose_old(SETTINGS, "a", 0.3),
    rules.pose_old(SETTINGS, "a", 3.0),
    rules.pose_jumped(SETTINGS, "a"),
    rules.pose_frozen(SETTINGS, "a", 0.1),
    rules.pose_unsteady(SETTINGS, "a", 4.0),
    rules.clock_offset(SETTINGS, "a", 1.0),
    rules.clock_jumped(SETTINGS, -2.0),
    rules.graph_changed(SETTINGS, 3),
    rules.graph_split(attrs.evolve(SETTINGS, coupling=attrs.evolve(SETTINGS.coupling, may_split=True)), [["a"], ["b"]]),
    rules.graph_split(SETTINGS, [["a"], ["b"]]),
    rules.graph_thin(SETTINGS, 0.004),
    rules.next_refused(SETTINGS, "corner", "too tight"),
    rules.clearance_short(SETTINGS, ("a", "b"), 0.4),
    rules.clearance_breached(SETTINGS, ("a", "b"), 0.3),
    rules.keep_out_breached(SETTINGS, "a", "pond", 0.2),
    rules.keep_out_ahead(SETTINGS, "a", "pond", 0.2),
    rules.keep_out_unavoidable(SETTINGS, "a", "pond", 0.2),
    rules.free_way_short(SETTINGS, ("a", "b"), 0.2),
    rules.limit_reached(SETTINGS, "a", "max_curvature", 4.0),
    rules.not_following(SETTINGS, "a", 0.4),
    rules.not_following(SETTINGS, "a", 4.0),
    rules.too_slow(SETTINGS, "a", 0.5),
    rules.too_fast(SETTINGS, "a", 1.4),
    rules.astray(SETTINGS, "a", 2.0),
    rules.not_ready(SETTINGS, "a"),
    rules.silent(SETTINGS, "a"),
    rules.plan_unfinished(SETTINGS, 0.2),
    rules.plan_late(SETTINGS, 0.2),
    rules.common_curvature(SETTINGS, 3.0),
    rules.plan_failed(SETTINGS, "no numbers"),
    rules.plans_missing(SETTINGS, 3.0),
    rules.silence_unsafe(SETTINGS, Nearing(2.0, 0.3, ("a", "b"))),
    rules.silence_unsafe_near(SETTINGS, Entering(2.0, -0.3, "a", "pond")),
    rules.hazard_known(SETTINGS, (3.0, 4.0)),
    rules.hazard_seen(SETTINGS, "a", (3.0, 4.0), 5.0, True),
    rules.hazard_seen(SETTINGS, "a", (3.0, 4.0), 5.0, False),
    rules.other_planner(SETTINGS, "run 7"),
    rules.change_refused(SETTINGS, "too tight"),
    rules.not_joined(SETTINGS, "cart_3", "cart_3 is not ready to be driven"),
]


def test_the_readme_shows_the_table() -> None:
    text = README.read_text(encoding="utf-8")
    for row in rules.TABLE:
        assert f"| `{row.code}` | {row.level.name} | {row.when} | {row.response.value} |" in text


def test_every_row_is_raised_by_something() -> None:
    assert {(caution.code, caution.level) for caution in RAISED} == {(row.code, row.level) for row in rules.TABLE}


@pytest.mark.parametrize("caution", RAISED, ids=lambda caution: f"{caution.code} {caution.level.name}")
def test_a_warning_says_who_what_and_whose_rules_come_first(caution: rules.Caution) -> None:
    assert caution.text.startswith(f"{caution.subject}: " if caution.subject else "")
    assert f"the fleet {rules.response(caution).value}" in caution.text
    assert "the yard's rules, edition 3 and the machines' own protection come first" in caution.text
    assert caution.level is not Level.OK
