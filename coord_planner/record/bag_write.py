# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A run as a rosbag2 folder (MCAP), with real message types, so that ordinary ROS tools and viewers open it.

Topics are those of the planner's and the simulator's nodes. Every message stands at the time of its stamp.
"""

from __future__ import annotations

import errno
import json
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Final

import attrs
import numpy as np
from rosbags.interfaces import Qos, QosDurability, QosHistory, QosLiveliness, QosReliability, QosTime
from rosbags.rosbag2 import StoragePlugin, Writer

from ..core.graph import NeighbourGraph
from ..core.messages import Caution, State
from ..trial.run import Run, RunFrame
from . import bag_messages as messages
from .marks import marks

PLANNER = "/planner"
PARAMETERS_KEY = "coord_planner_parameters"  # of the bag's custom data: the parameters of the run, as JSON
_FIRST_STAMP = messages.NANOSECONDS  # time 0 means "no clock yet" in ROS, so that a run's clock begins at 1 s
_DIAGNOSTICS_EVERY = 1.0  # seconds; besides at every change
_FORMAT: Final = 8  # of the metadata; ROS 2 Iron and later read it

Entry = tuple[int, str, str, Any]  # nanoseconds, topic, type, message


def write_bag(run: Run, folder: str | Path, *, frame: str = "map", parameters: Mapping[str, Any] | None = None) -> int:
    """Write a run; folders that are missing are made.

    Args:
        frame: of all poses. parameters: the run's parameter file by dotted key, kept in the bag, so that a review
            knows footprints and rules.

    Returns:
        How many messages were written.

    Raises:
        OSError: it cannot be written, or exists: a recording is never written over.
    """
    if Path(folder).exists():
        raise FileExistsError(errno.EEXIST, "a recording is never written over", str(folder))
    Path(folder).parent.mkdir(parents=True, exist_ok=True)
    with BagWriter(folder, parameters) as bag:
        for entry in sorted(_entries(run, frame), key=lambda entry: entry[0]):
            bag.add(*entry)
        return bag.count


class BagWriter:
    """A rosbag2 folder that is being written; a context manager.

    Args:
        folder: must not exist. parameters: kept in the bag's custom data.
    """

    def __init__(self, folder: str | Path, parameters: Mapping[str, Any] | None = None) -> None:
        self._writer = Writer(Path(folder), version=_FORMAT, storage_plugin=StoragePlugin.MCAP)
        if parameters is not None:
            self._writer.set_custom_data(PARAMETERS_KEY, json.dumps(dict(parameters)))
        self._connections: dict[str, Any] = {}
        self.count = 0

    def __enter__(self) -> BagWriter:
        self._writer.open()
        return self

    def __exit__(self, *_: object) -> None:
        self._writer.close()  # also after an error: what was written can be read

    def add(self, nanoseconds: int, topic: str, kind: str, message: Any) -> None:
        """Write a message: one of :mod:`bag_messages`, or bytes that are packed already."""
        if topic not in self._connections:
            self._connections[topic] = self._writer.add_connection(
                topic, kind, typestore=messages.store(), offered_qos_profiles=[_qos(topic)]
            )
        data = message if isinstance(message, (bytes, memoryview)) else messages.packed(message)
        self._writer.write(self._connections[topic], nanoseconds, data)
        self.count += 1


def _qos(topic: str) -> Qos:
    """Reliable; what must reach those who come late is latched, so that a replay does the same."""
    latched = topic.endswith(("/status", "/neighbours_in_force"))
    never = QosTime(0, 0)
    return Qos(QosHistory.KEEP_LAST, 10, QosReliability.RELIABLE,
               QosDurability.TRANSIENT_LOCAL if latched else QosDurability.VOLATILE,
               never, never, QosLiveliness.AUTOMATIC, never, False)


def nanoseconds(seconds: float) -> int:
    """Run time as a stamp."""
    return _FIRST_STAMP + round(float(seconds) * messages.NANOSECONDS)


def _entries(run: Run, frame: str) -> Iterator[Entry]:
    zero = float(run.times[0]) if len(run.times) else 0.0
    yield from _truth(run, frame, zero)
    yield from _commands(run, zero)
    yield from _plans(run, frame, zero)
    yield from _reports(run, frame, zero)


def _truth(run: Run, frame: str, zero: float) -> Iterator[Entry]:
    for sample, when in enumerate(run.times):
        at = nanoseconds(when - zero)
        yield at, "/clock", "rosgraph_msgs/msg/Clock", messages.clock(at)
        for row, name in enumerate(run.fleet.names):
            if np.isfinite(run.poses[row, sample]).all():
                yield at, f"/{name}/simulated_state", "nav_msgs/msg/Odometry", messages.odometry(
                    messages.header(frame, at), f"{name}/base_link", run.poses[row, sample],
                    float(run.speeds[row, sample]), float(run.curvatures[row, sample]))


def _commands(run: Run, zero: float) -> Iterator[Entry]:
    for number, when in enumerate(run.command_times):
        at = nanoseconds(when - zero)
        for row, name in enumerate(run.fleet.names):
            speed, curvature = (float(value) for value in run.commanded[row, number])
            yield at, f"/{name}/curvature", "std_msgs/msg/Float64", messages.number(curvature)
            yield (at, f"/{name}/cmd_vel", "geometry_msgs/msg/TwistStamped",
                   messages.twist_stamped(messages.header("", at), speed, curvature))


def _plans(run: Run, frame: str, zero: float) -> Iterator[Entry]:
    for plan in run.frames:
        at = nanoseconds(plan.time - zero)
        known = len(plan.times) == plan.poses.shape[1]
        due = [nanoseconds(when - zero) for when in plan.times] if known else [at] * plan.poses.shape[1]
        for name, poses in zip(run.fleet.names, plan.poses):
            if due:
                yield at, f"/{name}/planned_path", "nav_msgs/msg/Path", messages.path(frame, due, poses)


def _reports(run: Run, frame: str, zero: float) -> Iterator[Entry]:
    """Neighbours at every change of the graph; status, markers and diagnostics at every plan and every change."""
    if not len(run.times):
        return
    graph = NeighbourGraph(run.fleet.names, run.edges)
    for when, edges in ((zero, run.edges), *run.edge_changes):
        changed = nanoseconds(when - zero)
        told = {"version": 1, "stamp": changed / messages.NANOSECONDS, "edges": [list(edge) for edge in edges]}
        yield (changed, f"{PLANNER}/neighbours_in_force", "std_msgs/msg/String", messages.text(json.dumps(told)))
    changes = _changes(run)
    next_diagnostics = -np.inf
    for when in sorted({*changes, *(plan.time for plan in run.frames)}):
        at = nanoseconds(when - zero)
        cautions = [caution for first, last, caution in run.cautions if first <= when <= last]
        state, words = _state(run, when)
        yield (at, f"{PLANNER}/status", "diagnostic_msgs/msg/DiagnosticStatus",
               _status(run, when, at, state, words, cautions))
        poses = run.poses[:, min(int(np.searchsorted(run.times, when)), len(run.times) - 1)]
        yield at, "/fleet_markers", "visualization_msgs/msg/MarkerArray", messages.markers(
            messages.header(frame, at), marks(run.fleet, graph, poses, cautions,
                                              attrs.evolve(run.site_rules, min_clearance=run.min_clearance)))
        if when in changes or when >= next_diagnostics:
            next_diagnostics = when + _DIAGNOSTICS_EVERY
            yield at, "/diagnostics", "diagnostic_msgs/msg/DiagnosticArray", messages.diagnostics(
                messages.header("", at), _diagnostics(words, cautions))


def _changes(run: Run) -> set[float]:
    """When the state or a warning changed, within what was recorded."""
    moments = {float(when) for when, _ in run.events}
    moments |= {float(moment) for first, last, _ in run.cautions for moment in (first, last)}
    return {when for when in moments if run.times[0] <= when <= run.times[-1]}


def _state(run: Run, when: float) -> tuple[str, str]:
    """The fleet's state at a moment, and that with its reason."""
    states = {state.value for state in State}
    told = [text for time, text in run.events if time <= when and text.split(":")[0] in states]
    if not told:
        told = [State.IDLE.value if when < run.began else State.MOVING.value if when < run.ended else run.state]
    words = told[-1]
    return words.split(":")[0], words


def _status(run: Run, when: float, at: int, state: str, words: str, cautions: list[Caution]) -> Any:
    before = [plan for plan in run.frames if plan.time <= when]
    ends = {name: [float(value) if np.isfinite(value) else None for value in end]
            for name, end in zip(run.fleet.names, run.end_poses)}
    last = max((time for time, _ in run.events), default=-np.inf)
    values = {
        "state": state, "manoeuvre": run.manoeuvre, "reason": words.partition(": ")[2],
        "progress_rate": f"{_rate(before):.3f}", "coupling": f"{run.facts.get('coupling', 0.0):.6g}",
        "alignment": f"{run.facts.get('alignment', 0.0):.6g}",
        "completed": "true" if run.completed and when >= last else "false",
        "warnings": json.dumps([{"code": caution.code, "robot": caution.subject, "level": int(caution.level),
                                 "text": caution.text} for caution in cautions]),
        "ends": json.dumps(ends), "stamp": f"{at / messages.NANOSECONDS:.3f}",
    }
    return messages.status(f"{PLANNER}: status", "", _worst(cautions), words, values)


def _rate(before: list[RunFrame]) -> float:
    return float(before[-1].progress_rate) if before else 1.0


def _diagnostics(words: str, cautions: list[Caution]) -> list[Any]:
    whole = messages.status(f"{PLANNER}: fleet", "", _worst(cautions), words, {})
    return [whole, *(messages.status(f"{PLANNER}: {one.code}", one.subject, int(one.level), one.text, {})
                     for one in cautions)]


def _worst(cautions: list[Caution]) -> int:
    return max((int(caution.level) for caution in cautions), default=0)
