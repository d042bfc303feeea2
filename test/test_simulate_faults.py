# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``simulate --faults FILE`` and what ``check`` says of a planner that falls silent."""

from pathlib import Path

import attrs
import pytest
from typer.testing import CliRunner

from coord_planner import config
from coord_planner.cli import app
from coord_planner.core.graph import NeighbourGraph
from coord_planner.errors import SettingsError
from coord_planner.trial.falling_silent import prospect
from coord_planner.trial.fault_file import load_faults

SITE = """\
/**:
  ros__parameters:
    robots:
      names: [a, b]
      a: {start_x: 0.0, start_y: 2.5}
      b: {start_x: 0.0, start_y: 0.0}
    graph:
      edges: ["a b"]
    horizon:
      intervals: 12
    site_rules:
      min_clearance: 0.85
    manoeuvres:
      names: [corner]
      corner: {kind: equal_radius, angle_deg: 40.0, radius: 4.0, speed: 1.0}
"""
GRAPH = NeighbourGraph(("a", "b"), (("a", "b", 1.0),))
GOOD = """\
faults:
  - {kind: robot_slow, robot: b, from_s: 1.0, to_s: 2.0, value: 0.5}
  - {kind: link_lost, edge: [a, b], from_s: 2, to_s: 3}
  - {kind: planner_fails, from_s: 0.5, to_s: 0.9}
"""


def written(folder: Path, text: str, name: str = "faults.yaml") -> Path:
    file = folder / name
    file.write_text(text, encoding="utf-8")
    return file


def call(*words: object) -> tuple[int, str]:
    done = CliRunner().invoke(app, [str(word) for word in words])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done.exit_code, done.output


def test_a_fault_file_is_read(tmp_path):
    found = load_faults(written(tmp_path, GOOD), GRAPH)
    assert [fault.kind for fault in found] == ["robot_slow", "link_lost", "planner_fails"]
    assert found[0].value == 0.5 and found[1].edge == ("a", "b")
    assert load_faults(written(tmp_path, "faults: []"), GRAPH) == ()


@pytest.mark.parametrize("text, words", [
    ("faults: [{kind: flood, from_s: 0, to_s: 1}]", ["faults[0].kind", "'flood'", "one of pose_lost"]),
    ("faults: [{kind: pose_lost, from_s: 0, to_s: 1}]", ["faults[0].robot", "a robot's name"]),
    ("faults: [{kind: pose_lost, robot: c, from_s: 0, to_s: 1}]", ["faults[0].robot", "'c'", "a, b"]),
    ("faults: [{kind: pose_lost, robot: a, from_s: 2, to_s: 1}]", ["faults[0].to_s", "later than from_s"]),
    ("faults: [{kind: robot_slow, robot: a, from_s: 0, to_s: 1}]", ["faults[0].value", "has to be given"]),
    ("faults: [{kind: robot_slow, robot: a, from_s: 0, to_s: 1, value: 3}]", ["faults[0].value", "0 to 1"]),
    ("faults: [{kind: robot_slow, robot: a, from_s: 0, to_s: 1, value: .nan}]", ["faults[0].value", "not a number"]),
    ("faults: [{kind: link_lost, edge: [a, c], from_s: 0, to_s: 1}]", ["faults[0].edge", "a b"]),
    ("faults: [{kinds: pose_lost, robot: a, from_s: 0, to_s: 1}]", ["faults[0].kinds", "did you mean kind"]),
    ("fault: []", ["fault", "did you mean faults"]), ("faults: 3", ["faults", "no list"]), ("- 1", ["no list of"]),
    ("", ["empty"]), ("faults: [", ["broken YAML"]),
])
def test_mistakes_exit_with_2_and_name_file_key_and_remedy(tmp_path, text, words):
    site, file = written(tmp_path, SITE, "site.yaml"), written(tmp_path, text)
    with pytest.raises(SettingsError):
        load_faults(file, GRAPH)
    code, said = call("simulate", site, "--manoeuvre", "corner", "--faults", file)
    assert code == 2 and "Traceback" not in said and "faults.yaml" in said.replace("\n", "")
    for word in words:
        assert word in said


def test_a_missing_file_is_no_traceback(tmp_path):
    code, said = call("simulate", written(tmp_path, SITE, "site.yaml"), "--manoeuvre", "corner", "--faults",
                      tmp_path / "none.yaml")
    assert code == 2 and "no such file" in said


def test_faults_strike_the_rehearsal_and_the_warnings_tell_of_them(tmp_path):
    site = written(tmp_path, SITE, "site.yaml")
    calm = call("simulate", site, "--manoeuvre", "corner")
    assert calm[0] == 0 and "robot not ready" not in calm[1]
    file = written(tmp_path, "faults: [{kind: not_ready, robot: b, from_s: 1.0, to_s: 2.0}]")
    code, said = call("simulate", site, "--manoeuvre", "corner", "--faults", file)
    assert code == 1 and "b: not ready to be driven" in said and "the fleet is held" in said


def test_check_plans_every_manoeuvre_and_says_what_silence_would_do(tmp_path):
    code, said = call("check", written(tmp_path, SITE, "site.yaml"))
    assert code == 0 and "corner: robots that time out separately come within" in said and "a and b" in said
    quick = call("check", written(tmp_path, SITE, "site.yaml"), "--quick")
    assert quick[0] == 0 and "fall silent" not in quick[1]
    placeless = SITE.replace("start_x: 0.0, start_y: 2.5", "max_speed: 1.5")
    nowhere = call("check", written(tmp_path, placeless, "site.yaml"))
    assert nowhere[0] == 0 and "Not looked at" in nowhere[1]


def test_unsafe_silence_is_told_with_instant_pair_and_remedy_and_refused_where_the_file_asks(tmp_path):
    """b, on the outside of the turn, turns on at its last command for 5 s, into where a stands already."""
    late = SITE.replace("start_y: 0.0}", "start_y: 0.0, command_timeout: 5.0}")
    code, said = call("check", written(tmp_path, late, "site.yaml"))
    assert code == 0 and "less than the site allows" in said and "silent after" in said and "time-outs" in said
    strict = late.replace("min_clearance: 0.85", "min_clearance: 0.85\n      refuse_unsafe_silence: true")
    code, said = call("check", written(tmp_path, strict, "site.yaml"))
    assert code == 1 and "would be refused" in said and "fall silent after" in said
    found = prospect(config.load(written(tmp_path, strict, "site.yaml")), "corner")
    assert found.refused and found.silence is not None
    assert found.silence.nearing is not None and found.silence.nearing.pair == ("a", "b")


def test_a_silent_planners_robots_also_stay_out_of_keep_outs_or_it_is_told_and_refused(tmp_path):
    """a ends a metre before a bed that lies ahead; with 2 s of time-out it drives into it."""
    bed = SITE.replace("min_clearance: 0.85", """min_clearance: 0.85
      keep_outs:
        names: [bed]
        bed: {corners: [4.7, 4.9, 5.7, 4.9, 5.7, 5.9, 4.7, 5.9]}""")
    prompt, late = (bed.replace("start_y: 2.5}", f"start_y: 2.5, command_timeout: {wait}}}") for wait in (0.2, 2.0))
    code, said = call("check", written(tmp_path, prompt, "site.yaml"))
    assert code == 0 and "m to spare to bed (a, silent after" in said and "too near to bed" not in said
    code, said = call("check", written(tmp_path, late, "site.yaml"))
    assert code == 0 and "m too near to bed (a, silent after" in said and "time-outs" in said
    code, said = call("simulate", written(tmp_path, late, "site.yaml"), "--manoeuvre", "corner")
    assert code == 0 and "a: should the planner fall silent" in said and "too near to bed before it stands" in said
    strict = late.replace("min_clearance: 0.85", "min_clearance: 0.85\n      refuse_unsafe_silence: true")
    code, said = call("check", written(tmp_path, strict, "site.yaml"))
    assert code == 1 and "would come" in said and "too near to bed before it stands" in said and "time-out" in said


def test_what_is_refused_from_the_starts_is_said_and_no_mistake_of_the_file(tmp_path):
    near = written(tmp_path, SITE.replace("start_y: 2.5", "start_y: 1.5"), "site.yaml")
    code, said = call("check", near)
    assert code == 0 and "corner: would be refused from the starts of the file: a and b stand 0.70 m apart" in said
    assert attrs.evolve(prospect(config.load(near), "corner"), refused="").silence is None
