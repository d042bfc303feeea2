# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The security policy names exactly what the running node publishes, subscribes to and serves."""

from __future__ import annotations

from importlib.util import find_spec
from pathlib import Path
from typing import Any

import pytest
from conftest import Site
from hand import CONFIGURE, Hand

from coord_planner import config
from coord_planner.config import security_policy

# Every kind of input and output that needs no further packages is met in this file.
KINDS = {
    " left: {": " left: {ready_required: true, ",
    " middle: {": " middle: {pose_source: pose_with_covariance, pose_topic: /localisation/middle, ",
    " right: {": ' right: {pose_source: odometry, command_type: twist, command_topic: "{name}/drive", ',
}


@pytest.fixture(scope="module")
def params(site: Site) -> Path:
    text = site.params("activate_on_start: true").read_text()
    for plain, kind in KINDS.items():
        text = text.replace(plain, kind)
    file: Path = site.folder / "kinds.yaml"
    file.write_text(text)
    return file


@pytest.mark.parametrize("namespace", ["/", "/some/yard"])
def test_the_policy_is_what_the_node_uses(site: Site, hand: Hand, params: Path, namespace: str) -> None:
    """A planner that was just ended may still be seen by the next one, which then listens to its heartbeat."""
    allowed = security_policy.interface(config.load(params)).resolved(namespace)
    look = hand.node

    def used() -> dict[str, set[str]]:
        return {
            "publishes": _names(look.get_publisher_names_and_types_by_node("planner", namespace)),
            # A planner listens to the heartbeat of every other one that it hears of, here of the one that just ended.
            "subscribes": {
                name for name in _names(look.get_subscriber_names_and_types_by_node("planner", namespace))
                if name in allowed.subscribes or not name.endswith("/heartbeat")
            },
            "serves": _names(look.get_service_names_and_types_by_node("planner", namespace)),
            "calls": _names(look.get_client_names_and_types_by_node("planner", namespace)),
        }

    with site.start("planner_node", params=params, within=namespace, name=namespace.replace("/", "_")) as node:
        hand.until(lambda: ("planner", namespace) in look.get_node_names_and_namespaces(), what="the node")
        wanted = {
            "publishes": set(allowed.publishes), "subscribes": set(allowed.subscribes),
            "serves": set(allowed.serves), "calls": set(),
        }
        hand.until(lambda: used() == wanted, what="what is allowed")
        hand.spin(2.0)  # whatever it makes later would be seen too
        assert used() == wanted
        assert node.status is None


def _names(found: list[tuple[str, Any]]) -> set[str]:
    return {name for name, _types in found}


def test_where_security_is_enforced_and_cannot_be_had_nobody_speaks(site: Site) -> None:
    """An enclave without certificates. The wheels have no security plugins at all: the same."""
    (site.folder / "keys" / "enclaves" / "planner").mkdir(parents=True)
    secured = {
        "ROS_SECURITY_KEYSTORE": str(site.folder / "keys"), "ROS_SECURITY_ENABLE": "true",
        "ROS_SECURITY_STRATEGY": "Enforce", "ROS_SECURITY_ENCLAVE_OVERRIDE": "/planner",
    }
    with site.start("planner_node", name="secured", variables=secured) as node:
        assert node.wait(20.0) == 2, node.output()
        assert "security" in node.output() and "Traceback" not in node.output()


@pytest.mark.skipif(find_spec("tf2_ros") is not None, reason="it is installed here")
def test_what_cannot_be_configured_leaves_nothing_behind(site: Site, hand: Hand) -> None:
    """Poses from tf need tf2_ros; that is found out when the publishers are already made."""
    file = site.folder / "tf.yaml"
    file.write_text(site.params().read_text().replace(" left: {", " left: {pose_source: tf, "))
    with site.start("planner_node", params=file, name="tf") as node:
        for _ in range(2):
            assert not hand.transition(CONFIGURE)
        assert hand.lifecycle() == "unconfigured"
        hand.until(lambda: hand.node.count_publishers("left/cmd_vel") == 0, what="no publisher")
        assert "tf2_ros" in node.output()
        assert "Traceback" not in node.output()
        assert node.status is None
