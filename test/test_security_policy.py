# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The planner's security policy. Its form is ROS 2's access control policy 0.2.0 (design.ros2.org, "ROS 2 Access
Control Policies"): enclaves / enclave path / profiles / profile ns node / topics and services, ALLOW for a direction.

That it names what a running node uses is held in test/ros/test_who_may_speak.py.
"""

import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest
from typer.testing import CliRunner

from coord_planner import config
from coord_planner.cli import app
from coord_planner.config import security_policy
from coord_planner.errors import SettingsError

PARK = Path(__file__).parents[1] / "config" / "solar_park.yaml"


def park(**values):
    flat = dict(config.load(PARK).flat)
    return config.from_parameters({**flat, **{key.replace("__", "."): value for key, value in values.items()}})


def written(tmp_path, *more):
    file = tmp_path / "new" / "policy.xml"
    done = CliRunner().invoke(app, ["check", str(PARK), "--quick", "--security-policy", str(file), *more])
    assert done.exit_code == 0, done.output
    return ElementTree.parse(file).getroot()


def names(profile, group, direction):
    (found,) = [item for item in profile.findall(group) if item.get(direction) == "ALLOW"]
    assert len(found.attrib) == 1
    return [item.text for item in found]


@pytest.mark.parametrize(("more", "enclave", "namespace"), [
    ([], "/planner", "/"), (["--namespace", "yard"], "/yard/planner", "/yard"),
    (["--namespace", "/a/b"], "/a/b/planner", "/a/b"),
])
def test_the_file_has_one_profile_that_only_allows(tmp_path, more, enclave, namespace):
    root = written(tmp_path, *more)
    assert (root.tag, root.get("version")) == ("policy", "0.2.0")
    (found,) = root.findall("enclaves/enclave")
    assert found.get("path") == enclave
    (profile,) = found.findall("profiles/profile")
    assert (profile.get("ns"), profile.get("node")) == (namespace, "planner")
    listed = security_policy.interface(config.load(PARK))
    assert names(profile, "topics", "publish") == list(listed.publishes)
    assert names(profile, "topics", "subscribe") == list(listed.subscribes)
    assert names(profile, "services", "reply") == list(listed.serves)
    text = ElementTree.tostring(root, encoding="unicode")
    assert "*" not in text, "no name stands for others"
    assert "DENY" not in text
    assert "request=" not in text, "it calls nobody"


def test_what_is_allowed_follows_the_parameter_file():
    plain = security_policy.interface(park())
    assert "mower_1/ready" not in plain.subscribes
    assert "/clock" not in plain.subscribes
    changed = security_policy.interface(park(
        robots__mower_1__ready_required=True, robots__mower_2__pose_source="tf",
        robots__mower_3__command_topic="/drives/{name}/go",
    ))
    assert "mower_1/ready" in changed.subscribes
    assert {"/tf", "/tf_static"} <= set(changed.subscribes)
    assert "mower_2/pose" not in changed.subscribes
    assert "/drives/mower_3/go" in changed.publishes
    assert "mower_3/cmd_vel" not in changed.publishes
    full = changed.resolved("/yard")
    assert {"/drives/mower_3/go", "/yard/mower_1/cmd_vel", "/yard/planner/status"} <= set(full.publishes)


@pytest.mark.parametrize("namespace", ["a b", "/a//b", "/7", "a/", "é"])
def test_a_namespace_that_is_none_is_refused(namespace):
    with pytest.raises(SettingsError, match="namespace"):
        security_policy.policy(park(), namespace)


def test_the_namespace_means_nothing_without_a_policy():
    done = CliRunner().invoke(app, ["check", str(PARK), "--namespace", "yard"])
    assert done.exit_code == 2
    assert "--security-policy" in done.output


def test_a_place_that_cannot_be_written_is_told(tmp_path):
    done = CliRunner().invoke(app, ["check", str(PARK), "--security-policy", str(tmp_path)])
    assert done.exit_code == 2
    assert "is a folder" in done.output
