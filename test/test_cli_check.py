# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The command: exit status, what goes to stdout and stderr, and bad input, which never gives a traceback."""

import json
import os
import subprocess
import sys
from pathlib import Path

import attrs
import pytest
from made_up_run import turn
from typer.testing import CliRunner

from coord_planner import config
from coord_planner.cli import app
from coord_planner.config.places import example
from coord_planner.errors import RefusedError, SettingsError

ROOT = Path(__file__).parents[1]
PARK = ROOT / "config" / "solar_park.yaml"


def command(*words: object) -> subprocess.CompletedProcess[str]:
    """``coord-planner`` in a process of its own."""
    return subprocess.run(
        [sys.executable, "-W", "error", "-c", "from coord_planner.cli import main; main()", *map(str, words)],
        capture_output=True, text=True, timeout=120, check=False, env={**os.environ, "PYTHONPATH": str(ROOT)},
    )


def call(*words: object) -> tuple[int, str]:
    """Exit status and all output of a call within this process."""
    done = CliRunner().invoke(app, [str(word) for word in words])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done.exit_code, done.output


def changed(folder: Path, old: str, new: str) -> Path:
    """The solar park with one passage exchanged."""
    text = PARK.read_text(encoding="utf-8")
    assert old in text
    file = folder / "changed.yaml"
    file.write_text(text.replace(old, new, 1), encoding="utf-8")
    return file


# The bad inputs of a user's day: what is exchanged in the file, and what the message must name.
BAD = {
    "unknown key": ("strength:", "strenght:", ["coupling.strenght", "did you mean coupling.strength"]),
    "wrong type": ("rate: 10.0", "rate: fast", ["horizon.rate", "'fast'", "a number", "1/s"]),
    "negative limit": ("max_curvature: 0.8", "max_curvature: -0.8",
                       ["robot_defaults.max_curvature", "-0.8 1/m", "above 0"]),
    "unknown robot in an end": ("mower_1 pose 6.0", "mower_9 pose 6.0",
                                ["manoeuvres.led_left.ends_deg", "mower_9", "robots.names", "mower_1, mower_2"]),
    "edge to nobody": ('"mower_1 mower_2"', '"mower_1 mower_9"', ["graph.edges", "mower_9", "not in the fleet"]),
    "self edge": ('"mower_1 mower_2"', '"mower_1 mower_1"', ["graph.edges", "itself"]),
    "bad weight": ('"mower_1 mower_2"', '"mower_1 mower_2 -1"', ["graph.edges", "-1", "above 0"]),
    "duplicate name": ("names: [mower_1, mower_2", "names: [mower_1, mower_1",
                       ["robots.names", "mower_1", "more than once"]),
    "contradiction": ("min_speed: 0.0 ", "min_speed: 1.5 ",
                      ["robot_defaults.min_speed", "1.5 m/s", "max_speed, 1.4 m/s"]),
    "key twice": ("    coupling:\n", "    horizon: {rate: 5.0}\n    coupling:\n", ["horizon", "twice", "on line"]),
    "broken YAML": ("names: [mower_1, mower_2", "names: [mower_1: , {mower_2", ["broken YAML", "column"]),
}


@pytest.mark.parametrize("case", BAD)
def test_bad_input_is_two_with_file_key_value_and_remedy(case: str, tmp_path: Path) -> None:
    old, new, words = BAD[case]
    file = changed(tmp_path, old, new)
    for arguments in (["check", file], ["simulate", file, "--manoeuvre", "corner_left", "--json"]):
        status, output = call(*arguments)
        assert status == 2, output
        assert output.startswith(f"{file}:"), output
        for word in words:
            assert word in output, output
        assert "Traceback" not in output


@pytest.mark.parametrize("what", ["missing", "empty", "folder", "not UTF-8", "no section"])
def test_what_is_no_parameter_file_is_two(what: str, tmp_path: Path) -> None:
    file = tmp_path / "x.yaml"
    contents = {"empty": b"", "not UTF-8": b"\xff\xfe\x00", "no section": b"robots: {names: [a]}\n"}
    if what in contents:
        file.write_bytes(contents[what])
    status, output = call("check", tmp_path if what == "folder" else file)
    assert status == 2 and len(output.splitlines()) == 1 and "allowed: " in output, output


def test_messages_on_stderr_results_on_stdout(tmp_path: Path) -> None:
    bad = command("check", changed(tmp_path, "strength:", "strenght:"))
    assert bad.returncode == 2 and bad.stdout == ""
    assert len(bad.stderr.splitlines()) == 1 and "Traceback" not in bad.stderr
    good = command("check", PARK, "--quick")
    assert good.returncode == 0 and good.stderr == ""
    for words in ("mower_6", "corner_left", "radius 4 m", "0.85 m", "not a safety function"):
        assert words in good.stdout


@pytest.mark.parametrize("words", [
    ["check"], ["simulate", PARK], ["chek", PARK], ["check", PARK, "--colour"],
    ["simulate", PARK, "--manoeuvre", "corner_left", "--seed", "-1"],
    ["simulate", PARK, "--manoeuvre", "corner_left", "--seed", "one"],
], ids=lambda words: " ".join(Path(str(word)).name for word in words))
def test_bad_usage_is_two(words: list[object]) -> None:
    status, output = call(*words)
    assert status == 2 and "Error" in output, output


def test_simulate_says_what_it_cannot_use(tmp_path: Path) -> None:
    for words, told in [
        (["--manoeuvre", "corner_right"], ["no manoeuvre 'corner_right'", "corner_left, led_left, to_places"]),
        (["--manoeuvre", "corner_left", "--set", "coupling.strength"], ["--set", "KEY=VALUE"]),
        (["--manoeuvre", "corner_left", "--set", "coupling.strength=-1"], ["--set: coupling.strength", "at least 0"]),
        (["--manoeuvre", "corner_left", "--set", "horizon.budget=0.5"], ["with --set: horizon.budget", "tick"]),
        (["--manoeuvre", "corner_left", "--page", tmp_path], ["--page", "is a folder"]),
    ]:
        status, output = call("simulate", PARK, *words)
        assert status == 2, output
        for word in told:
            assert word in output, output
    start = "{start_x: 0.0, start_y: 7.5, start_heading_deg: 0.0}"
    no_start = changed(tmp_path, f"mower_3: {start}", "mower_3: {enabled: true}")
    status, output = call("simulate", no_start, "--manoeuvre", "corner_left")
    assert status == 2 and "robots.mower_3.start_x" in output


def test_a_refused_manoeuvre_is_one_with_reason_and_remedy() -> None:
    tight = ["simulate", PARK, "--manoeuvre", "corner_left", "--set", "manoeuvres.corner_left.radius=0.5"]
    refused = command(*tight, "--json")
    assert refused.returncode == 1
    answer = json.loads(refused.stdout)
    assert answer["completed"] is False and answer["state"] == "refused"
    assert "mower_1" in answer["reason"] and "1.25 m" in answer["remedy"]
    assert "Traceback" not in refused.stderr and "1.25 m" in refused.stderr


def test_exit_status_and_output_follow_what_happened(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    # A made-up record in place of the rehearsal: this is about the command, not about the planner.
    run = attrs.evolve(turn(), completed=True, state="ended", min_clearance=0.1)
    calls = []

    def rehearse(configuration, manoeuvre, *, seed, faults, seen, progress=None):
        calls.append((configuration.settings.coupling.strength, manoeuvre, seed))
        return run

    monkeypatch.setattr("coord_planner.trial.rehearsal.rehearse", rehearse)
    words = ["simulate", PARK, "--manoeuvre", "corner_left"]
    page = tmp_path / "new" / "page.html"
    status, output = call(*words, "--set", "coupling.strength=0.5", "--seed", 7, "--page", page)
    assert status == 0, output
    assert calls == [(0.5, "corner_left", 7)]
    assert "mower_6" in output and "0 contacts" in output and page.stat().st_size > 1000
    status, output = call(*words, "--json")
    assert status == 0 and json.loads(output)["contacts"] == 0
    park = config.load(PARK)
    assert calls[-1] == (park.settings.coupling.strength, "corner_left", park.simulation.seed)
    for bad, told in [({"completed": False, "state": "held"}, "it was not completed, the fleet is held"),
                      ({"min_clearance": 50.0}, "the site allows 50 m")]:
        run = attrs.evolve(run, **bad)
        status, output = call(*words)
        assert status == 1 and told in output

    def refuse(*_args, **_keywords):
        raise RefusedError("too tight", "ask for more")

    monkeypatch.setattr("coord_planner.trial.rehearsal.rehearse", refuse)
    assert call(*words) == (1, "too tight; ask for more\n")


def test_demo_without_ros_says_what_to_install(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("coord_planner.commands.demo.find_spec", lambda _name: None)
    status, output = call("demo")
    assert status == 2 and len(output.splitlines()) == 2 and "'.[ros]'" in output


def test_results_that_cannot_be_written_are_told_before_the_run(tmp_path: Path) -> None:
    in_the_way = tmp_path / "file"
    in_the_way.write_text("x", encoding="utf-8")
    status, output = call("simulate", PARK, "--manoeuvre", "corner_left", "--page", in_the_way / "page.html")
    assert status == 2 and output.startswith("--page: nothing can be written into"), output


def test_demo_looks_at_the_file_before_it_starts_anything(tmp_path: Path) -> None:
    status, output = call("demo", "--params", tmp_path / "none.yaml")
    assert status == 2 and "no such file" in output


def test_examples_are_found_where_ros_then_pip_then_the_tree_has_them(tmp_path: Path) -> None:
    share = tmp_path / "share" / "coord_planner" / "config"
    share.mkdir(parents=True)
    (share / "solar_park.yaml").write_text("x", encoding="utf-8")
    prefixes = {"AMENT_PREFIX_PATH": os.pathsep.join([str(tmp_path / "other"), str(tmp_path)])}
    assert example("solar_park.yaml", prefixes) == share / "solar_park.yaml"
    assert example("solar_park.yaml", {}).is_file()
    with pytest.raises(SettingsError, match="not installed"):
        example("nowhere.yaml", {})
