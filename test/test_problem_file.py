# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem files: read and written alike, mistakes told with file, line, key, value and remedy; failures kept."""

import json
import math
import os

import attrs
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from coord_planner.config import problem_file
from coord_planner.config.failures import FailureStore
from coord_planner.config.problem_file import to_problem_file
from coord_planner.core.case import PlannerCase
from coord_planner.core.direct.heisenberg import HeisenbergProblem
from coord_planner.core.direct.problem import Caps, DirectProblem, SmallPrices, Speeds
from coord_planner.errors import SettingsError

GOOD = """\
robots:
  - {name: a, start: [0, 0, 0], end: [1.2, 1.0, 1.5707963]}
  - {name: b, start: [0, 1, 0], end_heading: 1.2}
  - {name: c, start: [0, 2, 0]}
edges: [[a, b], [b, c, 0.5]]
coupling: 1.0
duration: 3.0
intervals: 50
speed: 1.0
"""


def written(folder, text, name="problem.yaml"):
    file = folder / name
    file.write_text(text, encoding="utf-8")
    return file


def same(one, other, where=""):
    """Whether two values of the same type hold the same, arrays and all."""
    assert type(one) is type(other), where
    if attrs.has(type(one)):
        for field in attrs.fields(type(one)):
            same(getattr(one, field.name), getattr(other, field.name), f"{where}.{field.name}")
    elif isinstance(one, np.ndarray):
        np.testing.assert_array_equal(one, other, where)
    elif isinstance(one, tuple):
        assert len(one) == len(other), where
        for a, b in zip(one, other):
            same(a, b, where)
    else:
        assert one == other, where


def test_the_file_of_the_design(tmp_path):
    problem = problem_file.load(written(tmp_path, GOOD))
    assert problem.names == ("a", "b", "c") and problem.duration == 3.0 and problem.intervals == 50
    np.testing.assert_array_equal(problem.edges, [[0, 1], [1, 2]])
    np.testing.assert_array_equal(problem.weights, [1.0, 0.5])
    np.testing.assert_array_equal(problem.ends[0], [1.2, 1.0, 1.5707963])
    assert np.isnan(problem.ends[1, :2]).all() and problem.ends[1, 2] == 1.2 and np.isnan(problem.ends[2]).all()
    assert problem.classical


def test_json_is_read_as_yaml_is(tmp_path):
    """Also with tabs, which YAML forbids, and with a YAML flow mapping at the top."""
    problem = problem_file.load(written(tmp_path, GOOD))
    document = to_problem_file(problem)
    for text in (json.dumps(document), json.dumps(document, indent="\t"), json.dumps(document, indent=1)):
        same(problem_file.load(written(tmp_path, text, "x.json")), problem)
    same(problem_file.load(written(tmp_path, "{robots: [{name: y, start: [0, 0, 0]}], duration: 1e0}")).names, ("y",))


NUMBERS = st.floats(-50, 50)
LIMIT = st.one_of(st.just(math.inf), st.floats(0.01, 20))


@st.composite
def problems(draw):
    count = draw(st.integers(1, 4))
    place = [draw(st.tuples(NUMBERS, NUMBERS, NUMBERS)) for _ in range(2 * count)]
    ends = np.array(place[count:])
    for k in range(count):
        ends[k, : draw(st.sampled_from([0, 0, 2, 3]))] = math.nan
    speeds = draw(st.sampled_from([Speeds(1.0, 1.0, 1.0), Speeds(0.5, 2.0, 1.5), Speeds(-1.0, 1.0, 0.5)]))
    caps = {field.name: np.array([draw(LIMIT) for _ in range(count)]) for field in attrs.fields(Caps)}
    if speeds.fixed:
        caps |= {name: np.full(count, math.inf) for name in ("max_acceleration", "max_braking")}
    if speeds.reversing:
        caps["max_curvature"] = np.full(count, 0.7)
    joined = np.array([[k, k + 1] for k in range(count - 1)], dtype=int).reshape(-1, 2)
    return DirectProblem(
        tuple(draw(st.permutations(["a", "on", "1e5", "robot 4"])))[:count], np.array(place[:count]), ends, joined,
        np.array([draw(st.floats(0.1, 9)) for _ in joined]), draw(st.floats(0, 1000)), draw(st.floats(0.1, 100)),
        draw(st.integers(3, 300)), speeds, Caps(**caps), min_clearance=draw(st.floats(0.01, 5)),
        boxes=np.array([draw(st.sampled_from([(0, 0, 0, 0), (1.2, 0.8, 0.1, -0.2)])) for _ in range(count)]),
        alignment=draw(st.floats(0, 10)),
        prices=SmallPrices(draw(st.floats(0, 9)), *((0.0, 0.0) if speeds.fixed else (0.5, draw(st.floats(0, 9))))),
    )


@settings(max_examples=30, deadline=None)
@given(problems())
def test_what_is_written_is_read_back_exactly(tmp_path_factory, problem):
    file = tmp_path_factory.mktemp("file") / "problem.json"
    file.write_text(json.dumps(to_problem_file(problem), allow_nan=False), encoding="utf-8")
    same(problem_file.load(file), problem)


def test_a_driftless_problem_is_read_back(tmp_path):
    problem = HeisenbergProblem(("a", "b"), [[0, 1, 2], [0, 0, 0]], [[0, 0, 1], [math.nan] * 3], np.array([[0, 1]]),
                                np.array([2.0]), 4.0, 1.0, 30)
    same(problem_file.load(written(tmp_path, json.dumps(to_problem_file(problem)))), problem)


# What is exchanged in the good file, and what the message must name beside the file.
BAD = {
    "unknown key": ("coupling: 1.0", "couplng: 1.0", [":6: couplng", "did you mean coupling?"]),
    "unknown key of a robot": ("end_heading: 1.2", "end_headng: 1.2", [":3: robots[1].end_headng", "end_heading?"]),
    "missing duration": ("duration: 3.0\n", "", ["duration: it has to be given", "a number (in s) above 0"]),
    "missing start": ("start: [0, 2, 0]", "x: 0", ["robots[2].start", "has to be given", "[x, y, heading]"]),
    "wrong type": ("duration: 3.0", "duration: long", [":7: duration", "'long'", "a number"]),
    "half a number of intervals": ("intervals: 50", "intervals: 50.5", ["intervals", "50.5", "a whole number"]),
    "too many intervals": ("intervals: 50", "intervals: 5000", ["intervals", "at most 1000"]),
    "negative duration": ("duration: 3.0", "duration: -3.0", ["duration", "-3 s", "above 0"]),
    "negative coupling": ("coupling: 1.0", "coupling: -1.0", ["coupling", "at least 0"]),
    "no coupling": ("coupling: 1.0\n", "", ["coupling: it has to be given"]),
    "two numbers": ("start: [0, 2, 0]", "start: [0, 2]", [":4: robots[2].start", "[0, 2]", "[x, y, heading]"]),
    "not finite": ("start: [0, 2, 0]", "start: [0, .nan, 0]", ["robots[2].start", "nan", "finite"]),
    "huge": ("start: [0, 2, 0]", "start: [0, 1e300, 0]", ["robots[2].start", "at most"]),
    "a word for a number": ("start: [0, 2, 0]", "start: [0, two, 0]", ["robots[2].start", "'two'"]),
    "end and heading": ("end_heading: 1.2", "end: [1, 1, 1], end_heading: 1.2", ["robots[1].end_heading", "not both"]),
    "name twice": ("name: b", "name: a", ["robots[1].name", "'a' is given more than once"]),
    "number as a name": ("name: b", "name: 7", ["robots[1].name", "7 is not text", "quotes"]),
    "edge to nobody": ("[a, b]", "[a, z]", [":5: edges[0]", "'z'", "a, b, c"]),
    "self edge": ("[a, b]", "[a, a]", ["edges[0]", "itself"]),
    "edge twice": ("[b, c, 0.5]", "[b, a]", ["edges[1]", "twice"]),
    "bad weight": ("[b, c, 0.5]", "[b, c, -0.5]", ["edges[1]", "-0.5", "above 0"]),
    "no edge": ("[a, b]", "a b", ["edges[0]", "'a b' is no edge"]),
    "speed 0": ("speed: 1.0", "speed: 0", ["speed", "above 0"]),
    "speeds crossed": ("speed: 1.0", "speed: {min: 2, max: 1}", ["speed.min", "2 m/s", "at most max"]),
    "asked out of reach": ("speed: 1.0", "speed: {min: 0.5, max: 1, asked: 2}", ["speed.asked", "0.5 to 1 m/s"]),
    "speed without max": ("speed: 1.0", "speed: {min: 0.5}", ["speed.max", "has to be given"]),
    "reversing without a radius": ("speed: 1.0", "speed: {min: -1, max: 1}", ["limits.max_curvature", "reverse"]),
    "unknown limit": ("speed: 1.0", "limits: {max_curvatur: 1}", ["limits.max_curvatur", "did you mean max_curvature"]),
    "limit of 0": ("speed: 1.0", "limits: {max_curvature: 0}", ["limits.max_curvature", "above 0"]),
    "limit of no use": ("speed: 1.0", "limits: {max_braking: 1}", ["limits.max_braking", "speed: {min:, max:}"]),
    "speed as a limit": ("speed: 1.0", "limits: {max_speed: 1}", ["limits.max_speed", "speed: {min:, max:, asked:}"]),
    "limits no mapping": ("speed: 1.0", "limits: 4", ["limits", "4 is no mapping", "max_curvature"]),
    "price of no use": ("speed: 1.0", "prices: {speed: 1}", ["prices.speed", "speed: {min:, max:}"]),
    "half a footprint": ("speed: 1.0", "footprint: {footprint_length: 1}\nmin_clearance: 1", ["footprint_width"]),
    "footprint for nothing": ("speed: 1.0", "footprint: {footprint_length: 1, footprint_width: 1}", ["min_clearance"]),
    "unknown model": ("speed: 1.0", "model: so3", ["model", "'so3'", "se2, heisenberg, planner"]),
    "limits in the driftless model": ("speed: 1.0", "model: heisenberg\nlimits: {}", ["limits", "no use", "without"]),
    "key twice": ("coupling: 1.0", "coupling: 1.0\ncoupling: 2.0", ["coupling", "twice"]),
    "broken YAML": ("edges: [[a, b]", "edges: [[a, b}", ["broken YAML", "column"]),
    "alias": ("edges: [[a, b]", "edges: [[*a, b]", ["alias"]),
    "no robots": (GOOD[: GOOD.index("edges")], "robots: []\n", ["robots", "no robots"]),
    "robots no list": (GOOD[: GOOD.index("edges")], "robots: 5\n", ["robots", "5 is no list"]),
    "robots of numbers": (GOOD[: GOOD.index("edges")], "robots: [5]\n", ["robots[0]", "5 is no entry"]),
}


@pytest.mark.parametrize("case", BAD)
def test_mistakes_are_told_with_file_key_and_remedy(case, tmp_path):
    old, new, words = BAD[case]
    assert old in GOOD
    file = written(tmp_path, GOOD.replace(old, new, 1))
    with pytest.raises(SettingsError) as caught:
        problem_file.load(file)
    for line in str(caught.value).splitlines():
        assert line.startswith(str(file)), line
    for word in [*words, "; "]:
        assert word in str(caught.value), str(caught.value)


@pytest.mark.parametrize(
    ("text", "word"),
    [("", "empty"), ("   \n", "empty"), ("5", "no keys"), ("[1, 2]", "no keys"), ("{\"robots\": [", "broken JSON"),
     ("{\"a\": 1, \"a\": 2}", "twice"), ("robots: !!python/object:os.system {}", "robots"),
     ("a: [" * 2000, "broken YAML|nested too deeply")],
)
def test_what_is_no_problem_file(text, word, tmp_path):
    with pytest.raises(SettingsError, match=word):
        problem_file.load(written(tmp_path, text))


def test_files_that_cannot_be_read(tmp_path):
    (tmp_path / "bytes").write_bytes(b"\xff\xfe\x00")
    for file, word in ((tmp_path / "none", "no such file"), (tmp_path, "folder"), (tmp_path / "bytes", "UTF-8")):
        with pytest.raises(SettingsError, match=word):
            problem_file.load(file)


@settings(max_examples=60, deadline=None)
@given(st.recursive(st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=8),
                    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(
                        st.sampled_from(["robots", "name", "start", "end", "edges", "duration", "limits", "x"]), inner,
                        max_size=4), max_leaves=12))
def test_no_file_gives_anything_but_a_settings_error(tmp_path_factory, tree):
    file = tmp_path_factory.mktemp("any") / "problem.json"
    for model in ("se2", "heisenberg", "planner"):
        file.write_text(json.dumps({"robots": tree, "duration": 1, **(tree if isinstance(tree, dict) else {}),
                                    "model": model}), encoding="utf-8")
        try:
            problem_file.load(file)
        except SettingsError as error:
            assert str(error).startswith(str(file))


# Failures of the planner


@pytest.fixture(scope="module")
def case():
    """A program of the planner: two robots, three intervals, one pair watched, invented."""
    from coord_planner.core import ocp
    from coord_planner.core.fleet import Fleet, Robot
    from coord_planner.core.problem import Problem, Watch, bounds_in_force
    from coord_planner.core.settings import Prices
    from coord_planner.core.solver import Start

    fleet, times = Fleet((Robot("a"), Robot("b"))), np.array([0.0, 0.1, 0.35, 0.6])
    initial = np.array([[0, 0, 0.1, 0.01, 0.5, 0.02, 0.6], [0, 3, 0.2, 0, 0.5, 0, 0.5]])
    target = np.array([[0.3, 0.03, 0.1, math.nan, 0.5, 0.0, 0.5], [math.nan] * 7])
    random = np.random.default_rng(0)
    problem = Problem(
        fleet=fleet, edges=np.array([[0, 1]]), weights=np.array([0.7]), coupling=2.0, alignment=0.5, prices=Prices(),
        times=times, pace=0.9, initial=initial, asked_speed=np.full((2, 3), 0.5) + random.random((2, 3)) / 9,
        turn_speed=np.full((2, 3), 0.5), full_speed=np.array([0.5, 0.6]), target=target,
        bounds=bounds_in_force(fleet, initial, times, 9.0, 0.5, 2.0, 1.0),
        watch=Watch(np.array([[0, 1]]), np.tile([0.0, 1.0], (1, 3, 1)), np.full((1, 3), 1.1)),
    )
    shape = problem.shape
    vector = random.normal(size=ocp.variable_blocks(shape).size)
    rows = random.normal(size=ocp.row_blocks(shape).size)
    return PlannerCase(problem, Start(vector, (vector / 3, rows)), True, "a plan took 120 ms")


def test_a_program_of_the_planner_is_read_back_exactly(case, tmp_path):
    for saved in (case, PlannerCase(case.problem)):
        document = json.dumps(to_problem_file(saved), allow_nan=False)
        same(problem_file.load(written(tmp_path, document, "case.json")), saved)
    same(problem_file.load(written(tmp_path, json.dumps(to_problem_file(case.problem)))), PlannerCase(case.problem))


def test_how_neighbours_are_compared_is_kept(case, tmp_path):
    from coord_planner.core.problem import Comparison

    whole, parts = np.array([0, 0]), np.array([[0.3, 0.7], [1.0, 0.0]])
    at, known = np.array([0, 1]), np.array([0.1, 0.0])
    compared = Comparison(whole, at, at[::-1].copy(), parts, parts / 3, known, whole + 0.25)
    problem = attrs.evolve(case.problem, compared=compared)
    document = to_problem_file(problem)
    same(problem_file.load(written(tmp_path, json.dumps(document))), PlannerCase(problem))
    for key, wrong, words in (("first_at", [0, 2], "from 0 to 1"), ("edges", [0, 1], "from 0 to 0"),
                              ("known", [1.0], "2 finite numbers"), ("width", 9, "at most 3")):
        spoilt = {**document, "compared": {**document["compared"], key: wrong}}
        with pytest.raises(SettingsError, match=words):
            problem_file.load(written(tmp_path, json.dumps(spoilt)))


@pytest.mark.parametrize(
    ("change", "words"),
    [(lambda d: d.pop("times"), ["times", "has to be given"]),
     (lambda d: d["times"].reverse(), ["times", "increasing"]),
     (lambda d: d["robots"][0].pop("bounds"), ["robots[0].bounds"]),
     (lambda d: d["robots"][0]["bounds"].pop("min_speed"), ["robots[0].bounds.min_speed"]),
     (lambda d: d["robots"][1]["limits"].update(max_speed=-1), ["robots[1].limits.max_speed", "above 0"]),
     (lambda d: d["robots"][1]["limits"].update(min_speed=5), ["robots[1].limits.min_speed", "max_speed"]),
     (lambda d: d["robots"][1].update(asked_speed=[1]), ["robots[1].asked_speed", "3 finite numbers"]),
     (lambda d: d["watch"][0].update(pair=["a", "q"]), ["watch[0]", "no pair"]),
     (lambda d: d["begun"].update(vector=[1.0]), ["begun.vector"]), (lambda d: d.update(pcae=1), ["pcae", "pace"]),
     (lambda d: d.update(watch=[{"pair": 3}]), ["watch[0]"]), (lambda d: d.update(prices=3), ["prices", "no mapping"])],
)
def test_mistakes_in_a_saved_program(change, words, case, tmp_path):
    document = to_problem_file(case)
    change(document)
    with pytest.raises(SettingsError) as caught:
        problem_file.load(written(tmp_path, json.dumps(document), "case.json"))
    for word in words:
        assert word in str(caught.value)


def test_failures_are_kept_up_to_a_number_and_a_size(tmp_path):
    store = FailureStore(tmp_path / "new" / "failures", most=3, max_bytes=1000)
    files = [store.save({"number": i, "fill": "x" * 200}, f"corner left/{i}") for i in range(5)]
    assert [file.name for file in store.files()] == [file.name for file in files[2:]]
    assert files[4].name == "problem_000005_corner_left_4.json" and json.loads(files[4].read_text())["number"] == 4
    big = store.save({"fill": "x" * 700})
    assert [file.name for file in store.files()] == [files[4].name, big.name]  # what does not fit beside it is removed
    assert store.save({"fill": "x" * 2000}) is None and "larger" in store.trouble
    assert len(store.files()) == 2
    (tmp_path / "new" / "failures" / "notes.json").write_text("mine")  # of others it removes nothing
    for i in range(4):
        store.save({"number": i})
    assert (tmp_path / "new" / "failures" / "notes.json").exists() and len(store.files()) == 3


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write everywhere")
def test_a_disk_that_refuses_disturbs_nobody(tmp_path):
    tmp_path.chmod(0o500)
    store = FailureStore(tmp_path / "failures")
    assert store.save({}) is None and "failures" in store.trouble


def test_what_is_not_finite_disturbs_nobody(case, tmp_path):
    """Multipliers of a solve that diverged are left out; a problem that is not finite itself cannot be kept."""
    spoilt = attrs.evolve(case, start=attrs.evolve(case.start, multipliers=(case.start.vector * math.nan,) * 2))
    store = FailureStore(tmp_path)
    back = problem_file.load(store.save(to_problem_file(spoilt)))
    assert back.start is None and "not finite" in back.reason
    same(back.problem, case.problem)
    nowhere = attrs.evolve(case.problem, initial=case.problem.initial * math.nan)
    assert store.save(to_problem_file(nowhere)) is None and "not finite" in store.trouble


def test_a_file_in_the_way_disturbs_nobody(tmp_path):
    store = FailureStore(written(tmp_path, "x") / "failures")
    assert store.save({}) is None and store.trouble and store.files() == []
