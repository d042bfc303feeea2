# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A plain controller to compare with: each robot steers to its neighbour's heading, and nobody plans.

It is what one would write without this planner: heading control in proportion to the error (common practice), inside
the machines' limits. Robots that have an end drive their own way there (where all have one, only the first does);
every other one steers to the neighbour that is next on the way to those in the graph. It drives at the speed that is
asked of it, and on for a while after the others have stopped until it looks the same way.
"""

from __future__ import annotations

import time as clock
from collections.abc import Sequence
from typing import Optional

import attrs
import numpy as np

from ..config import Configuration
from ..core import gate, manoeuvre, se2
from ..core.advice.conditions import led_by
from ..core.graph import NeighbourGraph
from ..core.manoeuvre import Task
from ..core.messages import Command, PoseSample, State
from .copying import driven_graph
from .faults import Fault, Faults, check_targets
from .run import Run
from .vehicle import SimulatedFleet

_FILTER = 0.2  # seconds, of the filter on what is seen of headings: without it noise alone would steer
_GAIN = 1.2  # 1/s: heading error into turn rate; with the machines' lag and delay it does not swing
_ASIDE, _ASKEW = 0.4, 1.2  # 1/m^2, 1/m: how a leader comes back to its way
_CREEP = 0.1  # m/s, by which turn rates are divided at the least
_LINGER = 3.0  # seconds for which the fleet is watched once all are done
_ALIKE = np.radians(2.0)  # heading error at which a follower is done
_AT_MOST = 20.0  # seconds for which a follower drives on


def follow(
    configuration: Configuration, name: str, *, seed: Optional[int] = None, faults: Sequence[Fault] = ()
) -> Run:
    """One run from the configured starts, to be held against a rehearsal of the same manoeuvre, seed and faults.

    Raises:
        RefusedError: the manoeuvre would be refused.
    """
    began = clock.perf_counter()
    loop = _Loop(configuration, name, configuration.simulation.seed if seed is None else seed, faults)
    while loop.now < loop.until:
        loop.beat()
    return loop.run(clock.perf_counter() - began)


class _Loop:
    """Machines, faults and the controller on one clock."""

    def __init__(self, configuration: Configuration, name: str, seed: int, faults: Sequence[Fault]) -> None:
        self._configuration, self._name, self._seed = configuration, name, seed
        self._fleet, self._graph = configuration.driven, driven_graph(configuration)
        check_targets(faults, self._graph)
        rng = np.random.default_rng(seed)
        timeouts = {robot: link.command_timeout for robot, link in configuration.connections.items()}
        self._machines = SimulatedFleet(self._fleet, configuration.starts, configuration.simulation, timeouts, rng)
        self._faults = Faults(faults, rng)
        starts = configuration.all_starts()
        poses = np.array([starts[robot] for robot in self._fleet.names])
        self.task = manoeuvre.work_out(
            name, configuration.manoeuvre(name), self._fleet, configuration.settings, poses, 0.0, self._graph.hops()
        )
        self._leads = _leads(self.task, self._graph)
        self._period = 1.0 / configuration.settings.commands.rate
        self._last = np.zeros((len(self._fleet), 2))
        self.now, self.until = 0.0, self.task.arrival + _AT_MOST + _LINGER
        self._done = np.zeros(len(self._fleet), dtype=bool)
        self._headings: dict[str, float] = {}
        self._truth: list[tuple[float, np.ndarray, np.ndarray, np.ndarray]] = []
        self._sent: list[tuple[float, np.ndarray]] = []
        self._keep()

    def beat(self) -> None:
        """Look, steer, and let the machines move until the next sending."""
        self._faults.at(self.now, self._machines, self._fleet.names)
        seen = self._smooth(self._faults.seen(self._machines.measure(self.now)))
        wanted = self._wanted(seen)
        self._last, _ = gate.allow(
            wanted, self._last, self._period, self._fleet, self._configuration.settings.site_rules
        )
        self._sent.append((self.now, self._last))
        commands = {robot: Command(float(v), float(k)) for robot, (v, k) in zip(self._fleet.names, self._last)}
        self._faults.send(self.now, commands, self._machines)
        self.now = round(len(self._truth) * self._period, 9)
        self._machines.advance(self.now)
        self._keep()

    def _smooth(self, seen: dict[str, PoseSample]) -> dict[str, PoseSample]:
        """Poses with filtered headings."""
        part = self._period / (self._period + _FILTER)
        for name, pose in seen.items():
            before = self._headings.get(name, pose.heading)
            self._headings[name] = before + part * float(se2.wrap(pose.heading - before))
        return {name: attrs.evolve(pose, heading=self._headings[name]) for name, pose in seen.items()}

    def _wanted(self, seen: dict[str, PoseSample]) -> np.ndarray:
        """Speed and curvature of each robot, shape (N, 2)."""
        moment = np.array([self.now, self.now + self._period])
        speeds = self._speeds(moment, seen)
        due, _, bends = (part[:, 0] for part in self.task.guess(moment[:1]))
        wanted = np.zeros((len(self._fleet), 2))
        for k, robot in enumerate(self._fleet.names):
            own, lead = seen[robot], self._leads[k]
            if lead is None:
                off = np.array([own.x, own.y]) - due[k, :2]
                aside = float(-off[0] * np.sin(due[k, 2]) + off[1] * np.cos(due[k, 2]))
                bend = bends[k] - _ASIDE * aside - _ASKEW * float(se2.wrap(own.heading - due[k, 2]))
            else:
                error = float(se2.wrap(seen[self._fleet.names[lead]].heading - own.heading))
                bend = _GAIN * error / max(speeds[k], _CREEP)
            wanted[k] = speeds[k], bend
        return wanted

    def _speeds(self, moment: np.ndarray, seen: dict[str, PoseSample]) -> np.ndarray:
        """As asked; followers that do not look their neighbour's way yet, when that is over, drive on until they do."""
        if self.now < self.task.arrival:
            return self.task.asked_speed(moment)[:, 0]
        names = self._fleet.names
        for k, lead in enumerate(self._leads):
            if lead is None:
                self._done[k] = True
            elif self._done[lead]:
                self._done[k] |= abs(se2.wrap(seen[names[lead]].heading - seen[names[k]].heading)) < _ALIKE
        if self._done.all():
            self.until = min(self.until, self.now + _LINGER)
        return np.where(self._done, 0.0, self.task.asked)

    def _keep(self) -> None:
        machines = self._machines
        self._truth.append((self.now, machines.poses(), machines.speeds(), machines.curvatures()))

    def run(self, wall_time: float) -> Run:
        """What happened."""
        times, poses, speeds, curvatures = (list(column) for column in zip(*self._truth))
        moving = np.abs(np.stack(speeds)).max(axis=1) > 1e-3
        ended = float(times[int(np.flatnonzero(moving)[-1])]) if moving.any() else 0.0
        return Run(
            fleet=self._fleet, edges=self._graph.edges, manoeuvre=self._name, times=np.array(times),
            poses=np.stack(poses, axis=1), speeds=np.stack(speeds, axis=1), curvatures=np.stack(curvatures, axis=1),
            command_times=np.array([time for time, _ in self._sent]),
            commanded=np.stack([sent for _, sent in self._sent], axis=1), end_poses=self.task.ends,
            min_clearance=self._configuration.settings.site_rules.min_clearance, state=State.ENDED.value,
            completed=bool(self._done.all()), began=0.0, ended=ended, cautions=(), tick_ms=np.zeros(0),
            wall_time=wall_time,
            facts={"simulated": True, "invented": self._configuration.invented, "seed": self._seed},
        )


def _leads(task: Task, graph: NeighbourGraph) -> tuple[Optional[int], ...]:
    """Whose heading each robot steers to; None for who drives a way of its own."""
    led = led_by(task)
    leaders = led if len(led) < len(graph.names) else led[:1]
    hops, joined = graph.hops(), graph.laplacian() < 0
    from_leader = hops[list(leaders)].min(axis=0)
    found: list[Optional[int]] = []
    for k in range(len(graph.names)):
        near = np.flatnonzero(joined[k] & (from_leader < from_leader[k]))
        found.append(None if k in leaders or not len(near) else int(near[0]))
    return tuple(found)
