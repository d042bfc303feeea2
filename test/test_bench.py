# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The benchmark: what it prints, what it refuses, and that its figures mean what they say. No time is judged here."""

from __future__ import annotations

import json
from pathlib import Path

import attrs
import numpy as np
import pytest
from test_cli_check import call

from coord_planner.core import solver
from coord_planner.core.fast.solver import TickSolver
from coord_planner.record.bench_figure import figure
from coord_planner.trial import bench
from coord_planner.trial.bench_set import FORMATIONS, GRAPHS, INTERVAL, INTERVALS, SPACINGS, Course, driven

# shared/design.md
PROMISED = {
    "case", "robots", "intervals", "tick_ms_median", "tick_ms_p99", "feedback_ms_median", "plain_ms_median",
    "tuned_ms_median", "ratio", "ratio_tuned", "cost_gap_p95", "cost_gap_max", "violation_max", "peak_rss_mb",
}


@pytest.fixture(scope="module")
def printed(tmp_path_factory: pytest.TempPathFactory) -> tuple[dict, Path]:
    page = tmp_path_factory.mktemp("bench") / "times.html"
    status, output = call("bench", "--robots", "1,2", "--case", "contacts", "--ticks", "8", "--json", "--plot", page)
    assert status == 0
    return json.loads(output[output.index("{") : output.rindex("}") + 1]), page


def test_it_prints_what_it_promises(printed):
    rows = printed[0]["rows"]
    assert [(row["case"], row["robots"], row["intervals"]) for row in rows] == [("contacts", k, 24) for k in (1, 2)]
    for row in rows:
        assert row.keys() >= PROMISED
        assert row["ratio"] == pytest.approx(row["plain_ms_median"] / row["tick_ms_median"])
        assert row["ratio_tuned"] == pytest.approx(row["tuned_ms_median"] / row["tick_ms_median"])
        assert 0 < row["feedback_ms_median"] < row["tick_ms_median"] <= row["tick_ms_p99"]
        assert row["peak_rss_mb"] > 20 and row["compared"] == 8


def test_its_plans_cost_what_the_converged_ones_do(printed):
    for row in printed[0]["rows"]:
        assert row["cost_gap_max"] < 2e-2 and row["violation_max"] < 1e-3


def test_the_page_needs_no_network(printed):
    text = printed[1].read_text(encoding="utf-8")
    assert "IPOPT, default options" in text and 'src="http' not in text


@pytest.mark.parametrize("words, told", [
    (("--robots", "1,0"), "--robots"), (("--robots", "two"), "--robots"), (("--case", "crowded"), "quiet or contacts"),
    (("--ticks", "1"), "--ticks"), (("--plot", Path(__file__) / "x.html", "--robots", "1"), "--plot"),
])
def test_what_cannot_be_meant_is_refused_at_once(words, told):
    status, output = call("bench", *words)
    assert status == 2 and told in output and "Traceback" not in output


def row(case, robots, median):
    return bench.Row(case, robots, 24, median, median, median, 9.0, 9.0, 1.0, 1.0, 0.0, 0.0, 0.0, 1.0, 1, 1)


def test_growth_is_the_exponent_between_two_sizes():
    rows = [row("quiet", 4, 2.0), row("quiet", 64, 32.0), row("contacts", 4, 1.0), row("contacts", 64, 16.0**1.5)]
    assert bench.growth(rows, "quiet") == pytest.approx(1.0) and bench.growth(rows, "contacts") == pytest.approx(1.5)
    assert bench.growth(rows[:1], "quiet") is None
    drawn = figure(rows)
    assert len(drawn.data) == 10
    assert [axis.type for axis in drawn.select_yaxes()] == ["log", "log"]  # shared: one straight, one bent misleads


# The problem set


def test_the_problems_are_those_that_are_described():
    for case, spacing in SPACINGS.items():
        for formation in FORMATIONS:
            for graph in GRAPHS:
                posed = Course(case, 4, formation, graph, seed=1).pose()
                problem = posed.problem
                assert len(problem.times) - 1 == INTERVALS and np.diff(posed.s[1:]) == pytest.approx(INTERVAL)
                assert len(problem.edges) == (3 if graph == "path" else 5)
                apart = np.linalg.norm(np.diff(posed.predicted.initial[:, :2], axis=0), axis=1)
                assert apart == pytest.approx(spacing)
                assert problem.watch.pairs.tolist() == [[0, 1], [0, 2], [1, 2], [1, 3], [2, 3]]  # within 2.5 spacings
                off = problem.initial - posed.predicted.initial
                assert np.abs(off[:, :3]).max() > 0.0 and (off[:, 3:] == 0.0).all()


def test_contacts_are_contacts_and_quiet_is_quiet():
    pressed = {}
    for case in SPACINGS:
        course, fast, active = Course(case, 3, "abreast", "path", seed=2), TickSolver(), 0
        for _ in range(30):
            posed = course.pose()
            plan = fast.solve(posed.problem, posed.start)
            rows = np.abs(plan.multipliers[1])[-3 * 7 - 24 * 3 : -3 * 7]
            active += int((rows > 1e-6).sum())
            course.drive(posed, plan)
        pressed[case] = active
    assert pressed["contacts"] > 30 and pressed["quiet"] == 0


def test_noise_is_fresh_on_every_tick_and_the_same_for_a_seed():
    first, again, other = (Course("quiet", 2, "file", "path", seed=seed) for seed in (1, 1, 2))
    measured = [course.pose().problem.initial for course in (first, again, other)]
    assert (measured[0] == measured[1]).all() and (measured[0] != measured[2]).any()
    assert (first.pose().problem.initial != measured[0]).any()


def test_costs_are_compared_on_controls_that_are_rolled_out():
    posed = Course("contacts", 2, "abreast", "path", seed=3).pose()
    plan = solver.solve(posed.problem, posed.start)
    assert bench.exact_cost(posed.problem, plan.rates) == pytest.approx(plan.cost, rel=1e-4)
    worse = bench.exact_cost(posed.problem, plan.rates + np.array([0.0, 0.05]))
    assert worse > plan.cost * 1.01
    state = posed.problem.initial
    for i, h in enumerate(posed.problem.intervals):
        state = driven(posed.problem.fleet, state, plan.rates[:, i], float(h))
    assert state == pytest.approx(plan.states[:, -1], abs=1e-5)


def test_a_row_holds_nothing_but_what_is_described():
    assert {field.name for field in attrs.fields(bench.Row)} == PROMISED | {"ticks", "compared"}
