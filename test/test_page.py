# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The page of a run: what it holds, that it needs nothing else, and that it works in a browser."""

import json
import math
import re
import shutil
import time
from html.parser import HTMLParser
from importlib import resources

import attrs
import numpy as np
import pytest
from made_up_run import standing, turn

from coord_planner.core.fleet import Fleet
from coord_planner.record.page import data, page, write_page

HOSTILE = "</script><img src=x onerror=alert(1)>&amp;"


class References(HTMLParser):
    """Collects everything by which a page could ask for something outside itself."""

    def __init__(self):
        super().__init__()
        self.found, self.tags = [], []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.found += [value for name, value in attrs if name in {"src", "href", "srcset", "action", "data", "poster"}]


def hostile_run():
    run = turn(count=3)
    robots = (attrs.evolve(run.fleet.robots[0], name=HOSTILE), *run.fleet.robots[1:])
    return attrs.evolve(run, fleet=Fleet(robots), edges=(), manoeuvre=HOSTILE, facts={HOSTILE: HOSTILE},
                        events=((run.began + 1.0, HOSTILE),))


def embedded(text):
    return json.loads(re.search(r'<script type="application/json" id="run">(.*?)</script>', text, re.DOTALL).group(1))


def test_page_asks_for_nothing_outside_itself():
    parser = References()
    parser.feed(page(turn(count=2)))
    assert parser.found == ["data:,"]
    assert not {"iframe", "object", "embed", "base"} & set(parser.tags)
    for part in resources.files("coord_planner.record").iterdir():
        if not part.name.endswith((".html", ".css", ".js")):
            continue
        outside = r"https?://(?!www\.w3\.org/2000/svg)|url\(|@import|fetch\(|XMLHttpRequest"
        assert not re.search(outside, part.read_text()), part.name


def test_page_holds_the_run():
    run = turn(slowed="mower_3")
    held = embedded(page(run))
    assert held["names"] == list(run.fleet.names)
    assert held["times"][0] == 0.0 and held["times"][-1] == pytest.approx(15.95)
    assert held["x"][3][100] == pytest.approx(run.poses[3, 100, 0], abs=1e-3)
    assert held["nearest"]["clearance"][0] == pytest.approx(2.5 - 0.8)
    x0, y0, x1, y1 = held["nearest"]["line"][0]
    assert math.hypot(x1 - x0, y1 - y0) == pytest.approx(1.7, abs=2e-3)
    assert held["plans"]["times"][1] == pytest.approx(0.1)
    assert held["cautions"][0]["code"] == "robot not following"
    assert held["summary"]["contacts"] == 1


def test_long_runs_are_thinned_but_keep_the_smallest_clearance():
    poses = np.zeros((2, 9000, 3))
    poses[1, :, 1] = 3.0
    poses[1, 4711, 1] = 1.5
    held = data(standing(poses[:, 0], count=9000, poses=poses))
    assert len(held["times"]) <= 1501
    assert min(held["nearest"]["clearance"]) == pytest.approx(0.7)
    assert held["times"][-1] == pytest.approx(8999 * 0.05)


@pytest.mark.parametrize("run", [
    standing([[0, 0, 0]], count=3),
    standing([[0, 0, 0], [math.nan] * 3], count=3, began=math.nan, ended=math.nan, completed=False, state="idle"),
    standing([[0, 0, 0], [0, 2, 0]], count=0, began=math.nan, ended=math.nan, completed=False),
], ids=["one robot", "a robot never heard of", "nothing recorded"])
def test_poor_records_still_make_a_page(run):
    assert embedded(page(run))["summary"]["contacts"] == 0


def test_texts_from_outside_cannot_leave_their_place():
    text = page(hostile_run())
    assert "<img" not in text.split("<script>")[0]
    assert embedded(text)["names"][0] == HOSTILE


# ---- in a browser -------------------------------------------------------------------------------------------

FLAGS = ("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-sync",
         "--disable-background-networking", "--disable-component-update", "--window-size=1400,1100")


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    webdriver = pytest.importorskip("selenium.webdriver", reason="needs selenium")
    chromium = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
    driver = shutil.which("chromedriver")
    if not (chromium and driver):
        pytest.skip("needs Chromium and chromedriver")
    options = webdriver.ChromeOptions()
    options.binary_location = chromium
    for flag in (*FLAGS, f"--user-data-dir={tmp_path_factory.mktemp('profile')}"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    chrome = webdriver.Chrome(options=options, service=webdriver.ChromeService(driver))
    yield chrome
    chrome.quit()


def opened(browser, run, tmp_path):
    write_page(run, tmp_path / "some" / "page.html")
    browser.get((tmp_path / "some" / "page.html").as_uri())
    return browser


def wait_for(condition, seconds=20.0):
    deadline = time.monotonic() + seconds
    while time.monotonic() < deadline:
        if condition():
            return
        time.sleep(0.05)
    pytest.fail(f"not true within {seconds} s")


def now(browser):
    return float(re.match(r"[\d.]+", browser.find_element("id", "now").text).group())


def scrub(browser, seconds):
    browser.execute_script("const s = document.getElementById('time'); s.value = arguments[0]; "
                           "s.dispatchEvent(new Event('input'));", seconds)


def drawn(browser):
    """What the top view shows, as the text of its paths: it changes when something moves."""
    return browser.execute_script("return [...document.querySelectorAll('#top path.js-fill, #top path.js-line')]"
                                  ".map((p) => p.getAttribute('d')).join()")


def cursor(browser):
    return float(browser.execute_script("return document.getElementById('cursor').getBoundingClientRect().left"))


def test_page_loads_scrubs_and_plays_without_a_complaint(browser, tmp_path):
    opened(browser, turn(slowed="mower_3"), tmp_path)
    assert browser.execute_script("return performance.getEntriesByType('resource').length") == 0
    assert browser.find_element("id", "verdict").text == "✕ Completed, but with a contact"
    assert len(browser.find_elements("css selector", "#each tbody tr")) == 6
    scrub(browser, 3)
    early, left = drawn(browser), cursor(browser)
    scrub(browser, 9)
    wait_for(lambda: drawn(browser) != early)
    assert now(browser) == 9.0
    assert cursor(browser) > left + 100
    assert "mower_3" in browser.find_element("id", "readout").text
    browser.find_element("id", "play").click()
    wait_for(lambda: now(browser) > 9.4)
    browser.find_element("id", "play").click()
    stopped = now(browser)
    time.sleep(0.3)
    assert now(browser) == stopped
    assert browser.get_log("browser") == []


def test_page_fits_wide_and_narrow_windows(browser, tmp_path):
    opened(browser, turn(slowed="mower_3"), tmp_path)
    for width in (1400, 420, 1000):
        browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride",
                                {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False})
        wait_for(lambda: browser.execute_script(
            "return document.documentElement.scrollWidth <= window.innerWidth && ['top', 'charts'].every((id) => {"
            "const box = document.getElementById(id), plot = box.querySelector('.main-svg');"
            "return Math.abs(box.clientWidth - plot.clientWidth) <= 1"
            " && Math.abs(box.clientHeight - plot.clientHeight) <= 1 })"))
    browser.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})
    assert browser.get_log("browser") == []


def test_page_shows_hostile_texts_as_they_are(browser, tmp_path):
    opened(browser, hostile_run(), tmp_path)
    assert HOSTILE in browser.find_element("css selector", "#each tbody th").text
    assert browser.find_elements("tag name", "img") == []
    assert browser.get_log("browser") == []
