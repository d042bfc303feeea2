# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The pages of recordings: they need nothing else, open soon, play, scrub, jump, and compare two."""

import json
import re

import numpy as np
import pytest
from made_up_run import turn
from test_page import References, browser, cursor, drawn, now, scrub, wait_for  # noqa: F401

from coord_planner.record.bag_write import write_bag
from coord_planner.record.review import review
from coord_planner.record.review_page import comparison, data, page, write_page


@pytest.fixture(scope="module")
def recorded(tmp_path_factory):
    folder = tmp_path_factory.mktemp("recorded")
    for name, how in (("before", {"later": 0.3, "slowed": "mower_3"}), ("after", {"later": 0.05})):
        write_bag(turn(**how), folder / name)
    return review(folder / "before"), review(folder / "after")


def embedded(text):
    return json.loads(re.search(r'<script type="application/json" id="run">(.*?)</script>', text, re.DOTALL).group(1))


@pytest.mark.parametrize("make", [lambda pair: page(pair[0]), lambda pair: comparison(*pair)], ids=["one", "two"])
def test_pages_ask_for_nothing_outside_themselves(recorded, make):
    parser = References()
    parser.feed(make(recorded))
    assert parser.found == ["data:,"]
    assert not {"iframe", "object", "embed", "base"} & set(parser.tags)


def test_page_holds_the_review(recorded):
    first, _ = recorded
    held = embedded(page(first))
    assert held["figures"] == first.figures
    assert held["names"][3] == "mower_4" and held["times"][0] == 0.0
    assert min(v for v in held["nearest"]["clearance"] if v is not None) == pytest.approx(
        first.figures["min_clearance_m"], abs=1e-4)


def test_samples_are_dense_in_turns_and_few_enough(recorded):
    first, _ = recorded
    times = np.array(data(first)["times"])
    (found,) = first.figures["turns"]
    inside = times[(times >= found["from_s"]) & (times <= found["to_s"])]
    assert np.diff(inside).max() < 0.06 and len(times) <= 2500


# ---- in a browser -------------------------------------------------------------------------------------------


def opened(browser, reviews, tmp_path):  # noqa: F811
    write_page(reviews, tmp_path / "page.html")
    browser.get((tmp_path / "page.html").as_uri())
    return browser


def rows(browser, table):  # noqa: F811
    return browser.find_elements("css selector", f"#{table} tbody tr")


def test_review_plays_scrubs_and_jumps(browser, recorded, tmp_path):  # noqa: F811
    opened(browser, recorded[:1], tmp_path)
    assert browser.execute_script("return performance.getEntriesByType('resource').length") == 0
    assert browser.find_element("id", "verdict").text == "✓ Read whole"
    assert len(rows(browser, "turns")) == 1 and len(rows(browser, "turn")) == 6
    assert len(browser.find_elements("css selector", "#onsets .errorbar")) == 6
    scrub(browser, 3)
    early, left = drawn(browser), cursor(browser)
    scrub(browser, 9)
    wait_for(lambda: drawn(browser) != early)
    assert now(browser) == 9.0 and cursor(browser) > left + 100
    warning = next(row for row in rows(browser, "cautions") if "clearance small" in row.text)
    browser.execute_script("arguments[0].click()", warning)
    assert now(browser) == pytest.approx(7.0, abs=0.01)
    assert "clearance small" in browser.find_element("id", "readout").text
    browser.find_element("id", "play").click()
    wait_for(lambda: now(browser) > 7.3)
    browser.find_element("id", "play").click()
    browser.execute_script("arguments[0].click()", rows(browser, "turns")[0])
    assert now(browser) == pytest.approx(recorded[0].figures["turns"][0]["from_s"], abs=0.01)
    assert browser.get_log("browser") == []


@pytest.mark.parametrize("count", [1, 2], ids=["one", "two"])
def test_pages_fit_wide_and_narrow_windows(browser, recorded, tmp_path, count):  # noqa: F811
    opened(browser, recorded[:count], tmp_path)
    for width in (1400, 420, 1000):
        browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride",
                                {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False})
        wait_for(lambda: browser.execute_script(
            "return document.documentElement.scrollWidth <= window.innerWidth && "
            "[...document.querySelectorAll('.plot')].every((box) => "
            "Math.abs(box.clientWidth - box.querySelector('.main-svg').clientWidth) <= 1)"))
    browser.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})
    assert browser.get_log("browser") == []


def test_two_recordings_move_together(browser, recorded, tmp_path):  # noqa: F811
    opened(browser, recorded, tmp_path)
    assert now(browser) == 0.0, "the first onset of the turn in each"
    shown = "return ['top-1', 'top-2'].map((id) => [...document.querySelectorAll('#' + id + ' path.js-fill')]" \
            ".map((p) => p.getAttribute('d')).join())"
    before = browser.execute_script(shown)
    scrub(browser, 4)
    wait_for(lambda: all(a != b for a, b in zip(before, browser.execute_script(shown))))
    assert {"A nearest", "B nearest"} <= {part.strip()[:9] for part in
                                          browser.find_element("id", "readout").text.split("·")}
    lag = next(row.text for row in rows(browser, "differences") if "last onset" in row.text)
    assert float(lag.split()[-1].replace("−", "-")) == pytest.approx(5 * 0.05 - 5 * 0.3, abs=0.01)
    assert browser.get_log("browser") == []


def test_damage_is_seen_at_once(browser, tmp_path):  # noqa: F811
    write_bag(turn(count=2), tmp_path / "bag")
    (tmp_path / "bag" / "metadata.yaml").unlink()
    opened(browser, [review(tmp_path / "bag")], tmp_path)
    assert browser.find_element("id", "verdict").text == "✕ Not whole"
    assert "metadata.yaml is missing" in browser.find_element("id", "notes").text


def test_hostile_names_stay_texts(browser, tmp_path):  # noqa: F811
    from foreign_bags import ForeignBag, corner

    times = np.arange(0.0, 15.0, 0.1)
    poses, speeds, rates = corner(times)
    bag = ForeignBag()
    bag.poses("/<img src=x onerror=alert(1)>/odom", times, poses, speeds=speeds, rates=rates)
    opened(browser, [review(bag.write(tmp_path / "bag"))], tmp_path)
    assert "<img" in browser.find_element("css selector", "#how tbody th").text
    assert browser.find_elements("tag name", "img") == []
    assert browser.get_log("browser") == []
