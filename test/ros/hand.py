# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A person with the ordinary ROS tools: calls services, sets parameters, listens and publishes."""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from typing import Any

import rclpy
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus
from geometry_msgs.msg import PoseStamped, TwistStamped
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState, GetState
from nav_msgs.msg import Odometry
from rcl_interfaces.msg import Parameter as ParameterMessage
from rcl_interfaces.srv import SetParametersAtomically
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from rclpy.parameter import Parameter
from std_msgs.msg import String
from std_srvs.srv import Trigger

from coord_planner.ros import outgoing, qos

ROBOTS = ("left", "middle", "right")
CONFIGURE, ACTIVATE = Transition.TRANSITION_CONFIGURE, Transition.TRANSITION_ACTIVATE
DEACTIVATE, CLEANUP = Transition.TRANSITION_DEACTIVATE, Transition.TRANSITION_CLEANUP
_REACHED = {CONFIGURE: "inactive", ACTIVATE: "active", DEACTIVATE: "inactive", CLEANUP: "unconfigured"}
_MATCHED = 0.2  # seconds


class Hand:
    """Listens from the beginning on; every wait spins and has an end.

    Args:
        planner: name of the node that it deals with. name: of its own node.
    """

    def __init__(self, domain: int, planner: str = "planner", name: str = "hand") -> None:
        self.planner = planner
        self.context = Context()
        rclpy.init(context=self.context, domain_id=domain)
        self.node = Node(name, context=self.context, use_global_arguments=False)
        self._executor = SingleThreadedExecutor(context=self.context)
        self._executor.add_node(self.node)
        self.statuses: list[dict[str, str]] = []
        self.diagnostics: dict[str, DiagnosticStatus] = {}
        self.commands: dict[str, list[tuple[float, float]]] = {name: [] for name in ROBOTS}
        self.speeds: dict[str, float] = {}
        self._clients: dict[str, Any] = {}
        self._publishers: dict[str, Any] = {}
        subscribe = self.node.create_subscription
        subscribe(DiagnosticStatus, f"{planner}/status", self._on_status, qos.LATCHED)
        subscribe(DiagnosticArray, "/diagnostics", self._on_diagnostics, 10)
        for name in ROBOTS:
            subscribe(TwistStamped, f"{name}/cmd_vel", lambda message, name=name: self._on_command(name, message), 50)
            subscribe(Odometry, f"{name}/simulated_state", lambda message, name=name: self._on_state(name, message), 10)

    def close(self) -> None:
        self._executor.shutdown()
        rclpy.shutdown(context=self.context)

    def _on_status(self, message: DiagnosticStatus) -> None:
        self.statuses.append({pair.key: pair.value for pair in message.values})

    def _on_diagnostics(self, message: DiagnosticArray) -> None:
        self.diagnostics.update({status.name: status for status in message.status})

    def _on_command(self, name: str, message: TwistStamped) -> None:
        self.commands[name].append((time.monotonic(), message.twist.linear.x))

    def _on_state(self, name: str, message: Odometry) -> None:
        self.speeds[name] = message.twist.twist.linear.x

    @property
    def status(self) -> dict[str, str]:
        """The newest."""
        return self.statuses[-1] if self.statuses else {"state": ""}

    @property
    def standing(self) -> bool:
        """Whether no simulated robot moves."""
        return len(self.speeds) == len(ROBOTS) and all(abs(speed) < 0.01 for speed in self.speeds.values())

    def values(self, name: str) -> dict[str, str]:
        """Values of one status on /diagnostics."""
        return {pair.key: pair.value for pair in self.diagnostics[name].values} if name in self.diagnostics else {}

    def spin(self, seconds: float) -> None:
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            self._executor.spin_once(timeout_sec=0.02)

    def until(self, done: Callable[[], bool], seconds: float = 60.0, what: str = "") -> None:
        """Spin until something is so; a failed assertion with the newest status when it does not come."""
        end = time.monotonic() + seconds
        while not done():
            assert time.monotonic() < end, f"{what or 'it'} did not come; newest status: {self.status}"
            self._executor.spin_once(timeout_sec=0.02)

    def until_state(self, *states: str, seconds: float = 60.0) -> None:
        self.until(lambda: self.status["state"] in states, seconds, " or ".join(states))

    def begin(self, name: str, *, to: float = 0.3) -> None:
        """Begin a manoeuvre and let a part of it be driven."""
        answer = self.trigger(f"begin/{name}")
        assert answer.success, answer.message
        self.until(lambda: self.status["state"] == "moving" and float(self.status["progress"]) > to, what="a motion")

    def complete(self, name: str = "nudge") -> None:
        """Begin a manoeuvre, see it through, and wait until the fleet is let go."""
        self.until_heard()
        answer = self.trigger(f"begin/{name}")
        assert answer.success, answer.message
        self.until_state("ended", "held", seconds=60.0)
        assert self.status["state"] == "ended", self.status
        assert self.status["completed"] == "true"
        self.until_state("idle")

    def warnings(self) -> set[tuple[str, str]]:
        """Code and robot of each warning that was ever in force."""
        return {
            (item["code"], item["robot"]) for status in self.statuses for item in json.loads(status["warnings"])
        }

    def until_heard(self) -> None:
        """Until the planner has fresh poses of all robots."""
        names = [f"/{self.planner}: poses of {name}" for name in ROBOTS]
        self.diagnostics.clear()
        self.until(lambda: all(name in self.diagnostics and self.diagnostics[name].level == b"\x00" for name in names),
                   what="poses at the planner")

    def ask(self, kind: type, name: str, request: Any) -> Any:
        """Call a service and wait for its answer."""
        future = self.ask_later(kind, name, request)
        self.until(future.done, what=f"an answer of {name}")
        return future.result()

    def ask_later(self, kind: type, name: str, request: Any) -> Any:
        new = name not in self._clients
        if new:
            self._clients[name] = self.node.create_client(kind, name)
        client = self._clients[name]
        self.until(client.service_is_ready, what=name)
        if new:
            self.spin(_MATCHED)  # ready means that the request would arrive; the way back is found a little later
        return client.call_async(request)

    def trigger(self, name: str) -> Trigger.Response:
        return self.ask(Trigger, f"{self.planner}/{name}", Trigger.Request())

    def transition(self, number: int) -> bool:
        """Ask for a transition. When no answer comes, the state that is reached tells whether it succeeded."""
        request = ChangeState.Request()
        request.transition.id = number
        future = self.ask_later(ChangeState, f"{self.planner}/change_state", request)
        end = time.monotonic() + 20.0
        while not future.done() and time.monotonic() < end:
            self._executor.spin_once(timeout_sec=0.02)
        if future.done():
            return bool(future.result().success)
        return self.lifecycle() == _REACHED.get(number, "")  # DDS may lose an answer to a client that is new to it

    def lifecycle(self) -> str:
        return str(self.ask(GetState, f"{self.planner}/get_state", GetState.Request()).current_state.label)

    def set(self, **values: Any) -> Any:
        """Set parameters together; ``__`` stands for a dot."""
        request = SetParametersAtomically.Request()
        request.parameters = [_parameter(key.replace("__", "."), value) for key, value in values.items()]
        return self.ask(SetParametersAtomically, f"{self.planner}/set_parameters_atomically", request).result

    def publish(self, name: str, message: Any, profile: Any = qos.RELIABLE) -> None:
        """Publish once somebody listens."""
        if name not in self._publishers:
            self._publishers[name] = self.node.create_publisher(type(message), name, profile)
            self.until(lambda: self._publishers[name].get_subscription_count() > 0, what=f"a listener on {name}")
            self.spin(0.3)  # the listener has to find us too, or it misses what is sent best effort
        self._publishers[name].publish(message)

    def request(self, **content: Any) -> None:
        self.publish(f"{self.planner}/request", String(data=json.dumps(content)))

    def answer_to(self, request_id: str) -> dict[str, str]:
        """The first status that answers a request."""
        def answers() -> list[dict[str, str]]:
            return [status for status in self.statuses if status["request_id"] == request_id]

        self.until(lambda: bool(answers()), what=f"an answer to request {request_id}")
        return answers()[0]

    def now(self) -> float:
        """Seconds on the system's clock, as the nodes stamp."""
        return float(self.node.get_clock().now().nanoseconds) * 1e-9

    def pose(self, x: float, y: float, *, frame: str = "map", late: float = 0.0) -> PoseStamped:
        """A pose stamped now, or so many seconds ago."""
        return PoseStamped(header=outgoing.header(frame, self.now() - late), pose=outgoing.pose_message(x, y, 0.0))


def _parameter(key: str, value: Any) -> ParameterMessage:
    return Parameter(key, value=value).to_parameter_msg()
