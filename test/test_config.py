# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parameter files: what is read, what is refused, and with which words."""

import array
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import attrs
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from coord_planner import config
from coord_planner.config import Configuration
from coord_planner.config.file import read as read_file
from coord_planner.config.notes import notes
from coord_planner.core.fleet import Limits
from coord_planner.core.manoeuvre import EqualRadius, ToEnds
from coord_planner.errors import SettingsError

SITES = Path(__file__).parents[1] / "config"
SOUND: dict[str, Any] = {
    "robots.names": ["a", "b"],
    "robots.a.start_x": 0, "robots.a.start_y": 0.0,
    "robots.b.start_x": 0.0, "robots.b.start_y": 3.0, "robots.b.start_heading_deg": 90,
    "robot_defaults.max_speed": 2,
    "robots.b.max_speed": 1.5,
    "graph.edges": ["a b 0.5"],
    "manoeuvres.names": ["corner", "led"],
    "manoeuvres.corner.kind": "equal_radius", "manoeuvres.corner.radius": 4.0,
    "manoeuvres.led.kind": "to_ends", "manoeuvres.led.ends_deg": ["a pose 6 8 90"],
}
CAR = {"robots.a.drive": "car_like", "robots.a.wheelbase": 1.2, "robots.a.max_steering_angle_deg": 35.0,
       "robots.a.max_steering_rate_deg": math.degrees(0.5)}


def read(**changes: Any) -> Configuration:
    """The sound file with keys changed, written with ``__`` for the dot; None takes a key away."""
    flat = SOUND | {key.replace("__", "."): value for key, value in changes.items()}
    return config.from_parameters({key: value for key, value in flat.items() if value is not None}, "site.yaml")


def write(folder: Path, text: str) -> Path:
    file = folder / "site.yaml"
    file.write_text(text, encoding="utf-8")
    return file


# ---- what is read ----


def test_values_fall_back_from_the_robot_to_the_shared_ones_to_the_default() -> None:
    fleet = read().fleet
    assert [robot.limits.max_speed for robot in fleet.robots] == [2.0, 1.5]
    assert isinstance(fleet.robots[0].limits.max_speed, float)  # a whole number was given
    assert fleet.robots[0].limits.max_braking == Limits().max_braking


def test_the_parts_of_a_configuration() -> None:
    configuration = read(fleet__frame="site", simulation__seed=7, coupling__strength=3)
    assert configuration.file == "site.yaml" and configuration.frame == "site"
    assert configuration.edges == (("a", "b", 0.5),)
    assert configuration.graph.weights().tolist() == [0.5]
    assert configuration.settings.coupling.strength == 3.0
    assert configuration.simulation.seed == 7
    assert configuration.starts == {"a": (0.0, 0.0, 0.0), "b": (0.0, 3.0, math.pi / 2)}
    assert configuration.enabled == {"a", "b"}
    assert configuration.manoeuvres["corner"] == EqualRadius(radius=4.0)
    assert configuration.manoeuvres["led"] == ToEnds(ends_deg=("a pose 6 8 90",))
    assert configuration.connections["a"].pose_topic == "a/pose"
    assert configuration.connections["b"].command_topic == "b/cmd_vel"


def test_lists_may_come_as_ros_gives_them() -> None:
    flat = SOUND | {"robots.names": ("a", "b"), "use_sim_time": True, "qos_overrides./clock.subscription.depth": 1}
    assert config.from_parameters(flat).fleet.names == ("a", "b")
    with pytest.raises(SettingsError, match=r"1\.0 is not a list of words"):
        config.from_parameters(SOUND | {"graph.edges": array.array("d", [1.0])})


def test_a_car_gets_its_limits_from_its_steering() -> None:
    robot = config.from_parameters(SOUND | CAR).fleet.robots[0]
    # bicycle model, shared/checks.md section 6 (common practice): 1.2 m, 35 degrees
    assert robot.limits.max_curvature == pytest.approx(0.583506281841, rel=1e-9)
    assert robot.limits.max_curvature_rate == pytest.approx(0.5 / 1.2)
    tighter = config.from_parameters(SOUND | CAR | {"robots.a.max_curvature": 0.5}).fleet.robots[0]
    assert tighter.limits.max_curvature == 0.5


def test_poses_of_a_cars_centre_are_moved_to_its_rear_axle() -> None:
    car = CAR | {"robots.a.footprint_offset_x": 0.1, "robots.a.start_heading_deg": 90}
    configuration = config.from_parameters(SOUND | car)
    connection = configuration.connections["a"]
    assert connection.reference_point == "centre" and connection.pose_offset_x == pytest.approx(0.6)
    # The same points of the machine: the footprint moves with its frame, the start and the end back by 0.6 m.
    assert configuration.fleet.robots[0].footprint.footprint_offset_x == pytest.approx(0.7)
    assert configuration.starts["a"] == pytest.approx((0.0, -0.6, math.pi / 2))
    led = configuration.manoeuvres["led"]
    assert isinstance(led, ToEnds)
    end = led.ends()["a"]
    assert (end.x, end.y, end.heading) == pytest.approx((6.0, 7.4, math.pi / 2))
    assert connection.reported_pose(*connection.planned_pose(1.0, 2.0, 0.3)) == pytest.approx((1.0, 2.0, 0.3))
    at_axle = config.from_parameters(SOUND | car | {"robots.a.reference_point": "rear_axle"})
    assert at_axle.starts["a"] == pytest.approx((0.0, 0.0, math.pi / 2))
    assert at_axle.fleet.robots[0].footprint.footprint_offset_x == 0.1


def test_the_file_says_what_ros_would_be_given(tmp_path: Path) -> None:
    text = """
/**:
  ros__parameters:
    robots: {names: [a, b]}
    coupling: {strength: 1e-3}          # a number for ROS, though not for YAML 1.1
    graph.edges: []
    fleet: {name: 2024-01-01}           # a word for ROS, though a date for YAML 1.1
planner:
  ros__parameters:
    coupling: {strength: 2.0}
other_node:
  ros__parameters: {speed: 1.0}
"""
    configuration = config.load(write(tmp_path, text))
    assert configuration.settings.coupling.strength == 2.0  # the planner's own section wins
    assert configuration.fleet_name == "2024-01-01"
    assert configuration.edges == ()


# ---- what is refused: by key ----

REFUSED: list[tuple[dict[str, Any], str, str]] = [
    # changes, key that must be named, words that must be there
    ({"coupling.strenght": 1.0}, "coupling.strenght", r"did you mean coupling\.strength\?"),
    ({"coupling.colour": 1.0}, "coupling.colour", r"in coupling: strength, alignment"),
    ({"colour": 1.0}, "colour", r"at the top: .*robots"),
    ({"robots.c.max_speed": 1.0}, "robots.c.max_speed", r"'c' is not in robots\.names.*allowed: a, b"),
    ({"manoeuvres.corners.radius": 1.0}, "manoeuvres.corners.radius", r"did you mean corner\?"),
    ({"coupling.strength": "strong"}, "coupling.strength", r"'strong' is not a number.*at least 0"),
    ({"coupling.strength": True}, "coupling.strength", r"True is not a number"),
    ({"coupling.strength": [1.0]}, "coupling.strength", r"\[1\.0\] is not a number"),
    ({"coupling.strength": math.nan}, "coupling.strength", r"nan is out of range"),
    ({"coupling.strength": 10**400}, "coupling.strength", r"out of range"),
    ({"horizon.intervals": 24.5}, "horizon.intervals", r"24\.5 is not a whole number"),
    ({"commands.publish": "yes"}, "commands.publish", r"'yes' is not true or false"),
    ({"fleet.name": 5}, "fleet.name", r"5 is not text; put it in quotes"),
    ({"fleet.frame": "my map"}, "fleet.frame", r"without spaces"),
    ({"robots.a.max_curvature": -0.5}, "robots.a.max_curvature", r"-0\.5 1/m is out of range.*above 0"),
    ({"robot_defaults.max_braking": 0.0}, "robot_defaults.max_braking", r"0 m/s\^2 is out of range"),
    ({"robots.a.drive": "tracked"}, "robots.a.drive", r"'tracked'.*one of differential, car_like"),
    ({"robots.a.min_speed": 2.5}, "robots.a.min_speed", r"2\.5 m/s is above max_speed, 2 m/s"),
    ({"robots.a.min_speed": 0.5}, "robots.a.min_speed", r"at progress\.slowest"),
    ({"robot_defaults.min_speed": 0.05, "site_rules.max_speed": 0.04}, "robot_defaults.min_speed", r"site_rules\.max"),
    ({"horizon.budget": 0.2}, "horizon.budget", r"0\.2 s is longer than a tick, 0\.1 s"),
    ({"horizon.lead": 9.0}, "horizon.lead", r"beyond the horizon, 6 s"),
    ({"robots.a.command_timeout": 0.04}, "robots.a.command_timeout", r"next command.*above 0\.05"),
    ({"simulation.speed_lag": -0.5}, "simulation.speed_lag", r"-1"),
    ({"robots.names": []}, "robots.names", r"no robots"),
    ({"robots.names": ["a", "b", "a"]}, "robots.names", r"a is given more than once"),
    ({"robots.names": ["a", "b", "c.d"]}, "robots.names", r"'c\.d' cannot be a name"),
    ({"robots.names": "a"}, "robots.names", r"'a' is not a list of words"),
    ({"manoeuvres.names": ["corner", "led", "led"]}, "manoeuvres.names", r"led is given more than once"),
    ({"manoeuvres.corner.kind": "loop"}, "manoeuvres.corner.kind", r"'loop'.*one of equal_radius, to_ends"),
    ({"manoeuvres.corner.ends_deg": ["a pose 9"]}, "manoeuvres.corner.ends_deg", r"in manoeuvres\.corner: .*angle"),
    ({"manoeuvres.led.ends_deg": ["c pose 1 2 3"]}, "manoeuvres.led.ends_deg", r"'c', which is not in robots\.n.*a, b"),
    ({"manoeuvres.led.ends_deg": ["a pose 1 2"]}, "manoeuvres.led.ends_deg", r"'a pose 1 2'.*NAME pose X Y HEADING"),
    ({"manoeuvres.led.ends_deg": ["a pose 1 2 nan"]}, "manoeuvres.led.ends_deg", r"'a pose 1 2 nan'"),
    ({"manoeuvres.led.ends_deg": ["a pose 1e9 2 3"]}, "manoeuvres.led.ends_deg", r"out of range"),
    ({"manoeuvres.led.ends_deg": ["a heading 1", "a heading 2"]}, "manoeuvres.led.ends_deg", r"one end"),
    ({"manoeuvres.led.ends_deg": []}, "manoeuvres.led.ends_deg", r"no robot has an end"),
    ({"graph.edges": ["a c"]}, "graph.edges", r"'c', which is not in the fleet.*a, b"),
    ({"graph.edges": ["a a"]}, "graph.edges", r"joins 'a' with itself"),
    ({"graph.edges": ["a b", "b a"]}, "graph.edges", r"twice"),
    ({"graph.edges": ["a b 0"]}, "graph.edges", r"'a b 0' has the weight 0.*above 0"),
    ({"graph.edges": ["a b heavy"]}, "graph.edges", r"'a b heavy' has a weight that is no number"),
    ({"graph.edges": ["a"]}, "graph.edges", r"'a' is no edge.*NAME NAME WEIGHT"),
    ({"robots.a.enabled": False, "robots.b.enabled": False}, "robots.a.enabled", r"no robot is enabled"),
    ({"robots.a.command_topic": "b/cmd_vel"}, "robots.b.command_topic", r"used by a and by b"),
    ({"robot_defaults.pose_topic": "pose"}, "robot_defaults.pose_topic", r"used by a and by b.*\{name\}"),
    ({"robots.a.pose_topic": "1/pose"}, "robots.a.pose_topic", r"'1/pose' is no topic name"),
    ({"robots.a.drive": "car_like"}, "robots.a.wheelbase", r"needs its wheelbase"),
    ({"robots.a.wheelbase": 1.0}, "robots.a.wheelbase", r"only a car_like robot"),
    ({"robots.a.command_type": "steering"}, "robots.a.command_type", r"needs a car_like robot"),
    (CAR | {"robots.a.max_curvature": 0.6}, "robots.a.max_curvature", r"the steering gives, 0\.5835 1/m.*left out"),
    (CAR | {"robot_defaults.max_curvature_rate": 0.5}, "robot_defaults.max_curvature_rate", r"more than the steering"),
]


@pytest.mark.parametrize(("changes", "key", "words"), REFUSED, ids=[key for _, key, _ in REFUSED])
def test_bad_values_are_refused_with_file_key_and_remedy(changes: dict[str, Any], key: str, words: str) -> None:
    with pytest.raises(SettingsError, match=words) as caught:
        config.from_parameters(SOUND | changes, "site.yaml")
    first = str(caught.value).splitlines()[0]
    assert first.startswith(f"site.yaml: {key}: "), first


def test_half_a_start_is_refused() -> None:
    with pytest.raises(SettingsError, match=r"robots\.a\.start_y: a has a start_x but no start_y"):
        read(robots__a__start_y=None)


def test_what_must_be_given() -> None:
    with pytest.raises(SettingsError, match=r"manoeuvres\.led\.ends_deg: it has to be given"):
        read(manoeuvres__led__ends_deg=None)
    with pytest.raises(SettingsError, match=r"manoeuvres\.led\.kind: the manoeuvre 'led' has no kind"):
        read(manoeuvres__led__kind=None)
    with pytest.raises(SettingsError, match=r"robots\.names: the fleet has no robots"):
        config.from_parameters({})


def test_everything_that_is_wrong_is_told_at_once_and_each_thing_once() -> None:
    with pytest.raises(SettingsError) as caught:
        read(robot_defaults__min_speed=9, coupling__strength=-1, colour=1)
    assert len(str(caught.value).splitlines()) == 2  # contradictions are looked for once the values are right
    assert isinstance(caught.value, config.SeveralSettingsErrors) and len(caught.value.errors) == 2
    with pytest.raises(SettingsError) as caught:
        read(robot_defaults__min_speed=3, robots__b__max_speed=2)
    # One slip in robot_defaults, not one for each robot.
    assert not isinstance(caught.value, config.SeveralSettingsErrors)


# ---- what is refused: files ----

HEAD = "/**:\n  ros__parameters:\n"
BROKEN = {
    "empty": ("", r"site\.yaml: it is empty"),
    "comments": ("# nothing\n", r"site\.yaml: it is empty"),
    "no mapping": ("- a\n- b\n", r"`key: value`"),
    "no section": ("robots:\n  names: [a]\n", r"no ros__parameters in it.*/\*\*:"),
    "another's section": ("camera:\n  ros__parameters:\n    rate: 1.0\n", r"only camera"),
    "empty section": ("/**:\n  ros__parameters:\n", r"site\.yaml:2: ros__parameters of /\*\* is empty"),
    "tab": ("/**:\n\tros__parameters: {}\n", r"site\.yaml:2: broken YAML, column 1.*no tabs"),
    "open quote": (HEAD + "    fleet: {name: 'x}\n", r"broken YAML"),
    "control character": (HEAD + "    fleet: {name: \x07}\n", r"broken YAML"),
    "two documents": (HEAD + "    robots: {names: [a]}\n---\na: 1\n", r"broken YAML"),
    "key twice": (HEAD + "    robots: {names: [a]}\n    robots: {names: [b]}\n",
                  r"site\.yaml:4: robots stands there twice, first on line 3"),
    "dotted key twice": (HEAD + "    robots: {names: [a]}\n    robots.names: [b]\n",
                         r"site\.yaml:4: robots\.names: stands there twice, first on line 3"),
    "alias": (HEAD + "    robots: {names: &n [a]}\n    manoeuvres: {names: *n}\n", r"site\.yaml:4: the alias \*n"),
    "tag": (HEAD + "    robots: {names: !!python/name:os.system }\n", r"robots\.names: the tag"),
    "list in list": (HEAD + "    robots: {names: [[a]]}\n", r"robots\.names: a list or a group inside a list"),
    "mixed list": (HEAD + "    robots: {names: [a, 5]}\n", r"mixes kinds"),
    "no value": (HEAD + "    robots: {names: [a]}\n    coupling:\n      strength:\n",
                 r"site\.yaml:5: coupling\.strength: no value"),
    "wrong value": (HEAD + "    robots: {names: [a]}\n    coupling:\n      strength: x\n",
                    r"site\.yaml:5: coupling\.strength: 'x' is not a number"),
    "number key": (HEAD + "    1: 2\n    robots: {names: [a]}\n", r"1: it is not a known key"),
    "list as key": (HEAD + "    [a]: 2\n", r"a key is no word"),
    "deep": ("[" * 5000, r"nested too deeply|broken YAML"),
}


@pytest.mark.parametrize("case", BROKEN)
def test_broken_files_are_refused_with_their_line(case: str, tmp_path: Path) -> None:
    text, words = BROKEN[case]
    with pytest.raises(SettingsError, match=words) as caught:
        config.load(write(tmp_path, text))
    assert "site.yaml" in str(caught.value) and len(str(caught.value).splitlines()) == 1


def test_what_is_no_file(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match="no such file"):
        config.load(tmp_path / "none.yaml")
    with pytest.raises(SettingsError, match="it is a folder"):
        config.load(tmp_path)
    with pytest.raises(SettingsError, match="cannot be read"):
        config.load("a\0b")
    latin = tmp_path / "latin.yaml"
    latin.write_bytes((HEAD + "    fleet: {name: h\xe4ll}\n").encode("latin-1"))
    with pytest.raises(SettingsError, match=r"latin\.yaml:3: it is not UTF-8"):
        config.load(latin)


# ---- whatever comes ----

scalars = st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=12)
values = scalars | st.lists(scalars, max_size=3) | st.dictionaries(st.text(max_size=5), scalars, max_size=2)
keys = st.text(max_size=12) | st.sampled_from([
    *SOUND, *CAR, "fleet.frame", "horizon.intervals", "robots.b.pose_source", "robot_defaults.min_speed",
    "simulation.command_delay", "robots.a.enabled",
])
anything = settings(deadline=None)  # the machine is shared


@anything
@given(st.dictionaries(keys, values, max_size=4), st.booleans())
def test_nothing_but_a_settings_error_comes_out_of_any_parameters(given_values: dict[str, Any], alone: bool) -> None:
    only_settings_errors(lambda: config.from_parameters(given_values if alone else SOUND | given_values, "x.yaml"))


@anything
@given(st.text(st.sampled_from("abx:-[]{}#&*!|>'\"\n\t 0.1e,?%@=\0\x85"), max_size=60))
def test_nothing_but_a_settings_error_comes_out_of_any_text(text: str) -> None:
    only_settings_errors(lambda: config.set_values(SOUND, [f"coupling.strength={text}"]))
    only_settings_errors(lambda: config.set_values(SOUND, [text]))


@anything
@given(st.binary(max_size=80) | st.text(max_size=40).map(lambda text: f"{HEAD}    {text}".encode("utf-8", "replace")))
def test_nothing_but_a_settings_error_comes_out_of_any_file(
    tmp_path_factory: pytest.TempPathFactory, raw: bytes
) -> None:
    file = tmp_path_factory.getbasetemp() / "any.yaml"
    file.write_bytes(raw)
    only_settings_errors(lambda: config.load(file))


def only_settings_errors(read_it: Callable[[], Any]) -> None:
    try:
        read_it()
    except SettingsError as error:
        assert all(line.isprintable() for line in str(error).splitlines()), str(error)


# ---- changes while running, and from the command line ----


def test_live_keys_change_together_or_not_at_all() -> None:
    before = read()
    after = config.changed(before, {"coupling.strength": 2, "robots.a.max_speed": 1.2, "robots.a.enabled": False})
    assert after.settings.coupling.strength == 2.0 and after.fleet.robots[0].limits.max_speed == 1.2
    assert after.enabled == {"b"} and after.file == before.file
    with pytest.raises(SettingsError, match=r"robots\.a\.min_speed: 1\.3 m/s is above max_speed"):
        config.changed(after, {"robots.a.min_speed": 1.3, "coupling.strength": 5.0})
    assert after.settings.coupling.strength == 2.0


@pytest.mark.parametrize(("key", "words"), [
    ("horizon.rate", "cannot be changed while the planner runs.*new start"),
    ("robot_defaults.max_speed", r"cannot be changed.*robots\.NAME\.max_speed"),
    ("manoeuvres.corner.radius", "cannot be changed"),
    ("coupling.strenght", r"did you mean coupling\.strength"),
])
def test_other_keys_do_not_change(key: str, words: str) -> None:
    with pytest.raises(SettingsError, match=words):
        config.changed(read(), {key: 1.0})


def test_values_from_the_command_line() -> None:
    entries = ["coupling.strength=0", "graph.edges=[a b 2]", "fleet.name=north", "robots.a.max_speed = 1e0"]
    flat = config.set_values(SOUND, entries)
    configuration = config.from_parameters(flat)
    assert configuration.settings.coupling.strength == 0.0 and configuration.edges == (("a", "b", 2.0),)
    assert configuration.fleet_name == "north" and configuration.fleet.robots[0].limits.max_speed == 1.0
    for entry, words in [
        ("coupling.strength", "KEY=VALUE"), ("=3", "KEY=VALUE"), ("coupling.strenght=3", "did you mean"),
        ("coupling.strength=-3", r"--set: coupling\.strength: -3"), ("coupling.strength=", "not a number"),
        ("coupling.strength={a: 1}", "no single value"), ("coupling.strength=1\nfleet.name: x", "no single value"),
    ]:
        with pytest.raises(SettingsError, match=words):
            config.set_values(SOUND, [entry])


# ---- what a node declares ----


def test_declarations_hold_every_key_with_the_value_in_force() -> None:
    flat = SOUND | CAR | {"robots.a.max_curvature": 0.4}
    found = {item.key: item for item in config.declarations(flat)}
    assert len(found) == len(config.declarations(flat))
    assert set(flat) <= set(found)
    assert all(item.description.text for item in found.values())
    assert (found["robots.a.max_speed"].value, found["robots.b.max_speed"].value) == (2.0, 1.5)
    assert found["robots.b.max_speed"].default == 2.0  # what holds when its own key is left out
    assert found["robots.a.max_curvature"].value == 0.4
    assert found["robots.a.max_curvature"].default == pytest.approx(0.583506281841)  # of the steering
    assert found["robots.a.pose_topic"].value == "a/pose"
    assert found["robot_defaults.pose_topic"].value == "{name}/pose"
    assert found["manoeuvres.corner.coupling"].value is None and found["manoeuvres.corner.coupling"].kind == "float"
    assert found["coupling.strength"].description.live and not found["horizon.rate"].description.live
    assert found["robots.a.max_speed"].description.live and not found["robot_defaults.max_speed"].description.live
    kinds = {"bool": bool, "int": int, "float": float, "str": str, "strs": tuple, "floats": tuple}
    for item in found.values():
        assert item.value is None or type(item.value) is kinds[item.kind], item.key
    # Declared values given back say the same.
    again = config.from_parameters({key: item.value for key, item in found.items()
                                    if item.value is not None and not key.startswith("robot_defaults.")})
    assert attrs.evolve(again, flat={}) == attrs.evolve(config.from_parameters(flat), flat={})


# ---- the sites ----

SHIPPED = ("solar_park.yaml", "snow_yard.yaml", "orchard.yaml")


@pytest.mark.parametrize("name", SHIPPED)
def test_the_sites_are_sound_and_leave_nothing_to_note(name: str) -> None:
    configuration = config.load(SITES / name)
    # In the orchard one manoeuvre is for a file, which another one forms first.
    assert [note for note in notes(configuration) if "form a file first" not in note] == []
    text = (SITES / name).read_text(encoding="utf-8")
    assert "not a safety function" in text and "invented" in text


def test_every_real_number_in_the_sites_has_its_decimal_point() -> None:
    # A whole number for a double fails when ROS declares it (shared/ros_notes.md); other nodes may read these files.
    for name in SHIPPED:
        flat, _ = read_file(SITES / name)
        for item in config.declarations(flat):
            if item.key in flat and item.kind == "float":
                assert type(flat[item.key]) is float, item.key


def test_the_solar_park_is_as_the_plan_has_it() -> None:
    park = config.load(SITES / "solar_park.yaml")
    assert park.fleet.names == tuple(f"mower_{k}" for k in range(1, 7))
    ys = [park.starts[name][1] for name in park.fleet.names]
    assert [a - b for a, b in zip(ys, ys[1:])] == [2.5] * 5
    corner, led, places = (park.manoeuvres[name] for name in ("corner_left", "led_left", "to_places"))
    assert isinstance(corner, EqualRadius) and (corner.angle_deg, corner.radius) == (90.0, 4.0)
    assert isinstance(led, ToEnds) and set(led.ends()) == {"mower_1"} and led.alignment and led.alignment > 0
    assert isinstance(places, ToEnds) and set(places.ends()) == set(park.fleet.names)


def test_the_snow_yard_has_two_kinds_of_car_like_machines() -> None:
    yard = config.load(SITES / "snow_yard.yaml")
    assert {connection.drive for connection in yard.connections.values()} == {"car_like"}
    assert len({robot.limits for robot in yard.fleet.robots}) == 2
    assert len({robot.footprint for robot in yard.fleet.robots}) == 2


def test_the_orchard_has_four_different_machines_of_both_drives() -> None:
    orchard = config.load(SITES / "orchard.yaml")
    assert {connection.drive for connection in orchard.connections.values()} == {"car_like", "differential"}
    robots = orchard.fleet.robots
    assert len({robot.limits for robot in robots}) == len({robot.footprint for robot in robots}) == 4
    backward = {robot.name for robot in robots if robot.limits.min_speed < 0.0}
    assert backward == {"sprayer", "mulcher", "hauler"}


def test_notes_say_what_may_not_be_meant() -> None:
    found = " | ".join(notes(read(
        graph__edges=None, manoeuvres__corner__radius=0.2, robots__b__start_x=None, robots__b__start_y=None,
        commands__publish=False, poses__max_age=0.01,
    )))
    for words in ("nobody copies", "cannot be rehearsed", "drives nobody", "poses.max_age", "gives no end to b"):
        assert words in found
    assert "corner would be refused" in " | ".join(notes(read(manoeuvres__corner__radius=0.2)))
