# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A run written as a rosbag2 folder: complete, of real types, readable by ordinary tools, never written over."""

import json
import math

import pytest
import yaml
from made_up_run import standing, turn
from rosbags.highlevel import AnyReader
from typer.testing import CliRunner

from coord_planner.cli import app
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.settings import SiteRules
from coord_planner.record.bag_write import PARAMETERS_KEY, write_bag
from coord_planner.record.marks import marks


@pytest.fixture(scope="module")
def written(tmp_path_factory):
    run = turn(count=3, slowed="mower_2")
    folder = tmp_path_factory.mktemp("bags") / "corner"
    return run, folder, write_bag(run, folder, frame="yard", parameters={"fleet.frame": "yard"})


def messages_of(folder, topic):
    with AnyReader([folder]) as reader:  # checks every type's definition against its hash on the way
        return [(when, reader.deserialize(data, connection.msgtype)) for connection, when, data in reader.messages()
                if connection.topic == topic]


def test_every_message_can_be_read_back(written):
    _, folder, count = written
    with AnyReader([folder]) as reader:
        kinds = {topic: info.msgtype for topic, info in reader.topics.items()}
        assert sum(1 for c, _, data in reader.messages() if reader.deserialize(data, c.msgtype)) == count
        assert reader.message_count == count
    for name in ("mower_1", "mower_2", "mower_3"):
        assert kinds[f"/{name}/simulated_state"] == "nav_msgs/msg/Odometry"
        assert kinds[f"/{name}/cmd_vel"] == "geometry_msgs/msg/TwistStamped"
        assert kinds[f"/{name}/planned_path"] == "nav_msgs/msg/Path"
    assert {"/clock", "/planner/neighbours_in_force", "/planner/status", "/diagnostics", "/fleet_markers"} < set(kinds)


def test_poses_and_motion_are_those_of_the_run(written):
    run, folder, _ = written
    when, message = messages_of(folder, "/mower_2/simulated_state")[150]
    assert when == message.header.stamp.sec * 10**9 + message.header.stamp.nanosec
    assert message.header.frame_id == "yard"
    x, y, heading = run.poses[1, 150]
    assert (message.pose.pose.position.x, message.pose.pose.position.y) == (x, y)
    turned = message.pose.pose.orientation
    assert 2.0 * math.atan2(turned.z, turned.w) == pytest.approx(heading)
    assert message.twist.twist.angular.z == pytest.approx(run.speeds[1, 150] * run.curvatures[1, 150])


def test_warnings_neighbours_and_parameters_are_in_it(written):
    run, folder, _ = written
    first, last, caution = run.cautions[0]
    told = [json.loads(next(p.value for p in message.values if p.key == "warnings"))
            for _, message in messages_of(folder, "/planner/status")]
    assert {"code": caution.code, "robot": caution.subject, "level": 1, "text": caution.text} in [
        one for warnings in told for one in warnings]
    (_, message), = messages_of(folder, "/planner/neighbours_in_force")
    assert json.loads(message.data)["edges"] == [["mower_1", "mower_2", 1.0], ["mower_2", "mower_3", 1.0]]
    assert json.loads(custom_data(folder)[PARAMETERS_KEY]) == {"fleet.frame": "yard"}


def custom_data(folder):
    metadata = yaml.safe_load((folder / "metadata.yaml").read_text())
    return metadata["rosbag2_bagfile_information"]["custom_data"]


def test_markers_show_what_marks_say(written):
    run, folder, _ = written
    _, message = messages_of(folder, "/fleet_markers")[0]
    drawn = [marker for marker in message.markers if marker.action == marker.ADD]
    graph = NeighbourGraph(run.fleet.names, run.edges)
    wanted = marks(run.fleet, graph, run.poses[:, 0], [], SiteRules(min_clearance=run.min_clearance))
    assert [marker.ns for marker in drawn] == [mark.group for mark in wanted]
    foot = next(marker for marker in drawn if marker.ns == "footprints")
    assert [(p.x, p.y) for p in foot.points] == list(next(m for m in wanted if m.group == "footprints").points)


def test_a_recording_is_never_written_over(written, tmp_path):
    run, folder, _ = written
    with pytest.raises(FileExistsError):
        write_bag(run, folder)
    command = ["simulate", "config/solar_park.yaml", "--manoeuvre", "corner_left", "--bag", str(folder)]
    done = CliRunner().invoke(app, command)
    assert done.exit_code == 2 and "never written over" in done.output


def test_a_run_without_samples_makes_an_empty_recording(tmp_path):
    assert write_bag(standing([[0, 0, 0]], count=0), tmp_path / "empty") == 0
