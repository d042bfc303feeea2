# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Real ROS nodes, a simulated fleet, one manoeuvre with a robot held up on the way, a page to look at."""

from __future__ import annotations

import json
import math
import os
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, Optional

from .. import config
from ..errors import CoordPlannerError, SettingsError
from . import processes

# Before rclpy is loaded: its wheels look here for the message types.
os.environ.setdefault("AMENT_PREFIX_PATH", sys.prefix)

import rclpy
from lifecycle_msgs.msg import Transition
from lifecycle_msgs.srv import ChangeState
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.node import Node
from std_msgs.msg import Float64
from std_srvs.srv import Trigger

from ..record import metrics, page
from ..record.bag_write import BagWriter
from ..trial.run import Run
from . import qos, tape
from .recorder import Recorder

MANOEUVRE = "corner_left"
_BAG = "bag"  # what the recording is called; `coord-planner review` looks into it
_SLOWED_TO, _SLOWED_FROM, _SLOWED_FOR = 0.3, 0.35, 3.0  # part of its speed; part of the manoeuvre; seconds
_LONGEST = 45.0  # seconds for the manoeuvre
_END_ERROR, _END_HEADING_ERROR_DEG = 0.10, 3.0
_HELP = 20.0  # seconds that a node may take to answer


class DemoError(CoordPlannerError):
    """The demo could not be brought to its end."""


def run_demo(params: str | Path, out: str | Path) -> int:
    """Run the demo and leave ``summary.json``, ``page.html`` and the recording ``bag`` in ``out``.

    Returns:
        0 when everything held that the demo promises; 1 when something did not.

    Raises:
        SettingsError: the parameter file cannot be used for it.
    """
    configuration = config.load(params)
    _check(configuration)
    folder = Path(out)
    folder.mkdir(parents=True, exist_ok=True)
    tape.clear(folder / _BAG)
    began = time.monotonic()
    try:
        with processes.ending_on_signals():
            run = _run_nodes(configuration, Path(params), folder)
    except DemoError as error:
        _say(f"the demo failed: {error}")
        _say(f"what the nodes said is in {folder}/planner.log and {folder}/simulator.log")
        return 1
    except KeyboardInterrupt:
        _say("stopped; the nodes have ended")
        return 1
    summary = metrics.summary(run)
    (folder / "summary.json").write_text(json.dumps(summary, indent=2) + "\n")
    page.write_page(run, folder / "page.html")
    broken = shortcomings(summary, configuration.settings.site_rules.min_clearance)
    _tell(summary, broken, folder, time.monotonic() - began)
    return 1 if broken else 0


def shortcomings(summary: dict[str, Any], min_clearance: float) -> list[str]:
    """What the demo promises and the run did not keep, in words."""
    found = []
    if not summary["completed"]:
        found.append(f"the turn was not completed, the fleet is {summary['state']}")
    if summary["contacts"]:
        found.append(f"{summary['contacts']} contacts")
    if summary["limit_violations"]:
        found.append(f"{summary['limit_violations']} commands outside a limit")
    clearance = summary["min_clearance_m"]
    if clearance is not None and clearance < min_clearance:
        found.append(f"the smallest clearance was {clearance:.3f} m, the site asks for {min_clearance:g} m")
    found += _missed(summary["end_error_m"], _END_ERROR, "m")
    degrees = {name: None if error is None else error * 57.29577951308232
               for name, error in summary["end_heading_error_rad"].items()}
    return found + _missed(degrees, _END_HEADING_ERROR_DEG, "degrees")


def _missed(errors: dict[str, Optional[float]], allowed: float, unit: str) -> list[str]:
    return [
        f"{name} ended {'nowhere known' if error is None else f'{error:.3f} {unit} off'}, allowed: {allowed:g} {unit}"
        for name, error in errors.items() if error is None or error > allowed
    ]


def _check(configuration: config.Configuration) -> None:
    if MANOEUVRE not in configuration.manoeuvres:
        raise SettingsError(f"the demo begins {MANOEUVRE!r}, which is not there", key="manoeuvres.names",
                            file=configuration.file, allowed=f"a list with {MANOEUVRE} in it")
    for name, connection in configuration.connections.items():
        if connection.command_type != "twist_stamped":
            raise SettingsError(f"the demo cannot listen to {connection.command_type!r}, which has no stamp",
                                key=f"robots.{name}.command_type", file=configuration.file, allowed="twist_stamped")


def _run_nodes(configuration: config.Configuration, params: Path, folder: Path) -> Run:
    """Start both nodes, look after the manoeuvre, end both nodes whatever happens."""
    domain = processes.free_domain()
    _say(f"two nodes on ROS domain {domain}; to look on from another terminal:")
    _say(f"  export ROS_DOMAIN_ID={domain} ROS_AUTOMATIC_DISCOVERY_RANGE=LOCALHOST")
    os.environ.update({key: value for key, value in processes.environment(domain).items() if key.startswith("ROS_")})
    context = Context()
    rclpy.init(context=context, domain_id=domain)
    executor = SingleThreadedExecutor(context=context)
    try:
        with processes.NodeProcess("simulator_node", [params], domain, folder / "simulator.log") as simulator, \
                processes.NodeProcess("planner_node", [params], domain, folder / "planner.log") as planner, \
                BagWriter(folder / _BAG, configuration.flat) as bag:
            node = Node("demo", context=context, use_global_arguments=False)
            executor.add_node(node)
            return _Director(configuration, node, executor, [simulator, planner], bag).run()
    finally:
        executor.shutdown()
        rclpy.try_shutdown(context=context)


class _Director:
    """Goes through the demo step by step, listening all the time."""

    def __init__(self, configuration: config.Configuration, node: Node, executor: SingleThreadedExecutor,
                 nodes: list[processes.NodeProcess], bag: BagWriter) -> None:
        self._configuration, self._node, self._executor, self._nodes = configuration, node, executor, nodes
        self._recorder = Recorder(node, configuration, bag=bag)
        names = configuration.fleet.names
        self._slowed = names[len(names) // 2 - 1]
        self._factor = node.create_publisher(Float64, f"{self._slowed}/simulated_speed_factor", qos.LATCHED)
        self._told = -1.0

    def run(self) -> Run:
        """The whole demo.

        Raises:
            DemoError: a node ended, did not answer, or refused.
        """
        began_wall = time.monotonic()
        self._until(lambda: self._recorder.heard_all, _HELP, "the simulated robots sent nothing")
        for transition in (Transition.TRANSITION_CONFIGURE, Transition.TRANSITION_ACTIVATE):
            self._change_state(transition)
        self._for(1.0)  # poses arrive
        self._begin()
        began = self._recorder.newest_stamp
        self._drive()
        self._for(1.5)  # the machines come to rest
        facts = {"simulated": True, "invented": self._configuration.invented,
                 "site": self._configuration.fleet_name, "file": self._configuration.file, "slowed": self._slowed,
                 "coupling": float(self._recorder.status["coupling"])}
        return self._recorder.run(MANOEUVRE, began=began, wall_time=time.monotonic() - began_wall, facts=facts)

    def _change_state(self, transition: int) -> None:
        request = ChangeState.Request()
        request.transition.id = transition
        if not self._ask(ChangeState, "planner/change_state", request).success:
            raise DemoError("the planner did not become active")

    def _begin(self) -> None:
        answer = self._ask(Trigger, f"planner/begin/{MANOEUVRE}", Trigger.Request())
        _say(f"{MANOEUVRE}: {answer.message}")
        if not answer.success:
            raise DemoError("the manoeuvre was refused")

    def _drive(self) -> None:
        """From the beginning to the end of the manoeuvre, with one robot slowed on the way."""
        end = time.monotonic() + _LONGEST
        slow_until: Optional[float] = None
        while self._state in ("planning", "moving", "stopping"):
            self._spin()
            self._tell_progress()
            if slow_until is None and self._progress >= _SLOWED_FROM:
                slow_until = time.monotonic() + _SLOWED_FOR
                self._slow(_SLOWED_TO, f"{self._slowed} reaches only {100 * _SLOWED_TO:.0f} % of its speed")
            elif slow_until is not None and time.monotonic() >= slow_until:
                slow_until = math.inf
                self._slow(1.0, f"{self._slowed} is well again")
            if time.monotonic() > end:
                raise DemoError(f"the manoeuvre was not done after {_LONGEST:g} s")
        _say(f"  {self._state}: {self._recorder.status['reason']}")

    def _slow(self, factor: float, words: str) -> None:
        self._factor.publish(Float64(data=factor))
        self._recorder.mark(words)
        _say(words)

    @property
    def _state(self) -> str:
        return self._recorder.status.get("state", "")

    @property
    def _progress(self) -> float:
        return float(self._recorder.status.get("progress", 0.0))

    def _tell_progress(self) -> None:
        if self._progress >= self._told + 0.2:
            self._told = self._progress
            clearance = float(self._recorder.status["clearance_m"])
            known = f", smallest planned clearance {clearance:.2f} m" if math.isfinite(clearance) else ""
            _say(f"  {100 * self._progress:3.0f} % done{known}")

    def _ask(self, kind: type, name: str, request: Any) -> Any:
        client = self._node.create_client(kind, name)
        self._until(client.service_is_ready, _HELP, f"{name} is not there")
        future = client.call_async(request)
        self._until(future.done, _HELP, f"{name} did not answer")
        return future.result()

    def _until(self, done: Callable[[], bool], seconds: float, otherwise: str) -> None:
        end = time.monotonic() + seconds
        while not done():
            if time.monotonic() > end:
                raise DemoError(otherwise)
            self._spin()

    def _for(self, seconds: float) -> None:
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            self._spin()

    def _spin(self) -> None:
        self._executor.spin_once(timeout_sec=0.1)
        for process in self._nodes:
            if process.status is not None:
                raise DemoError(f"{process.name} ended by itself with status {process.status}")


def _tell(summary: dict[str, Any], broken: list[str], folder: Path, seconds: float) -> None:
    clearance = summary["min_clearance_m"]
    _say(f"done after {seconds:.0f} s: {summary['contacts']} contacts, {summary['limit_violations']} commands outside "
         f"a limit, smallest clearance {'none' if clearance is None else f'{clearance:.2f} m'}")
    for words in broken:
        _say(f"NOT KEPT: {words}")
    _say(f"figures: {folder / 'summary.json'}   recording: {folder / _BAG}   page to look at: {folder / 'page.html'}")


def _say(words: str) -> None:
    sys.stderr.write(f"{words}\n")
    sys.stderr.flush()
