# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The ROS 2 security policy of a planner: exactly what its node publishes, subscribes to and serves.

The form is that of ROS 2's access control policies, version 0.2.0 (design.ros2.org, "ROS 2 Access Control
Policies"). ROS 2's own security tools turn it into signed permissions.
"""

from __future__ import annotations

import re
import xml.etree.ElementTree as ElementTree
from collections.abc import Iterable

import attrs

from ..core.manoeuvre import TurnAway
from ..errors import SettingsError
from .configuration import Configuration

NODE = "planner"
_VERSION = "0.2.0"
_NAMESPACE = re.compile(r"(/[A-Za-z_][A-Za-z0-9_]*)+\Z")

# What rclpy gives to every node, and to every lifecycle node (Jazzy; held against a running node by a test).
_PUBLISHED_BY_ROS = ("/parameter_events", "/rosout", "~/transition_event")
_SERVED_BY_ROS = tuple(f"~/{name}" for name in (
    "change_state", "get_available_states", "get_available_transitions", "get_state", "get_transition_graph",
    "describe_parameters", "get_parameter_types", "get_parameters", "list_parameters", "set_parameters",
    "set_parameters_atomically", "get_type_description",
))


@attrs.frozen
class Interface:
    """Names as the node gives them: absolute, relative, or private with a tilde; sorted.

    Attributes:
        publishes, subscribes: topics. serves: services. It calls none.
    """

    publishes: tuple[str, ...]
    subscribes: tuple[str, ...]
    serves: tuple[str, ...]

    def resolved(self, namespace: str = "/") -> Interface:
        """Full names of a planner in a namespace."""
        def full(names: Iterable[str]) -> tuple[str, ...]:
            return tuple(sorted(_resolved(name, namespace) for name in names))

        return Interface(full(self.publishes), full(self.subscribes), full(self.serves))


def interface(configuration: Configuration) -> Interface:
    """All topics and services of the planner of a parameter file.

    ``/clock`` is not among them: in the field nobody is to set the planner's clock.
    """
    publishes = [*_PUBLISHED_BY_ROS, "fleet_markers", "/diagnostics",
                 "~/status", "~/neighbours_in_force", "~/heartbeat"]
    subscribes = ["neighbours", "hazard", "halt", "~/request", "~/heartbeat"]
    for name, connection in configuration.connections.items():
        publishes += [f"{name}/curvature", connection.command_topic, f"{name}/planned_path"]
        subscribes += ["/tf", "/tf_static"] if connection.pose_source == "tf" else [connection.pose_topic]
        subscribes += [f"{name}/ready"] if connection.ready_required else []
    serves = [*_SERVED_BY_ROS, "~/halt", "~/resume", "~/abandon"]
    serves += [f"~/begin/{name}" for name in configuration.manoeuvres]
    serves += [f"~/arm/{name}" for name, each in configuration.manoeuvres.items() if isinstance(each, TurnAway)]
    return Interface(*(tuple(sorted(set(names))) for names in (publishes, subscribes, serves)))


def policy(configuration: Configuration, namespace: str = "/") -> str:
    """The policy as XML, for an enclave that is called as the planner's full name.

    Args:
        namespace: of the planner and its robots, absolute.

    Raises:
        SettingsError: it is not a namespace.
    """
    where = checked_namespace(namespace)
    names = interface(configuration)
    root = ElementTree.Element("policy", version=_VERSION)
    enclave = ElementTree.SubElement(
        ElementTree.SubElement(root, "enclaves"), "enclave", path=_resolved(NODE, where)
    )
    profile = ElementTree.SubElement(ElementTree.SubElement(enclave, "profiles"), "profile", ns=where, node=NODE)
    _allow(profile, "topic", "publish", names.publishes)
    _allow(profile, "topic", "subscribe", names.subscribes)
    _allow(profile, "service", "reply", names.serves)
    ElementTree.indent(root)
    return f'<?xml version="1.0" encoding="UTF-8"?>\n{ElementTree.tostring(root, encoding="unicode")}\n'


def checked_namespace(namespace: str) -> str:
    """A namespace with its slash in front; SettingsError when it is none."""
    given = namespace if namespace.startswith("/") else f"/{namespace}"
    if given != "/" and not _NAMESPACE.match(given):
        raise SettingsError(f"{namespace!r} is no ROS namespace", key="--namespace",
                            allowed="letters, digits and underscores between slashes, e.g. /yard")
    return given


def _allow(profile: ElementTree.Element, kind: str, what: str, names: Iterable[str]) -> None:
    group = ElementTree.SubElement(profile, f"{kind}s", {what: "ALLOW"})
    for name in names:
        ElementTree.SubElement(group, kind).text = name


def _resolved(name: str, namespace: str) -> str:
    parent = namespace.rstrip("/")
    if name.startswith("/"):
        return name
    return f"{parent}/{NODE}{name[1:]}" if name.startswith("~") else f"{parent}/{name}"
