# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The page of a sweep: what it holds, that it needs nothing else, and that it can be clicked through in a browser."""

import json
import re
from functools import lru_cache
from importlib import resources
from pathlib import Path
from typing import Any

import attrs
import numpy as np
import pytest
from made_up_run import turn
from made_up_sweep import sweep_file
from test_page import References, browser, wait_for  # noqa: F401  browser: a fixture

from coord_planner.record.nearness import nearness
from coord_planner.record.sweep_figures import figures, track, turning
from coord_planner.record.sweep_page import sweep_page, write_sweep_page
from coord_planner.trial.sweep.file import load_sweep
from coord_planner.trial.sweep.outcome import Outcome, outcome
from coord_planner.trial.sweep.plan import points
from coord_planner.trial.sweep.point import Record, given_up

HOSTILE = "</script><img src=x onerror=alert(1)>&amp;"


@lru_cache
def made_up_track(number: int) -> dict[str, Any]:
    """Two carts that turn one after the other, by various times."""
    run = turn(count=2, later=0.05 * (1 + number))
    return track(run, nearness(run).clearance)


def made_up(folder: Path, **changes: Any) -> Outcome:
    """A sweep over coupling and graph whose figures are made up: no rehearsal is run. One point failed."""
    vary = {"coupling.strength": {"log": [0.5, 50], "count": 3}, "graph.edges": {"pair": ["left right"], "alone": []}}
    sweep = load_sweep(sweep_file(folder, **{"vary": vary, "as_shipped": True, **changes}))
    records = []
    for point in points(sweep):
        strength = float(point.flat["coupling.strength"])
        row = {"point": point.number, "setting": point.setting, "key": point.key, **point.labels,
               "manoeuvre": point.manoeuvre, "seed": point.seed,
               "status": "done", "reason": "", "completed": True, "state": "ended", "contacts": 0, "warnings": "",
               "limit_violations": 0, "site_min_clearance_m": 0.6, "min_clearance_m": 1.0 - 0.1 * strength / 50,
               "heading_spread_deg": 10 / (1 + strength) + point.seed, "duration_s": 10 + 0.02 * strength,
               "effort": 1.0 + 0.01 * strength, "disagreement": 0.1, "curvature_spread_per_m": 0.1, "end_error_m": 0.02,
               "end_heading_error_deg": 1.0}
        if point.labels.get("graph.edges") == "alone":
            row |= {"contacts": 1, "heading_spread_deg": row["heading_spread_deg"] + 4.0}
        records.append(Record(point.key, row, made_up_track(point.number % 7)))
    records[-1] = given_up(points(sweep)[-1], HOSTILE)
    return outcome(sweep, records)


def embedded(text: str) -> Any:
    found = re.search(r'<script type="application/json" id="run">(.*?)</script>', text, re.DOTALL)
    assert found
    return json.loads(found.group(1))


def test_effort_and_disagreement_of_two_that_turn_one_after_the_other(tmp_path: Path) -> None:
    """1/2 integral of u'u and of u'Lu, against sums over the run by hand; L = [[1, -1], [-1, 1]] for one link."""
    sweep = load_sweep(sweep_file(tmp_path))
    run = attrs.evolve(turn(count=2), manoeuvre="corner")
    effort, disagreement = turning(run, attrs.evolve(sweep.base, fleet=run.fleet, enabled=frozenset(run.fleet.names),
                                                     edges=run.edges))
    u = run.speeds * run.curvatures / 1.2
    assert effort == pytest.approx(0.025 * np.sum(u**2), rel=1e-3)
    assert disagreement == pytest.approx(0.025 * np.sum((u[0] - u[1]) ** 2), rel=1e-3)


def test_a_row_has_the_figures_of_simulate_and_a_track_with_the_nearest_moment(tmp_path: Path) -> None:
    sweep = load_sweep(sweep_file(tmp_path))
    run = attrs.evolve(turn(count=2, slowed="mower_2"), manoeuvre="corner")
    base = attrs.evolve(sweep.base, fleet=run.fleet, enabled=frozenset(run.fleet.names), edges=run.edges)
    row, kept = figures(run, base)
    smallest = nearness(run).smallest
    assert row["min_clearance_m"] == pytest.approx(smallest)
    assert min(kept["clearance"]) == pytest.approx(smallest, abs=1e-3)
    assert row["warnings"] == "clearance small, robot not following" and len(kept["times"]) in (61, 62)
    assert np.shape(kept["x"]) == (2, len(kept["times"])) and kept["edges"] == [[0, 1]]


def test_page_asks_for_nothing_outside_itself(tmp_path: Path) -> None:
    parser = References()
    parser.feed(sweep_page(made_up(tmp_path), "best: file"))
    assert parser.found == ["data:,"]
    assert not {"iframe", "object", "embed", "base"} & set(parser.tags)
    for part in ("sweep_page.html", "sweep_page.css", "sweep_page.js"):
        text = resources.files("coord_planner.record").joinpath(part).read_text()
        assert not re.search(r"https?://(?!www\.w3\.org/2000/svg)|url\(|@import|fetch\(|XMLHttpRequest", text), part


def test_page_holds_the_sweep_and_texts_from_outside_stay_in_their_place(tmp_path: Path) -> None:
    found = made_up(tmp_path)
    text = sweep_page(found, HOSTILE)
    held = embedded(text)
    assert "<img" not in text.split("<script>")[0]
    assert held["rows"][-1]["reason"] == HOSTILE == held["best_text"] and held["rows"][-1]["track"] is None
    assert len(held["tracks"]) == len(held["rows"]) - 1 and held["shipped"] == 0
    assert [a["logarithmic"] for a in held["axes"]] == [True, False]
    best = held["settings"][held["best"]]
    assert best["keeps"] and best["labels"] == {"coupling.strength": 50.0, "graph.edges": "pair"}
    assert best["objective"] == pytest.approx(10 / 51 + 1.5 + 0.1 * 11.0)


def test_many_rehearsals_keep_their_nearest_moment_on_fewer_poses(tmp_path: Path) -> None:
    found = made_up(tmp_path, seeds=list(range(150)), vary={"coupling.strength": {"log": [0.5, 50], "count": 6}})
    held = embedded(sweep_page(found))
    assert len(held["tracks"]) == 1049 and {len(t["times"]) for t in held["tracks"]} <= set(range(17, 22))
    for thinned, whole in zip(held["tracks"][:20], found.tracks.values()):
        assert min(thinned["clearance"]) == min(whole["clearance"]) and thinned["times"][-1] == whole["times"][-1]


@pytest.mark.parametrize("changes", [{"vary": {}}, {"within": {"duration_s": 1.0}}], ids=["none varied", "none keeps"])
def test_poor_sweeps_still_make_a_page(changes: Any, tmp_path: Path) -> None:
    sweep = load_sweep(sweep_file(tmp_path, **changes))
    rows = [given_up(point, "no") for point in points(sweep)]
    assert embedded(sweep_page(outcome(sweep, rows)))["best"] is None


# ---- in a browser ----


def opened(chrome: Any, found: Outcome, folder: Path) -> Any:
    write_sweep_page(found, folder / "some" / "page.html", "coupling: 50")
    chrome.get((folder / "some" / "page.html").as_uri())
    return chrome


def drawn_turn(chrome: Any) -> str:
    """What the top view shows: it changes when another turn or another moment is shown."""
    return str(chrome.execute_script("return [...document.querySelectorAll('#turn path.js-fill, #turn path.js-line')]"
                                     ".map((p) => p.getAttribute('d')).join()"))


def click_mark(chrome: Any, plot: str, axis: str, number: int) -> None:
    """A real click of the mouse on the mark of a setting or a point; where it lies is asked from the chart's axes."""
    from selenium.webdriver.common.action_chains import ActionChains

    box = chrome.execute_script("""
        const gd = document.querySelector(arguments[0]);
        const t = gd._fullData.find((t) => t.yaxis === arguments[1] && (t.customdata || []).includes(arguments[2]));
        const n = t.customdata.indexOf(arguments[2]);
        gd.scrollIntoView({ block: 'center' });
        const x = gd._fullLayout['xaxis' + t.xaxis.slice(1)], y = gd._fullLayout['yaxis' + t.yaxis.slice(1)];
        const b = gd.getBoundingClientRect();
        return [b.left + x._offset + x.d2p(t.x[n]), b.top + y._offset + y.d2p(t.y[n])];
    """, plot, axis, number)
    mouse = ActionChains(chrome)
    mouse.w3c_actions.pointer_action.move_to_location(round(box[0]), round(box[1]))
    mouse.pause(0.2).click().perform()


def test_every_mark_leads_to_its_turn(browser: Any, tmp_path: Path) -> None:  # noqa: F811
    found = made_up(tmp_path)
    opened(browser, found, tmp_path)
    assert browser.execute_script("return performance.getEntriesByType('resource').length") == 0
    assert browser.find_element("id", "verdict").text == "✓ 4 of 7 settings keep every rule"
    said = browser.find_element("id", "of")
    assert said.text.startswith(f"Setting {found.best.number}, the best, seed 1")  # type: ignore[union-attr]
    before = drawn_turn(browser)
    click_mark(browser, "#front", "y", 0)
    wait_for(lambda: said.text.startswith("Setting 0, as shipped, seed 1"))
    assert drawn_turn(browser) != before and "coupling.strength 1" in said.text
    browser.find_elements("css selector", "#seeds button")[1].click()
    assert said.text.startswith("Setting 0, as shipped, seed 2")
    row = next(row for row in found.rows if row["setting"] == 3 and row["seed"] == 2)
    click_mark(browser, "#each .parameter:nth-child(1) .plot", "y2", row["point"])
    wait_for(lambda: said.text.startswith("Setting 3, seed 2"))
    browser.find_elements("css selector", "#settings tbody tr")[-1].click()
    broken = browser.find_elements("css selector", "#settings tbody tr")[-1]
    assert "chosen" in broken.get_attribute("class") and "a contact" in broken.text
    assert browser.get_log("browser") == []


def test_a_failed_rehearsal_says_why_and_the_turn_plays(browser: Any, tmp_path: Path) -> None:  # noqa: F811
    opened(browser, made_up(tmp_path), tmp_path)
    browser.execute_script("const s = document.getElementById('time'); s.value = 3;"
                           "s.dispatchEvent(new Event('input'));")
    early = drawn_turn(browser)
    browser.find_element("id", "play").click()
    wait_for(lambda: drawn_turn(browser) != early)
    wait_for(lambda: float(browser.find_element("id", "now").text.split("\u202f")[0]) > 3.0)
    last = [row for row in browser.find_elements("css selector", "#settings tbody tr") if row.text.startswith("6")][0]
    last.click()
    browser.find_elements("css selector", "#seeds button")[1].click()
    assert HOSTILE in browser.find_element("id", "figures-of").text
    assert browser.find_elements("tag name", "img") == []
    browser.execute_script("document.getElementById('across').value = 'duration_s';"
                           "document.getElementById('across').dispatchEvent(new Event('change'));")
    wait_for(lambda: "time, s" in browser.find_element("css selector", "#front .xtitle").text)
    assert browser.get_log("browser") == []


def test_page_fits_wide_and_narrow_windows_in_both_colour_schemes(browser: Any, tmp_path: Path) -> None:  # noqa: F811
    opened(browser, made_up(tmp_path), tmp_path)
    grounds = set()
    for width, scheme in ((1400, "light"), (420, "dark"), (1000, "dark")):
        browser.execute_cdp_cmd("Emulation.setEmulatedMedia",
                                {"features": [{"name": "prefers-color-scheme", "value": scheme}]})
        browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride",
                                {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False})
        wait_for(lambda: browser.execute_script(
            "return document.documentElement.scrollWidth <= window.innerWidth"
            " && [...document.querySelectorAll('div.plot')].every((box) => {"
            " const plot = box.querySelector('.main-svg');"
            " return Math.abs(box.clientWidth - plot.clientWidth) <= 1 && box.clientHeight > 100 })"))
        grounds.add(browser.execute_script("return getComputedStyle(document.body).backgroundColor"))
    browser.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": []})
    assert len(grounds) == 2
    assert browser.get_log("browser") == []
