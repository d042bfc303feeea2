# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Conversions at the rim: parameters as ROS shows them, messages out, what needs packages that are not there."""

from __future__ import annotations

import math
import socket
import sys
from importlib.util import find_spec
from pathlib import Path
from types import ModuleType, SimpleNamespace
from typing import Any

import attrs
import numpy as np
import pytest

from coord_planner import config
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.messages import Caution, Command, Decision, Level, State
from coord_planner.core.parameter import Description
from coord_planner.errors import SettingsError
from coord_planner.ros import demo, inbox, outbox, outgoing, parameters, processes, spinning

CONFIGURATION = config.load(Path(__file__).parents[2] / "config" / "solar_park.yaml")
RULES = CONFIGURATION.settings.site_rules


def test_open_and_closed_ranges_as_ros_shows_them() -> None:
    open_end = parameters.descriptor(Description("a", "m", above=0.0, maximum=5.0, live=True), "float")
    shown = open_end.floating_point_range[0]
    assert 0.0 < shown.from_value < 1e-300
    assert shown.to_value == 5.0
    assert open_end.description == "a [m]"
    assert not open_end.read_only
    whole = parameters.descriptor(Description("b", minimum=4, maximum=200), "int")
    assert (whole.integer_range[0].from_value, whole.integer_range[0].to_value) == (4, 200)
    assert whole.read_only
    assert parameters.descriptor(Description("c"), "float").floating_point_range == []


def test_every_parameter_is_described() -> None:
    for item in config.declarations(CONFIGURATION.flat):
        shown = parameters.descriptor(item.description, item.kind)
        assert shown.description, item.key
        assert shown.additional_constraints, item.key


def test_times_are_rounded_to_the_nanosecond_and_carried() -> None:
    for seconds in (0.0, 1.5, 1_700_000_000.25, 0.9999999999):
        message = outgoing.time_message(seconds)
        assert 0 <= message.nanosec < 1_000_000_000
        assert message.sec + 1e-9 * message.nanosec == pytest.approx(seconds, abs=1e-9)


def test_a_twist_has_speed_and_turn_rate() -> None:
    message = outgoing.twist(Command(1.2, -0.5))
    assert (message.linear.x, message.angular.z) == (1.2, -0.6)


def test_steering_angle_of_a_bicycle() -> None:
    """1.2 m wheelbase, 35 degrees: curvature 0.583506281841 1/m (shared/checks.md 6, common practice)."""
    assert outgoing.steering_angle(0.583506281841, 1.2) == pytest.approx(math.radians(35), abs=1e-9)


def decision(**changes: Any) -> Decision:
    poses = np.array([[0.0, 2.5 * k, 0.0] for k in range(6)])
    return attrs.evolve(Decision(5.0, State.MOVING, poses=poses), **changes)


def test_markers_show_the_coupling_and_what_neighbours_make_of_it() -> None:
    poses = np.array([[0.0, 2.5 * k, 0.1 * k * k] for k in range(6)])
    moving = decision(poses=poses, manoeuvre="led_left", coupling=12.5)
    markers = outgoing.fleet_markers("map", CONFIGURATION.fleet, CONFIGURATION.graph, moving, RULES)
    texts = [marker.text for marker in markers.markers if marker.ns == "copying"]
    assert texts == ["6 deg", "17 deg", "29 deg", "40 deg", "52 deg", "coupling 12.5"]
    idle = outgoing.fleet_markers("map", CONFIGURATION.fleet, CONFIGURATION.graph, decision(), RULES)
    assert not [marker for marker in idle.markers if marker.ns == "copying"]


def test_markers_show_edges_footprints_clearance_and_warnings() -> None:
    warned = (Caution("robot not following", "mower_2", Level.WARN, "0.5 m behind"),)
    markers = outgoing.fleet_markers("map", CONFIGURATION.fleet, CONFIGURATION.graph, decision(warnings=warned), RULES)
    groups = [marker.ns for marker in markers.markers if marker.action == marker.ADD]
    assert groups.count("footprints") == 6
    assert groups.count("edges") == 1
    assert groups.count("warnings") == 1
    texts = [marker.text for marker in markers.markers if marker.ns == "clearance" and marker.text]
    assert texts == ["1.70 m"], "2.5 m apart, 0.8 m wide"
    assert len({(marker.ns, marker.id) for marker in markers.markers}) == len(markers.markers)


def test_markers_leave_out_robots_never_heard_of() -> None:
    poses = decision().poses.copy()
    poses[1:] = np.nan
    markers = outgoing.fleet_markers("map", CONFIGURATION.fleet, CONFIGURATION.graph, decision(poses=poses), RULES)
    assert [marker.ns for marker in markers.markers if marker.action == marker.ADD] == ["footprints"]
    none = outgoing.fleet_markers(
        "map", CONFIGURATION.fleet, NeighbourGraph(CONFIGURATION.fleet.names), Decision(0.0, State.IDLE), RULES
    )
    assert len(none.markers) == 1


def test_a_path_has_the_times_of_its_nodes() -> None:
    message = outgoing.path_message("map", np.array([10.0, 10.25]), np.array([[0.0, 0.0, 0.0], [0.2, 0.0, math.pi]]))
    assert message.poses[1].header.stamp.nanosec == 250_000_000
    assert message.poses[1].pose.orientation.z == pytest.approx(1.0)


@pytest.mark.skipif(any(find_spec(name) for name in ("tf2_ros", "ackermann_msgs")), reason="they are installed here")
def test_tf_and_steering_without_their_packages_say_what_to_install() -> None:
    with pytest.raises(SettingsError, match="tf2-ros-py"):
        inbox.Transforms(SimpleNamespace(), "map")
    link = attrs.evolve(CONFIGURATION.connections["mower_1"], command_type="steering", wheelbase=1.2)
    node = SimpleNamespace(create_publisher=lambda *_arguments: None)
    with pytest.raises(SettingsError, match="ackermann-msgs"):
        outbox.Commander(node, "mower_1", link)


def test_poses_from_tf_where_it_is_installed(monkeypatch: pytest.MonkeyPatch) -> None:
    """With a stand-in that answers as tf2_ros does (lookup_transform, TransformException; from memory)."""
    fake: Any = ModuleType("tf2_ros")
    found = SimpleNamespace(
        header=outgoing.header("map", 3.0),
        transform=SimpleNamespace(translation=SimpleNamespace(x=1.0, y=2.0, z=0.0),
                                  rotation=outgoing.pose_message(0.0, 0.0, 0.5).orientation),
    )

    class Buffer:
        def lookup_transform(self, target: str, source: str, _time: Any) -> Any:
            if source != "mower_1/base_link":
                raise fake.TransformException
            assert target == "map"
            return found

    fake.TransformException, fake.Buffer = type("TransformException", (Exception,), {}), Buffer
    fake.TransformListener = lambda buffer, node: None
    monkeypatch.setitem(sys.modules, "tf2_ros", fake)
    transforms = inbox.Transforms(SimpleNamespace(), "map")
    message = transforms.newest("mower_1/base_link")
    assert message is not None
    assert (message.pose.position.x, message.header.frame_id) == (1.0, "map")
    assert transforms.newest("mower_2/base_link") is None


def test_signals_that_come_together_count_once() -> None:
    times = iter([10.0, 10.1, 10.5])
    signals = spinning.Signals(clock=lambda: next(times))
    for expected in (1, 1, 2):
        signals._count(15, None)
        assert signals.count == expected


def test_a_domain_in_use_is_not_taken() -> None:
    """Participant 0 of domain d listens on UDP port 7410 + 250 d (RTPS 2.3, 9.6.1.1, from memory)."""
    first = processes.free_domain(seed=1)
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as taken:
        taken.bind(("", 7410 + 250 * first))
        assert processes.free_domain(seed=1) != first


GOOD = {
    "completed": True, "state": "idle", "contacts": 0, "limit_violations": 0, "min_clearance_m": 0.9,
    "end_error_m": {"a": 0.02}, "end_heading_error_rad": {"a": 0.01},
}


@pytest.mark.parametrize(("change", "words"), [
    ({"completed": False, "state": "held"}, "held"), ({"contacts": 1}, "contacts"), ({"limit_violations": 2}, "limit"),
    ({"min_clearance_m": 0.84}, "clearance"), ({"end_error_m": {"a": 0.11}}, "0.110 m"),
    ({"end_error_m": {"a": None}}, "nowhere"), ({"end_heading_error_rad": {"a": 0.06}}, "degrees"),
])
def test_the_demo_tells_what_was_not_kept(change: dict[str, Any], words: str) -> None:
    assert demo.shortcomings(GOOD, 0.85) == []
    (told,) = demo.shortcomings({**GOOD, **change}, 0.85)
    assert words in told


def test_the_demo_needs_its_manoeuvre(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match="corner_left"):
        demo._check(attrs.evolve(CONFIGURATION, manoeuvres={}))
