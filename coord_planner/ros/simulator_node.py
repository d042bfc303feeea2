# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Stands in for the robots: publishes their poses and obeys commands, each robot with its own time-out."""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Sequence
from typing import Any, Optional

import attrs
import numpy as np
from geometry_msgs.msg import PoseStamped, PoseWithCovarianceStamped, Twist, TwistStamped, Vector3
from nav_msgs.msg import Odometry
from rclpy.clock import Clock
from rclpy.clock_type import ClockType
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rosgraph_msgs.msg import Clock as ClockMessage
from std_msgs.msg import Bool, Float64

from .. import config
from ..core.messages import Command, PoseSample
from ..errors import SettingsError
from ..trial.vehicle import SimulatedFleet
from . import outgoing, parameters, qos
from .spinning import Signals, run, spin
from .timekeeper import Timekeeper

_STEP = 0.02  # steady seconds between two steps of the simulation
_READY_EVERY = 0.2  # steady seconds between two words of a robot on whether it may be driven
_LAST_MOTION = 2.0  # steady seconds from the machines' stand to the simulator's end, for whoever lives by its clock
_PATIENCE = 20.0  # steady seconds after a signal in which machines may still be driven
_STANDING = 1e-9  # m/s; below it a twist does not say which way the wheels point


class SimulatorNode(Node):
    """All robots of a parameter file.

    Publishes each robot's noisy pose by its ``pose_source``, ``<robot>/ready``, and its true motion on
    ``<robot>/simulated_state`` (Odometry; with no noise and no delay). Faults are asked for by messages:

    * ``<robot>/simulated_speed_factor`` (Float64): it reaches only this part of its commanded speed; 1 heals it.
    * ``<robot>/simulated_ready`` (Bool): false: it says that it is not ready, and obeys nothing; true heals it.
    * ``<robot>/simulated_pose_shift`` (Vector3; x, y in metres, z in radians): its poses are off by so much.

    The machines live by a time of their own, which does not jump when the clock of the stamps is set.

    Args:
        arguments: the command line, to name the parameter file in error messages.

    Raises:
        SettingsError: the parameters cannot be used.
    """

    def __init__(self, arguments: Sequence[str] = ()) -> None:
        super().__init__("simulator")
        flat = parameters.given(self)
        self._configuration = configuration = config.from_parameters(flat, parameters.files(arguments))
        parameters.declare(self, flat, live=False)
        simulation = configuration.simulation
        self._machines = SimulatedFleet(
            configuration.fleet, configuration.all_starts(), simulation,
            {name: connection.command_timeout for name, connection in configuration.connections.items()},
            np.random.default_rng(simulation.seed),
        )
        self._began = time.monotonic()
        follows_clock = simulation.publish_clock or bool(self.get_parameter("use_sim_time").value)
        self._timekeeper = Timekeeper(self.now, follows_clock)
        self._to_machines: Optional[float] = None  # their time less the timekeeper's; None before the first step
        self._next_poses = 0.0
        self._robots = {
            name: _RobotLink(self, name, connection, configuration.frame, self._machines)
            for name, connection in configuration.connections.items()
        }
        self._clock_publisher = (
            self.create_publisher(ClockMessage, "/clock", qos.NEWEST) if simulation.publish_clock else None
        )
        # The steady clock drives the steps: a node that publishes /clock cannot wait for it.
        steady = Clock(clock_type=ClockType.STEADY_TIME)
        self.create_timer(_STEP, self._step, clock=steady)
        self.create_timer(_READY_EVERY, self._tell_ready, clock=steady)

    @property
    def moving(self) -> bool:
        """Whether any machine moves by more than a millimetre a second."""
        return bool(np.any(np.abs(self._machines.speeds()) > 1e-3))

    def now(self) -> float:
        """Seconds on the clock that stamps the poses; 0 while a simulated clock of others has not begun."""
        simulation = self._configuration.simulation
        if simulation.publish_clock:
            return simulation.rate_factor * (time.monotonic() - self._began)
        return float(self.get_clock().now().nanoseconds) * 1e-9

    def machine_time(self) -> float:
        """Seconds on the machines' own clock."""
        return self._machines.time if self._to_machines is None else self._timekeeper.time() + self._to_machines

    def _step(self) -> None:
        now = self.now()
        if now <= 0.0:
            return  # use_sim_time, and nothing has come on /clock yet
        if self._clock_publisher is not None:
            self._clock_publisher.publish(ClockMessage(clock=outgoing.time_message(now)))
        jump = self._timekeeper.look()
        if self._to_machines is None:
            self._to_machines = self._machines.time - self._timekeeper.time()
        elif self._timekeeper.simulated:
            self._to_machines -= jump
        passed = self.machine_time()
        self._machines.advance(passed)
        if passed >= self._next_poses:
            self._next_poses = max(self._next_poses, passed - 1.0) + 1.0 / self._configuration.simulation.pose_rate
            self._publish(now, passed)

    def _publish(self, now: float, passed: float) -> None:
        measured = self._machines.measure(passed)
        speeds, curvatures, poses = self._machines.speeds(), self._machines.curvatures(), self._machines.poses()
        for k, (name, robot) in enumerate(self._robots.items()):
            motion = Command(float(speeds[k]), float(curvatures[k]))
            sample = measured[name]
            robot.tell_pose(attrs.evolve(sample, stamp=now - (passed - sample.stamp)), motion)
            robot.tell_truth(now, poses[k], motion)

    def _tell_ready(self) -> None:
        for robot in self._robots.values():
            robot.tell_ready()


class _RobotLink:
    """One robot's topics.

    Raises:
        SettingsError: a pose source or kind of command that cannot be simulated here.
    """

    def __init__(self, node: SimulatorNode, name: str, connection: config.Connection, frame: str,
                 machines: SimulatedFleet) -> None:
        self._node, self._name, self._connection, self._frame = node, name, connection, frame
        self._machines = machines
        self._curvature = 0.0  # as commanded last
        self._is_ready, self._shift = True, (0.0, 0.0, 0.0)
        self._poses = node.create_publisher(_pose_type(name, connection), connection.pose_topic, qos.POSES)
        self._truth = node.create_publisher(Odometry, f"{name}/simulated_state", qos.RELIABLE)
        node.create_subscription(Float64, f"{name}/curvature", self._on_curvature, qos.NEWEST)
        motion = _command_type(name, connection)
        node.create_subscription(motion, connection.command_topic, self._on_motion, qos.NEWEST)
        self._ready = node.create_publisher(Bool, f"{name}/ready", qos.RELIABLE)
        node.create_subscription(Float64, f"{name}/simulated_speed_factor", self._on_factor, qos.RELIABLE)
        node.create_subscription(Bool, f"{name}/simulated_ready", self._on_ready, qos.RELIABLE)
        node.create_subscription(Vector3, f"{name}/simulated_pose_shift", self._on_shift, qos.RELIABLE)

    def _on_curvature(self, message: Float64) -> None:
        if math.isfinite(message.data):
            self._curvature = message.data

    def _on_motion(self, message: Any) -> None:
        if not self._is_ready:
            return
        command = self._command(message)
        if math.isfinite(command.speed) and math.isfinite(command.curvature):
            self._curvature = command.curvature
            self._machines.command(self._name, command, self._node.machine_time())
        else:
            self._node.get_logger().warning(f"{self._name} ignores a command that is not a number")

    def _command(self, message: Any) -> Command:
        """A twist tells the curvature only while it moves; at standstill the curvature topic does."""
        if self._connection.command_type == "steering":
            angle = message.drive.steering_angle
            return Command(float(message.drive.speed), math.tan(angle) / self._connection.wheelbase)
        twist = message.twist if self._connection.command_type == "twist_stamped" else message
        speed = float(twist.linear.x)
        moving = abs(speed) > _STANDING
        return Command(speed, float(twist.angular.z) / speed if moving else self._curvature)

    def _on_factor(self, message: Float64) -> None:
        try:
            self._machines.slow(self._name, message.data)
        except ValueError as error:
            self._node.get_logger().warning(str(error))

    def _on_ready(self, message: Bool) -> None:
        self._is_ready = message.data
        self.tell_ready()

    def _on_shift(self, message: Vector3) -> None:
        shift = (message.x, message.y, message.z)
        if all(math.isfinite(value) for value in shift):
            self._shift = shift
        else:
            self._node.get_logger().warning(f"pose shift {shift} for {self._name}: it must be finite")

    def tell_ready(self) -> None:
        """Whether it may be driven."""
        self._ready.publish(Bool(data=self._is_ready))

    def tell_pose(self, sample: PoseSample, motion: Command) -> None:
        """What the robot's localisation says: a pose of its reported point."""
        dx, dy, turn = self._shift
        pose = outgoing.pose_message(
            *self._connection.reported_pose(sample.x + dx, sample.y + dy, sample.heading + turn)
        )
        head = outgoing.header(self._frame, sample.stamp)
        source = self._connection.pose_source
        if source == "pose":
            self._poses.publish(PoseStamped(header=head, pose=pose))
            return
        message = PoseWithCovarianceStamped(header=head) if source == "pose_with_covariance" else Odometry(header=head)
        message.pose.pose = pose
        if source == "odometry":
            message.child_frame_id = f"{self._name}/base_link"
            message.twist.twist = outgoing.twist(motion)
        self._poses.publish(message)

    def tell_truth(self, now: float, pose: np.ndarray, motion: Command) -> None:
        """The true state of the point that is planned with."""
        message = Odometry(header=outgoing.header(self._frame, now), child_frame_id=f"{self._name}/base_link")
        message.pose.pose = outgoing.pose_message(*pose)
        message.twist.twist = outgoing.twist(motion)
        self._truth.publish(message)


def _pose_type(name: str, connection: config.Connection) -> type:
    types: dict[str, type] = {
        "pose": PoseStamped, "pose_with_covariance": PoseWithCovarianceStamped, "odometry": Odometry,
    }
    if connection.pose_source not in types:
        raise SettingsError(f"{connection.pose_source!r} cannot be simulated", key=f"robots.{name}.pose_source",
                            allowed=", ".join(types))
    return types[connection.pose_source]


def _command_type(name: str, connection: config.Connection) -> type:
    if connection.command_type == "steering":
        try:
            from ackermann_msgs.msg import AckermannDriveStamped
        except ImportError:
            raise SettingsError("'steering' needs ackermann_msgs, which is not installed",
                                key=f"robots.{name}.command_type", allowed="twist_stamped, twist") from None
        return AckermannDriveStamped
    return TwistStamped if connection.command_type == "twist_stamped" else Twist


class _Ending:
    """A signal ends the simulator once its machines stand, a second one at once.

    Ctrl-C in a terminal reaches planner and simulator together: the planner can then still stop its fleet.
    """

    def __init__(self, node: SimulatorNode, signals: Signals) -> None:
        self._node, self._signals = node, signals
        self._signalled: Optional[float] = None  # steady seconds
        self._moved = -math.inf

    def __call__(self) -> Optional[int]:
        if not self._signals.count:
            return None
        now = time.monotonic()
        self._signalled = now if self._signalled is None else self._signalled
        self._moved = now if self._node.moving else self._moved
        over = now - self._moved > _LAST_MOTION or now - self._signalled > _PATIENCE
        return 0 if over or self._signals.count >= 2 else None


def _body(arguments: Sequence[str], signals: Signals) -> int:
    node = SimulatorNode(arguments)
    executor = SingleThreadedExecutor()
    executor.add_node(node)
    return spin(executor, node, after=_Ending(node, signals))


def main(arguments: Optional[Sequence[str]] = None) -> int:
    """Run the simulator until a signal ends it; returns the exit status."""
    return run(arguments, _body)


if __name__ == "__main__":
    sys.exit(main())
