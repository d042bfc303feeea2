# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the planner says: publishers of commands, plans, status and diagnostics."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Optional

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import Twist, TwistStamped
from nav_msgs.msg import Path
from rclpy.duration import Duration
from rclpy.node import Node
from std_msgs.msg import Float64, String
from visualization_msgs.msg import MarkerArray

from ..config import Configuration, Connection
from ..core.fleet import Fleet
from ..core.graph import NeighbourGraph
from ..core.messages import Command, Decision
from ..errors import SettingsError
from . import messages, outgoing, qos


class Commander:
    """Sends one robot its commands, in the kind of message that it obeys."""

    def __init__(self, node: Node, name: str, connection: Connection) -> None:
        self._kind, self._wheelbase = connection.command_type, connection.wheelbase
        profile, motion = qos.commands(connection.command_timeout), _command_type(name, self._kind)
        self._curvature = node.create_publisher(Float64, f"{name}/curvature", profile)
        self._motion = node.create_publisher(motion, connection.command_topic, profile)
        self.last = Command(0.0, 0.0)

    def send(self, command: Command, seconds: float) -> None:
        """The curvature goes first, so that it is there when the speed arrives."""
        self._curvature.publish(Float64(data=float(command.curvature)))
        self._motion.publish(self._message(command, seconds))
        self.last = command

    def _message(self, command: Command, seconds: float) -> Any:
        if self._kind == "twist_stamped":
            return outgoing.twist_stamped(command, seconds)
        if self._kind == "twist":
            return outgoing.twist(command)
        message = _steering_type()()
        message.header = outgoing.header("", seconds)
        message.drive.speed = float(command.speed)
        message.drive.steering_angle = outgoing.steering_angle(command.curvature, self._wheelbase)
        return message

    def arrived(self, timeout: float) -> bool:
        """Wait until every reader has the last command; seconds."""
        return bool(self._motion.wait_for_all_acked(Duration(seconds=timeout)))

    @property
    def topic(self) -> str:
        """Full name of the topic of its motion."""
        return str(self._motion.topic_name)

    def publishers(self) -> list[Any]:
        return [self._curvature, self._motion]


def _command_type(name: str, kind: str) -> type:
    if kind != "steering":
        return {"twist_stamped": TwistStamped, "twist": Twist}[kind]
    try:
        return _steering_type()
    except ImportError:
        raise SettingsError(
            "'steering' needs ackermann_msgs, which is not installed: install ros-<distro>-ackermann-msgs",
            key=f"robots.{name}.command_type", allowed="twist_stamped, twist",
        ) from None


def _steering_type() -> type:
    from ackermann_msgs.msg import AckermannDriveStamped

    return AckermannDriveStamped


class Outbox:
    """All publishers of a planner.

    Raises:
        SettingsError: a kind of command that cannot be sent from this machine.
    """

    def __init__(self, node: Node, configuration: Configuration) -> None:
        self._frame = configuration.frame
        self._publish_commands = configuration.settings.commands.publish
        self._commanders = {
            name: Commander(node, name, connection) for name, connection in configuration.connections.items()
        }
        self._paths = {
            name: node.create_publisher(Path, f"{name}/planned_path", qos.NEWEST) for name in configuration.connections
        }
        self._markers = node.create_publisher(MarkerArray, "fleet_markers", qos.NEWEST)
        self._status = node.create_publisher(DiagnosticStatus, "~/status", qos.LATCHED)
        self._neighbours = node.create_publisher(String, "~/neighbours_in_force", qos.NEWEST_LATCHED)
        self._diagnostics = node.create_publisher(DiagnosticArray, "/diagnostics", qos.RELIABLE)

    @property
    def command_topics(self) -> list[str]:
        """Full names of the topics on which robots are driven."""
        return [commander.topic for commander in self._commanders.values()]

    def stand_by_themselves(self, silence: float, fleet: Fleet) -> list[str]:
        """Robots that may stand by now, since they have heard nothing for so many seconds while they moved."""
        speeds = np.array([abs(self._commanders[name].last.speed) for name in fleet.names])
        stood = (speeds > 0.0) & (silence > fleet.timeouts() + speeds / fleet.limit("max_braking"))
        return [name for name, stands in zip(fleet.names, stood) if stands]

    def send(self, commands: Mapping[str, Command], seconds: float) -> None:
        """Commands to the robots, unless ``commands.publish`` is false."""
        if self._publish_commands:
            for name, command in commands.items():
                self._commanders[name].send(command, seconds)

    def send_zeros(self, seconds: float, timeout: float) -> None:
        """Speed 0 to everyone, steering as it is, and wait until it has arrived, at most ``timeout`` seconds each."""
        zeros = {name: Command(0.0, commander.last.curvature) for name, commander in self._commanders.items()}
        self.send(zeros, seconds)
        if self._publish_commands:
            for commander in self._commanders.values():
                commander.arrived(timeout)

    def show(self, decision: Decision, configuration: Configuration, graph: NeighbourGraph) -> None:
        """Plans and markers, for those who look; nobody looking costs nothing."""
        if len(decision.plan_times):
            for name, poses in zip(decision.names, decision.plan_poses):
                if self._paths[name].get_subscription_count():
                    self._paths[name].publish(outgoing.path_message(self._frame, decision.plan_times, poses))
        if self._markers.get_subscription_count():
            fleet = Fleet(tuple(configuration.fleet.robots[configuration.fleet.index(name)] for name in decision.names))
            self._markers.publish(outgoing.fleet_markers(
                self._frame, fleet, graph.relative_to(decision.names), decision,
                configuration.settings.site_rules,
            ))

    def tell_neighbours(self, graph: NeighbourGraph, seconds: float) -> None:
        """The graph that is in force."""
        self._neighbours.publish(String(data=messages.neighbours_text(graph, seconds)))

    def tell(self, status: Optional[DiagnosticStatus], diagnostics: Sequence[DiagnosticStatus], seconds: float) -> None:
        """Status and diagnostics."""
        if status is not None:
            self._status.publish(status)
        if diagnostics:
            self._diagnostics.publish(DiagnosticArray(header=outgoing.header("", seconds), status=list(diagnostics)))

    def close(self, node: Node) -> None:
        """Take the publishers off the node."""
        own = [self._markers, self._status, self._neighbours, self._diagnostics, *self._paths.values()]
        for commander in self._commanders.values():
            own += commander.publishers()
        for publisher in own:
            node.destroy_publisher(publisher)
