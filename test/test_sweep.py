# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Sweeps: what a file may ask for, points that do not depend on who rehearses them, and what becomes of failures."""

import csv
import json
import math
import os
import signal
import subprocess
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from made_up_sweep import ASKED, compared, deadly, in_full, quick, sweep_file, wrong
from test_cli_check import call

from coord_planner import config
from coord_planner.config.places import example
from coord_planner.config.rewrite import rewritten
from coord_planner.trial.sweep.file import load_sweep
from coord_planner.trial.sweep.journal import Journal
from coord_planner.trial.sweep.local import run_here
from coord_planner.trial.sweep.outcome import outcome, write_best
from coord_planner.trial.sweep.plan import points
from coord_planner.trial.sweep.point import Record
from coord_planner.trial.sweep.table import ordered, write_table

ROOT = Path(__file__).parents[1]


# ---- what a file may ask for ----

# What is changed in a sound sweep file, and what the message must name: the key and the remedy.
BAD: dict[str, tuple[dict[str, Any], Sequence[str]]] = {
    "unknown key": ({"manoeuver": "corner"}, ["manoeuver: it is not a known key; did you mean manoeuvre?"]),
    "no seeds": ({"seeds": None}, ["seeds: it has to be given", "[1, 2, 3]"]),
    "seeds twice": ({"seeds": [1, 1]}, ["seeds", "different whole numbers"]),
    "no such parameter file": ({"params": "other.yaml"}, ["other.yaml: there is no such file"]),
    "no manoeuvre": ({"manoeuvre": []}, ["manoeuvre", "different ones of corner, led"]),
    "unknown manoeuvre": ({"manoeuvre": "cornr"}, ["manoeuvre", "did you mean corner?", "corner, led"]),
    "unknown key to vary": ({"vary": {"coupling.strenght": [1.0]}},
                            ["vary.coupling.strenght", "did you mean coupling.strength?"]),
    "value out of range": ({"vary": {"coupling.strength": [1.0, -1.0]}}, ["vary.coupling.strength", "at least 0"]),
    "range out of range": ({"vary": {"coupling.strength": {"range": [1, 20000], "count": 3}}},
                           ["vary.coupling.strength", "20000", "at most 10000"]),
    "logarithm of nothing": ({"vary": {"coupling.strength": {"log": [0, 10], "count": 3}}},
                             ["vary.coupling.strength", "above 0"]),
    "ends the wrong way round": ({"vary": {"coupling.strength": {"range": [3, 1], "count": 3}}}, ["the lower first"]),
    "no count": ({"vary": {"coupling.strength": {"log": [1, 10]}}}, ["vary.coupling.strength.count", "2 to 1000"]),
    "a value twice": ({"vary": {"coupling.strength": [1.0, 1.0]}}, ["stands there twice"]),
    "a range of words": ({"vary": {"graph.edges": {"range": [1, 2], "count": 2}}}, ["no range of strs"]),
    "nothing to go through": ({"vary": {"coupling.strength": 3}}, ["{log: [low, high], count: n}"]),
    "seed varied": ({"vary": {"simulation.seed": [1, 2]}}, ["the list `seeds`"]),
    "set and varied": ({"set": {"coupling.strength": 2.0}}, ["both set and varied"]),
    "set to nonsense": ({"set": {"coupling.alignment": "much"}}, ["set.coupling.alignment", "'much' is not a number"]),
    "without effect": ({"manoeuvre": "led", "vary": {"coupling.alignment": [0.0, 1.0]}},
                       ["led has alignment of its own", "manoeuvres.led.alignment"]),
    "not together": ({"vary": {"horizon.intervals": [4, 8], "horizon.interval": [0.2, 0.4]}},
                     ["with horizon.intervals 4, horizon.interval 0.2", "horizon.lead", "beyond the horizon"]),
    "unknown fault": ({"faults": [{"kind": "robot_lazy", "robot": "left", "from_s": 1, "to_s": 2, "value": 0.5}]},
                      ["faults[0].kind", "robot_lazy", "robot_slow"]),
    "fault of a stranger": ({"faults": [{"kind": "robot_slow", "robot": "middle", "from_s": 1, "to_s": 2, "value": 1}]},
                            ["faults[0].robot", "middle", "left, right"]),
    "fault that ends before it begins": (
        {"faults": [{"kind": "robot_slow", "robot": "left", "from_s": 3, "to_s": 2, "value": 0.5}]},
        ["faults[0].to_s", "later than from_s"]),
    "fault without its value": ({"faults": [{"kind": "robot_slow", "robot": "left", "from_s": 1, "to_s": 2}]},
                                ["faults[0].value: it has to be given"]),
    "fault of no edge": ({"faults": [{"kind": "link_lost", "edge": ["left", "left"], "from_s": 1, "to_s": 2}]},
                         ["faults[0].edge", "left right"]),
    "unknown measure": ({"objective": {"heading_spred_deg": 1.0}},
                        ["objective.heading_spred_deg", "did you mean heading_spread_deg?"]),
    "negative price": ({"objective": {"effort": -1.0}}, ["objective.effort", "at least 0"]),
    "nothing counts": ({"objective": {"effort": 0.0}}, ["objective", "at least one measure"]),
    "unknown limit": ({"within": {"speed": 1.0}}, ["within.speed", "end_error_m"]),
    "unknown method": ({"method": "random"}, ["method", "grid, latin_hypercube"]),
    "hypercube without points": (
        {"method": "latin_hypercube", "vary": {"coupling.strength": {"log": [1, 9]}}}, ["points: it has to be given"]),
    "hypercube with counts": ({"method": "latin_hypercube", "points": 5}, ["vary.coupling.strength.count"]),
    "points of a grid": ({"points": 5}, ["points", "method: latin_hypercube"]),
    "far too many": ({"seeds": list(range(1000)), "vary": {"coupling.strength": {"range": [1, 9], "count": 200}}},
                     ["200 settings", "at most 100000"]),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_sweep_files_are_told_with_key_and_remedy_before_anything_runs(case: str, tmp_path: Path) -> None:
    changes, words = BAD[case]
    file = sweep_file(tmp_path, **changes)
    status, output = call("sweep", file, "--out", tmp_path / "out")
    assert status == 2, output
    for word in words:
        assert word in output, output
    assert "Traceback" not in output and not (tmp_path / "out").exists()


@pytest.mark.parametrize(("text", "word"), [
    ("", "it is empty"), ("- a\n", "`key: value`"), ("params: [\n", "broken YAML"), ("seeds: 1\nseeds: 2\n", "twice"),
    ("params: !!python/object:os.system x\n", "broken YAML"),
])
def test_files_that_are_no_sweeps(text: str, word: str, tmp_path: Path) -> None:
    (tmp_path / "no.yaml").write_text(text)
    status, output = call("sweep", tmp_path / "no.yaml")
    assert status == 2 and word in output, output


def test_errors_of_the_parameter_file_come_with_its_own_name(tmp_path: Path) -> None:
    file = sweep_file(tmp_path)
    yard = tmp_path / "yard.yaml"
    yard.write_text(yard.read_text().replace("strength: 1.0", "strength: -1.0"))
    status, output = call("sweep", file, "--out", tmp_path / "out")
    assert status == 2 and output.startswith(f"{yard}:") and "coupling.strength" in output


def test_a_grid_goes_through_every_combination_with_every_seed(tmp_path: Path) -> None:
    sweep = load_sweep(sweep_file(tmp_path, as_shipped=True, vary={
        "coupling.strength": {"log": [0.5, 50], "count": 3}, "graph.edges": {"pair": ["left right"], "none": []}}))
    found = points(sweep)
    assert len(found) == (1 + 3 * 2) * 2  # the file as it stands is not among the six: coupling 1
    assert len({point.key for point in found}) == len(found)
    assert [point.labels for point in found[::2]][:3] == [
        {"coupling.strength": 1.0, "graph.edges": "pair"}, {"coupling.strength": 0.5, "graph.edges": "pair"},
        {"coupling.strength": 0.5, "graph.edges": "none"}]
    assert found[4].flat["graph.edges"] == []
    assert [point.seed for point in found[:4]] == [1, 2, 1, 2]


def test_several_manoeuvres_are_each_rehearsed_with_every_seed(tmp_path: Path) -> None:
    """A parameter that one of them has of its own may be varied all the same: the other shows its effect."""
    file = sweep_file(tmp_path, manoeuvre=["corner", "led"], vary={"coupling.alignment": [0.0, 1.0]})
    found = points(load_sweep(file))
    assert [(point.setting, point.manoeuvre, point.seed) for point in found] == [
        (setting, manoeuvre, seed) for setting in (0, 1) for manoeuvre in ("corner", "led") for seed in (1, 2)]


def test_a_latin_hypercube_has_one_point_in_each_layer_of_each_parameter(tmp_path: Path) -> None:
    """The definition of McKay, Beckman & Conover (Technometrics 21, 1979), from memory."""
    vary = {"coupling.strength": {"log": [0.1, 1000]}, "prices.speed": {"range": [1, 3]}, "horizon.intervals": [8, 10]}
    file = sweep_file(tmp_path, method="latin_hypercube", points=20, vary=vary)
    settings = load_sweep(file).settings()
    for key, layers in (
        ("coupling.strength", np.log10(0.1) + 4 * np.arange(21) / 20), ("prices.speed", 1 + 2 * np.arange(21) / 20),
    ):
        values = [setting[key] for setting in settings]
        values = np.log10(values) if key == "coupling.strength" else np.array(values)
        assert np.histogram(values, layers)[0].tolist() == [1] * 20
    assert sum(setting["horizon.intervals"] == 8 for setting in settings) == 10
    assert settings == load_sweep(file).settings()
    whole = {"horizon.intervals": {"range": [8, 10]}}
    few = load_sweep(sweep_file(tmp_path, method="latin_hypercube", points=20, vary=whole)).settings()
    assert sorted(setting["horizon.intervals"] for setting in few) == [8, 9, 10], "each setting once"


def test_a_points_key_follows_from_its_content_alone(tmp_path: Path) -> None:
    few = points(load_sweep(sweep_file(tmp_path)))
    more = points(load_sweep(sweep_file(tmp_path, seeds=[5, 2, 1])))
    assert {point.key for point in few} < {point.key for point in more}
    fault = {"kind": "robot_slow", "robot": "left", "from_s": 1.0, "to_s": 2.0, "value": 0.5}
    other = points(load_sweep(sweep_file(tmp_path, faults=[fault])))
    assert not {point.key for point in few} & {point.key for point in other}


# ---- who rehearses it does not matter ----


@pytest.fixture(scope="module")
def rows(tmp_path_factory: pytest.TempPathFactory) -> list[dict[str, Any]]:
    """Rows of the small sweep, rehearsed here one after the other."""
    file = sweep_file(tmp_path_factory.mktemp("reference"))
    return [compared(in_full(point).row) for point in points(load_sweep(file))]


def test_the_same_rows_whatever_the_order_and_the_number_of_workers(rows: list[Any], tmp_path: Path) -> None:
    todo = points(load_sweep(sweep_file(tmp_path)))
    assert all(row["status"] == "done" and row["completed"] for row in rows)
    assert len({row["heading_spread_deg"] for row in rows}) == len(rows), "seeds and couplings show"
    for workers in (1, 3):
        found = ordered(run_here(todo[::-1], in_full, workers))
        assert [compared(row) for row in found] == rows  # to the last bit


def test_each_process_has_one_thread_for_its_linear_algebra(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    found = list(run_here(points(load_sweep(sweep_file(tmp_path))), quick, 2))
    assert {record.row["threads"] for record in found} == {"1"}
    assert os.environ["OMP_NUM_THREADS"] == "7" and os.getpid() not in {record.row["process"] for record in found}


# ---- what fails is a row ----


def test_a_point_that_kills_its_process_is_given_up_and_costs_no_other(tmp_path: Path) -> None:
    todo = points(load_sweep(sweep_file(tmp_path)))
    found = ordered(run_here(todo, deadly, 2))
    assert [row["status"] for row in found] == ["done", "failed", *["done"] * 4]
    assert "died, twice" in found[1]["reason"]


def test_a_mistake_and_a_refusal_are_rows_with_their_reasons(tmp_path: Path) -> None:
    tight = sweep_file(tmp_path, vary={"manoeuvres.corner.radius": [0.5, 3.0]}, seeds=[1])
    refused, done = (in_full(point).row for point in points(load_sweep(tight)))
    assert refused["status"] == "refused" and "radius of 0.5 m" in refused["reason"] and done["status"] == "done"
    failed = wrong(points(load_sweep(tight))[1]).row
    assert failed["status"] == "failed" and "ZeroDivisionError" in failed["reason"] and "a mistake" in failed["reason"]


# ---- what is written ----


def records(rows: Sequence[dict[str, Any]]) -> list[Record]:
    return [Record(row["key"], row) for row in rows]


def test_parquet_and_csv_hold_the_same_rows(rows: list[Any], tmp_path: Path) -> None:
    parquet = pytest.importorskip("pyarrow.parquet", reason="needs pyarrow")
    refused = {**{key: rows[0][key] for key in ("setting", "seed")}, "point": 99, "key": "x", "status": "refused",
               "reason": "a, b\n\"c\""}
    write_table([*rows, refused], tmp_path / "t.csv")
    write_table([*rows, refused], tmp_path / "t.parquet")
    held = parquet.read_table(tmp_path / "t.parquet").to_pylist()
    assert [{key: row[key] for key in rows[0]} for row in held[:-1]] == rows
    with open(tmp_path / "t.csv", newline="", encoding="utf-8") as stream:
        texts = list(csv.DictReader(stream))
    assert texts[-1]["reason"] == refused["reason"] and texts[-1]["duration_s"] == "" and held[-1]["duration_s"] is None
    for text, row in zip(texts, rows):
        assert float(text["heading_spread_deg"]) == row["heading_spread_deg"]
    assert not list(tmp_path.glob(".*.part"))


def test_a_journal_outlives_a_kill_in_mid_line_and_knows_its_sweep(rows: list[Any], tmp_path: Path) -> None:
    todo = points(load_sweep(sweep_file(tmp_path)))
    with Journal(tmp_path, todo) as journal:
        assert all(journal.add(record) for record in records(rows[:3]))
        assert not journal.add(records(rows)[0]), "counted once"
    with open(tmp_path / "journal.jsonl", "ab") as stream:
        stream.write(b'{"key": "' + todo[3].key.encode())
    with Journal(tmp_path, todo) as journal:
        assert [compared(row) for row in ordered(journal.records.values())] == rows[:3]
        journal.add(records(rows)[3])
        status, output = call("sweep", sweep_file(tmp_path), "--out", tmp_path)
        assert status == 2 and "another sweep is writing" in output
    with Journal(tmp_path, todo) as journal:
        assert [compared(row) for row in ordered(journal.records.values())] == rows[:4]
    status, output = call("sweep", sweep_file(tmp_path, seeds=[7]), "--out", tmp_path)
    assert status == 2 and "results of other points" in output and "--restart" in output


def test_a_sweep_that_has_grown_keeps_its_results_at_their_new_places(rows: list[Any], tmp_path: Path) -> None:
    with Journal(tmp_path, points(load_sweep(sweep_file(tmp_path)))) as journal:
        for record in records(rows):
            journal.add(record)
    grown = points(load_sweep(sweep_file(tmp_path, seeds=[3, 1, 2])))
    with Journal(tmp_path, grown) as journal:
        held = {row["point"]: row for row in ordered(journal.records.values())}
    assert sorted(held) == [n for n, point in enumerate(grown) if point.seed != 3]
    for number, row in held.items():
        assert row["seed"] == grown[number].seed and row["coupling.strength"] == grown[number].flat["coupling.strength"]
        assert row["setting"] == number // 3


def test_a_sweep_that_was_killed_goes_on_where_it_stopped(rows: list[Any], tmp_path: Path) -> None:
    file = sweep_file(tmp_path)
    words = [sys.executable, "-c", "from coord_planner.cli import main; main()", "sweep", str(file), "--out",
             str(tmp_path / "out"), "--workers", "2", "--results", "csv", "--json"]
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    journal = tmp_path / "out" / "journal.jsonl"
    first = subprocess.Popen(words, env=environment, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    wait_for(lambda: journal.exists() and journal.read_bytes().count(b"\n") >= 2)
    workers = children(first.pid)
    first.send_signal(signal.SIGKILL)
    first.wait()
    before = journal.read_bytes()
    assert 2 <= before.count(b"\n") < len(rows) and workers
    wait_for(lambda: not any(alive(worker) for worker in workers))  # nobody goes on rehearsing for a dead parent
    second = subprocess.run(words, env=environment, capture_output=True, text=True, timeout=300, check=False)
    assert second.returncode == 0, second.stderr
    assert "rehearsals were done before" in second.stderr
    after = journal.read_bytes()
    whole = before[: before.rfind(b"\n") + 1]
    assert after.startswith(whole) and after.count(b"\n") == len(rows), "none lost, none twice"
    with Journal(tmp_path / "out", points(load_sweep(file))) as held:
        assert [compared(row) for row in ordered(held.records.values())] == rows
    assert json.loads(second.stdout)["done"] == len(rows)


def wait_for(condition: Any, seconds: float = 120.0) -> None:
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline, f"not true within {seconds} s"
        time.sleep(0.02)


def children(process: int) -> list[int]:
    return [int(word) for word in Path(f"/proc/{process}/task/{process}/children").read_text().split()]


def alive(process: int) -> bool:
    try:
        return Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


def test_the_command_tells_the_best_and_writes_it_ready_for_the_robots(rows: list[Any], tmp_path: Path) -> None:
    file = sweep_file(tmp_path, as_shipped=None)
    out = tmp_path / "out"
    out.mkdir()
    with Journal(out, points(load_sweep(file))) as journal:
        for record in records(rows):
            journal.add(record)
    status, output = call("sweep", file, "--out", out, "--results", "csv", "--json")
    found = json.loads(output)
    assert status == 0 and found["done"] == len(rows) and found["within_rules"] == 3
    prices = {strength: np.mean([row["heading_spread_deg"] + 0.1 * row["duration_s"] for row in rows
                                 if row["coupling.strength"] == strength]) for strength in (0.5, 5.0, 50.0)}
    best = min(prices, key=prices.__getitem__)
    assert found["best"]["values"] == {"coupling.strength": best}
    assert found["best"]["objective"] == pytest.approx(prices[best])
    text = (out / "best.yaml").read_text()
    assert f"#   coupling.strength: {best} instead of 1.0" in text and "# chi" in text
    assert config.load(out / "best.yaml").settings.coupling.strength == best
    status, output = call("sweep", file, "--out", out, "--results", "csv")
    assert status == 0 and "best, on the front" in output and "not a safety function" in output


def test_no_setting_within_the_rules_is_one_and_leaves_no_best_file(rows: list[Any], tmp_path: Path) -> None:
    file = sweep_file(tmp_path, within={"duration_s": 1.0})
    with Journal(tmp_path, points(load_sweep(file))) as journal:
        for record in records(rows):
            journal.add(record)
    (tmp_path / "best.yaml").write_text("of an earlier run")
    status, output = call("sweep", file, "--out", tmp_path, "--results", "csv")
    assert status == 1 and "3 of 3: time above 1 s" in output and "No setting keeps" in output
    assert not (tmp_path / "best.yaml").exists()


def test_every_changed_value_stands_in_the_best_file(rows: list[Any], tmp_path: Path) -> None:
    """Values that the file does not name, lists and own couplings of manoeuvres too; read back and compared."""
    vary = {"prices.speed": [2.5], "graph.edges": {"heavy": ["left right 2.0"]}, "manoeuvres.corner.coupling": [7],
            "robots.left.max_speed": [1.25]}
    sweep = load_sweep(sweep_file(tmp_path, vary=vary, seeds=[1], set={"site_rules.min_clearance": 0.65}))
    row = {**rows[0], "point": 0, "setting": 0, "site_min_clearance_m": 0.65}
    write_best(outcome(sweep, records([row])), tmp_path / "best.yaml")
    best = config.load(tmp_path / "best.yaml")
    assert best.edges == (("left", "right", 2.0),) and best.manoeuvres["corner"].coupling == 7.0
    assert best.settings.site_rules.min_clearance == 0.65 and best.settings.prices.speed == 2.5
    assert best.fleet.robots[0].limits.max_speed == 1.25 and best.fleet.robots[1].limits.max_speed == 1.4


@pytest.mark.parametrize("site", ["solar_park.yaml", "snow_yard.yaml"])
def test_rewriting_keeps_every_comment_of_the_examples(site: str, tmp_path: Path) -> None:
    text = example(site).read_text(encoding="utf-8")
    changes = {"coupling.strength": 12.5, "progress.recovery": 1e-05 + 0.3, "fleet.name": 'a"b',
               "commands.publish": False}
    new = rewritten(text, changes)
    (tmp_path / site).write_text(new, encoding="utf-8")
    wanted = config.from_parameters({**config.load(example(site)).flat, **changes}).flat
    assert config.load(tmp_path / site).flat == wanted
    comments = [line.partition("# ")[2] for line in text.splitlines()]
    assert [line.partition("# ")[2] for line in new.splitlines() if line.strip() != "progress:"
            and "recovery:" not in line] == comments
    column = {line.index("# ") for line in new.splitlines() if "strength: 12.5" in line}
    assert column == {line.index("# ") for line in text.splitlines() if "strength: 2.0" in line or "strength:" in line}


def test_a_sound_sweep_file_asks_for_what_it_says(tmp_path: Path) -> None:
    sweep = load_sweep(sweep_file(tmp_path))
    assert sweep.seeds == (1, 2) and sweep.objective == ASKED["objective"] and not math.isnan(sweep.points)
    assert [setting["coupling.strength"] for setting in sweep.settings()] == [0.5, 5.0, 50.0]


@pytest.mark.parametrize("name", ["sweep_solar_park.yaml", "sweep_snow_yard.yaml"])
def test_the_example_sweeps_are_sound_and_hold_the_file_as_it_stands(name: str) -> None:
    sweep = load_sweep(example(name))
    assert sweep.shipped() in sweep.settings() and len(sweep.manoeuvres) == 2
    assert sweep.base.invented
