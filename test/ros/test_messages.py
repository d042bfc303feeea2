# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Checks of messages, without a middleware: a message is anything with the fields of its definition."""

from __future__ import annotations

import json
import math
from types import SimpleNamespace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.messages import PoseSample
from coord_planner.core.settings import Poses
from coord_planner.ros import messages

NAMES = ("a", "b", "c")
POSES = Poses(max_age=0.5, max_future=0.1)
NOW = 1_700_000_000.25


def pose_message(stamp: float = NOW, heading: float = 0.5, frame: str = "map", **position: float) -> Any:
    whole = math.floor(stamp)
    head = SimpleNamespace(frame_id=frame, stamp=SimpleNamespace(sec=whole, nanosec=round((stamp - whole) * 1e9)))
    where = SimpleNamespace(**{"x": 1.0, "y": 2.0, "z": 0.0, **position})
    turned = SimpleNamespace(x=0.0, y=0.0, z=math.sin(heading / 2), w=math.cos(heading / 2))
    return SimpleNamespace(header=head, pose=SimpleNamespace(position=where, orientation=turned))


def read(message: Any, source: str = "pose") -> PoseSample:
    return messages.pose_sample(message, source, frame="map", now=NOW, poses=POSES)


@given(st.floats(-math.pi + 1e-9, math.pi - 1e-9), st.floats(0.96, 1.04))
def test_heading_of_a_quaternion_that_is_nearly_of_length_one(angle: float, length: float) -> None:
    z, w = length * math.sin(angle / 2), length * math.cos(angle / 2)
    assert messages.heading(SimpleNamespace(x=0.0, y=0.0, z=z, w=w)) == pytest.approx(angle, abs=1e-9)


def test_heading_of_a_robot_on_a_slope() -> None:
    """Pitched by 20 degrees and turned by 60: q = q_yaw q_pitch (composition of rotations, REP-103 axes)."""
    half_yaw, half_pitch = math.radians(30), math.radians(10)
    q = SimpleNamespace(
        x=-math.sin(half_yaw) * math.sin(half_pitch), y=math.cos(half_yaw) * math.sin(half_pitch),
        z=math.sin(half_yaw) * math.cos(half_pitch), w=math.cos(half_yaw) * math.cos(half_pitch),
    )
    assert messages.heading(q) == pytest.approx(math.radians(60))


def test_good_poses_of_every_source() -> None:
    plain = pose_message()
    nested = pose_message()
    nested.pose = SimpleNamespace(pose=nested.pose, covariance=[math.nan] * 36)
    for message, source in ((plain, "pose"), (nested, "pose_with_covariance"), (nested, "odometry")):
        sample = read(message, source)
        assert (sample.x, sample.y) == (1.0, 2.0)
        assert sample.heading == pytest.approx(0.5)
        assert sample.stamp == pytest.approx(NOW, abs=1e-6)


@pytest.mark.parametrize(("message", "why", "remedy"), [
    (pose_message(frame="odom"), "wrong frame", "fleet.frame"),
    (pose_message(frame=""), "wrong frame", "fleet.frame"),
    (pose_message(x=math.nan), "not a number", "mend"),
    (pose_message(y=-math.inf), "not a number", "mend"),
    (pose_message(heading=math.nan), "not a number", "mend"),
    (pose_message(stamp=NOW - 0.51), "too old", "poses.max_age"),
    (pose_message(stamp=0.0), "too old", "clocks"),
    (pose_message(stamp=NOW + 0.11), "from the future", "poses.max_future"),
])
def test_bad_poses_say_why_and_what_to_do(message: Any, why: str, remedy: str) -> None:
    with pytest.raises(messages.IgnoredError) as caught:
        read(message)
    assert caught.value.why == why
    assert remedy in caught.value.text


def test_stamps_at_the_limits_are_used() -> None:
    assert read(pose_message(stamp=NOW - 0.499)).stamp < NOW
    assert read(pose_message(stamp=NOW + 0.099)).stamp > NOW


def test_robots_own_odometry_frames_are_refused_with_the_remedy() -> None:
    message = pose_message(frame="a/odom")
    with pytest.raises(messages.IgnoredError, match="pose_source pose or pose_with_covariance"):
        read(message, "odometry")


def test_an_empty_orientation_is_no_rotation() -> None:
    message = pose_message()
    message.pose.orientation = SimpleNamespace(x=0.0, y=0.0, z=0.0, w=0.0)
    with pytest.raises(messages.IgnoredError, match="not a rotation"):
        read(message)


def test_overtaken_poses_are_not_used() -> None:
    messages.check_order(NOW, None)
    messages.check_order(NOW, NOW)
    with pytest.raises(messages.IgnoredError, match="overtaken"):
        messages.check_order(NOW - 0.02, NOW)


def test_neighbours_there_and_back() -> None:
    graph = NeighbourGraph(NAMES, (("a", "b", 1.0), ("b", "c", 0.25)))
    assert messages.parse_neighbours(messages.neighbours_text(graph, 12.5), NAMES, -math.inf) == (graph, 12.5)
    assert messages.parse_neighbours('{"version": 1, "stamp": 3, "edges": [["a", "c"]]}', NAMES, 3.0)[0].edges == (
        ("a", "c", 1.0),
    )
    assert messages.parse_neighbours('{"version": 1, "stamp": 3, "edges": []}', NAMES, -math.inf)[0].edges == ()


def neighbours(**changes: Any) -> str:
    return json.dumps({"version": 1, "stamp": 5.0, "edges": [["a", "b"]], **changes})


@pytest.mark.parametrize(("text", "why"), [
    ("", "malformed"), ("nothing", "malformed"), ("null", "malformed"), ("[" * 90_000, "malformed"),
    ("x" * 200_000, "malformed"), (neighbours(more=1), "malformed"), (neighbours(stamp="now"), "malformed"),
    (neighbours(stamp=None), "malformed"), (neighbours(stamp=True), "malformed"),
    (neighbours(edges="a b"), "malformed"),
    (neighbours(edges=[["a"]]), "malformed"), (neighbours(edges=[["a", 2]]), "malformed"),
    (neighbours(edges=[["a", "b", "1"]]), "malformed"), (neighbours(edges=[["a", "b", -1]]), "malformed"),
    (neighbours(edges=[["a", "b", math.inf]]), "malformed"), (neighbours(edges=[["a", "a"]]), "malformed"),
    (neighbours(edges=[["a", "b"], ["b", "a"]]), "malformed"), (neighbours(edges=[["a", "nobody"]]), "unknown robot"),
    (neighbours(version=2), "unknown version"), (neighbours(version=True), "unknown version"),
    (neighbours(stamp=3.9), "overtaken"),
])
def test_bad_neighbours(text: str, why: str) -> None:
    with pytest.raises(messages.IgnoredError) as caught:
        messages.parse_neighbours(text, NAMES, 4.0)
    assert caught.value.why == why
    assert len(str(caught.value)) < 400, "whatever was sent, what is told stays readable"


def test_requests() -> None:
    full = messages.parse_request('{"id": 7, "manoeuvre": "corner_left", "overrides": {"speed": 1}}')
    assert full == messages.Request("7", "corner_left", {"speed": 1.0})
    assert messages.parse_request('{"id": "x", "manoeuvre": "m"}').overrides == {}
    assert messages.parse_request('{"id": "x", "manoeuvre": "m", "when": "next"}').next and not full.next
    with pytest.raises(messages.IgnoredError, match="it must be now or next"):
        messages.parse_request('{"id": "x", "manoeuvre": "m", "when": "soon"}')


@pytest.mark.parametrize("text", [
    "{}", '{"id": "", "manoeuvre": "m"}', '{"id": true, "manoeuvre": "m"}', '{"id": 1, "manoeuvre": 2}',
    '{"id": 1, "manoeuvre": "m", "overrides": [1]}', '{"id": 1, "manoeuvre": "m", "overrides": {"speed": true}}',
    '{"id": 1, "manoeuvre": "m", "overrides": {"speed": NaN}}', '{"id": 1, "manoeuvre": "m", "overides": {}}',
])
def test_bad_requests(text: str) -> None:
    with pytest.raises(messages.IgnoredError) as caught:
        messages.parse_request(text)
    assert caught.value.why == "malformed"


@given(st.text(max_size=200))
def test_any_text_is_read_or_ignored(text: str) -> None:
    for parse in (lambda: messages.parse_request(text), lambda: messages.parse_neighbours(text, NAMES, 0.0)):
        try:
            parse()
        except messages.IgnoredError as error:
            assert error.text


def test_tallies_tell_what_is_new_once() -> None:
    tallies = messages.Tallies(quiet=5.0)
    error, other = messages.IgnoredError("too old", "by far"), messages.IgnoredError("wrong frame", "odom")
    tallies.use("a")
    assert tallies.ignore("a", error, 10.0)
    assert not tallies.ignore("a", error, 11.0)
    assert tallies.ignore("a", other, 11.5)
    assert tallies.troubled("a", 16.0)
    assert not tallies.troubled("a", 17.0)
    assert tallies.ignore("a", error, 20.0), "after a quiet time it is news again"
    assert not tallies.troubled("b", 20.0)
    tally = tallies.of("a")
    assert (tally.used, tally.ignored, tally.total_ignored) == (1, {"too old": 3, "wrong frame": 1}, 4)


def test_heartbeats_there_and_back() -> None:
    for beat in (messages.Beat("yard", "7f", "/planner", frozenset({"/a/cmd_vel"})), messages.Beat("yard", "7f")):
        assert messages.parse_heartbeat(messages.heartbeat_text(beat)) == beat


@pytest.mark.parametrize("text", [
    "", "7", "{}", '{"version": true, "fleet": "a", "run": "b"}', '{"version": 1, "fleet": "a"}',
    '{"version": 1, "fleet": "a", "run": ""}', '{"version": 1, "fleet": "a", "run": 7}',
    '{"version": 1, "fleet": "a", "run": "b", "commands": [7]}',
    '{"version": 1, "fleet": "a", "run": "b", "commands": "c"}',
    f'{{"version": 1, "fleet": "a", "run": "{"b" * 1000}"}}', '{"version": 2, "fleet": "a", "run": "b"}',
])
def test_what_is_no_heartbeat_is_ignored(text: str) -> None:
    with pytest.raises(messages.IgnoredError):
        messages.parse_heartbeat(text)


def test_what_is_told_of_a_message_is_short_whatever_stood_in_it() -> None:
    huge = "x" * 1_000_000
    message = pose_message()
    message.header.frame_id = huge
    calls = [
        lambda: read(message), lambda: messages.parse_heartbeat(huge), lambda: messages.parse_request(huge),
        lambda: messages.parse_neighbours(huge, NAMES, 0.0),
        lambda: messages.parse_neighbours(
            json.dumps({"version": 1, "stamp": 1.0, "edges": [["a", huge[:90_000]]]}), NAMES, 0.0
        ),
        lambda: messages.parse_request(json.dumps({"id": 1, "manoeuvre": [huge[:90_000]]})),
        lambda: messages.parse_request(json.dumps({huge[:90_000]: 1})),
    ]
    for call in calls:
        with pytest.raises(messages.IgnoredError) as caught:
            call()
        assert len(str(caught.value)) < 1000
