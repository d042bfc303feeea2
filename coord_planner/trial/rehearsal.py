# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A closed-loop run of planner and simulated fleet, faster than real time and the same for the same seed."""

from __future__ import annotations

import time as clock
from collections.abc import Callable, Sequence
from typing import Optional

import attrs
import numpy as np

from ..config import Configuration
from ..config.failures import kept
from ..core.coordinator import Coordinator
from ..core.fast.ticks import TickSolve
from ..core.fence import Line, Piece
from ..core.fleet import Fleet
from ..core.graph import Edge
from ..core.messages import Answer, Caution, Decision, HazardPoint, PoseSample, Snapshot, State
from ..errors import RefusedError
from .faults import Fault, Faults, check_targets
from .run import Run, RunFrame
from .sighting import Sighting, turned_away
from .vehicle import SimulatedFleet

_LONGEST = 900.0  # seconds of simulated time
_BUDGET = 60.0  # seconds of wall time for a tick's solve: never the reason for what a rehearsal shows
_FRAME_EVERY = 2  # ticks between plans kept for the page
_FRAME_POINTS = 13
_SAME = 1e-9  # seconds; moments closer than this are one

# Called after every tick with the coordinator and the simulated time: for requests in mid-turn.
Watch = Callable[[Coordinator, float], None]


class _Log:
    """Collects what a run is made of."""

    def __init__(self) -> None:
        self.times: list[float] = []
        self.poses: list[np.ndarray] = []
        self.speeds: list[np.ndarray] = []
        self.curvatures: list[np.ndarray] = []
        self.command_times: list[float] = []
        self.commanded: list[np.ndarray] = []
        self.tick_ms: list[float] = []
        self.frames: list[RunFrame] = []
        self.events: list[tuple[float, str]] = []
        self._cautions: dict[tuple[str, str], list[tuple[float, float, Caution]]] = {}
        self._state: Optional[State] = None

    def truth(self, time: float, fleet: SimulatedFleet) -> None:
        self.times.append(time)
        self.poses.append(fleet.poses())
        self.speeds.append(fleet.speeds())
        self.curvatures.append(fleet.curvatures())

    def decision(self, decision: Decision, tick_ms: float, gap: float, seen: SimulatedFleet) -> None:
        """Cautions that pause for less than ``gap`` seconds count as one.

        In the plans that are kept, robots that are no part of the decision stand where they are.
        """
        self.tick_ms.append(tick_ms)
        if decision.state is not self._state:
            self._state = decision.state
            reason = f": {decision.reason}" if decision.reason else ""
            self.events.append((decision.time, f"{decision.state.value}{reason}"))
        for caution in decision.warnings:
            spans = self._cautions.setdefault((caution.code, caution.subject), [])
            if spans and decision.time - spans[-1][1] <= gap:
                spans[-1] = (spans[-1][0], decision.time, spans[-1][2])
            else:
                spans.append((decision.time, decision.time, caution))
        if len(self.tick_ms) % _FRAME_EVERY == 0 and decision.plan_poses.shape[1]:
            picked = np.unique(np.linspace(0, decision.plan_poses.shape[1] - 1, _FRAME_POINTS).astype(int))
            poses = np.repeat(seen.poses()[:, None], len(picked), axis=1)
            poses[[seen.names.index(name) for name in decision.names]] = decision.plan_poses[:, picked]
            self.frames.append(
                RunFrame(decision.time, decision.progress_rate, poses, decision.plan_times[picked])
            )

    def cautions(self) -> tuple[tuple[float, float, Caution], ...]:
        spans = [span for group in self._cautions.values() for span in group]
        return tuple(sorted(spans, key=lambda span: span[0]))


def rehearse(
    configuration: Configuration, manoeuvre: str, *, seed: Optional[int] = None, faults: Sequence[Fault] = (),
    watch: Optional[Watch] = None, overrides: Optional[dict[str, float]] = None, seen: Optional[Sighting] = None,
    progress: Callable[[float], None] = lambda _part: None,
) -> Run:
    """Run one manoeuvre from the configured starts to its end, its refusal or a stop that nobody resumes.

    Args:
        seed: of the noise; the file's own when left out.
        seen: a hazard that turns up on the way.
        progress: called with the part of the manoeuvre that is done.

    Raises:
        RefusedError: the manoeuvre was refused; nothing has moved.
        SettingsError: a fault strikes a robot or an edge that is not there.
    """
    began_at = clock.perf_counter()
    loop = _Loop(configuration, configuration.simulation.seed if seed is None else seed, faults, seen)
    loop.begin(manoeuvre, overrides)
    while loop.now < _LONGEST and not loop.over:
        if loop.tick_is_due:
            progress(loop.tick().progress)
            if watch is not None:
                watch(loop.coordinator, loop.now)
            loop.work()
        loop.advance()
    return loop.run(manoeuvre, clock.perf_counter() - began_at)


class _Loop:
    """Planner and simulated fleet on one clock that stands still while anybody computes."""

    def __init__(
        self, configuration: Configuration, seed: int, faults: Sequence[Fault], seen: Optional[Sighting] = None
    ) -> None:
        self._configuration, self._seed, self._sighting = configuration, seed, seen
        settings, driven = configuration.settings, configuration.driven
        # Who is not enabled stands by: it may be wanted on the way.
        self._fleet = Fleet(tuple(
            robot for robot in configuration.fleet.robots
            if robot.name in configuration.starts or robot.name in configuration.enabled
        ))
        rng = np.random.default_rng(seed)
        timeouts = {name: link.command_timeout for name, link in configuration.connections.items()}
        self._simulated = SimulatedFleet(self._fleet, configuration.starts, configuration.simulation, timeouts, rng)
        self._graph = self._graph_now = configuration.graph.relative_to(self._fleet.names)
        check_targets(faults, self._graph)
        self._faults = Faults(faults, rng)
        solve, refused = kept(
            configuration.failures, TickSolve(clock.perf_counter), settings.site_rules.min_clearance
        )
        self.coordinator = Coordinator(
            driven, self._graph.relative_to(driven.names), settings, configuration.manoeuvres, _BUDGET,
            self._faults.solve(solve, settings.horizon.budget), refused,
        )
        self._edges_now = self.coordinator.graph.edges
        self._edge_changes: list[tuple[float, tuple[Edge, ...]]] = []
        self._log = _Log()
        self._period, self._tick_period = 1.0 / settings.commands.rate, 1.0 / settings.horizon.rate
        self._pose_period = 1.0 / configuration.simulation.pose_rate
        self._next_tick = self._next_pose = self.now = 0.0
        self._moving_since: Optional[float] = None
        self._measured: dict[str, PoseSample] = {}
        self._told = np.zeros((len(self._fleet), 2))  # who gets no command keeps the last
        self._ends = np.full((len(self._fleet), 3), np.nan)
        self._carried = set(driven.names)
        self._edges: tuple[tuple[Line, ...], tuple[Piece, ...]] = ((), ())
        self.over = False

    @property
    def tick_is_due(self) -> bool:
        return self.now >= self._next_tick - _SAME

    def begin(self, manoeuvre: str, overrides: Optional[dict[str, float]]) -> None:
        """Ask for the manoeuvre; RefusedError when it is refused."""
        answers: list[Answer] = []
        self._measured = self._simulated.measure(0.0)
        self.coordinator.begin(manoeuvre, Snapshot(0.0, self._measured), overrides=overrides, answered=answers.append)
        self.work()
        _raise_if_refused(answers)
        begun = self.coordinator.reference
        self._edges = ((), ()) if begun is None else (begun.task.strip, begun.task.pieces)
        self._log.truth(0.0, self._simulated)

    def work(self) -> None:
        """Do slow work on the spot."""
        for job in self.coordinator.jobs():
            self.coordinator.deliver(job(), self.now)

    def tick(self) -> Decision:
        """Look at the robots and decide."""
        self._look()
        edges = self.coordinator.graph.edges
        if edges != self._edges_now:
            self._edges_now = edges
            self._edge_changes.append((self.now, edges))
        began = clock.perf_counter()
        decision = self.coordinator.step(Snapshot(
            self.now, self._measured, self._faults.not_ready(), hazard=self._seen_now()
        ))
        self._log.decision(decision, 1e3 * (clock.perf_counter() - began), 3 * self._tick_period, self._simulated)
        self._carried |= set(decision.names)
        if decision.manoeuvre:
            self._ends[:] = np.nan
            for name, end in zip(decision.names, self.coordinator.ends):
                self._ends[self._fleet.index(name)] = end
        if self._moving_since is None and decision.state is State.MOVING:
            self._moving_since = self.now
        self._next_tick += self._tick_period
        self.over = decision.state in (State.IDLE, State.HELD)
        return decision

    def _seen_now(self) -> Optional[HazardPoint]:
        if self._sighting is None or self._moving_since is None:
            return None
        if self._sighting.arm:
            self.coordinator.arm(self._sighting.arm, self.now)
        return self._sighting.point(self.now - self._moving_since, self.now)

    def advance(self) -> None:
        """Send commands and let the machines move until the next sending."""
        self._look()
        commands = self.coordinator.commands(self.now)
        if commands is not None:
            self._log.command_times.append(self.now)
            for name, command in commands.items():
                self._told[self._fleet.index(name)] = command.speed, command.curvature
            self._log.commanded.append(self._told.copy())
        self._faults.send(self.now, commands or {}, self._simulated)
        if self._moving_since is not None:
            self._strike(self.now - self._moving_since)
        self.now = round(len(self._log.times) * self._period, 9)
        self._simulated.advance(self.now)
        self._log.truth(self.now, self._simulated)

    def _look(self) -> None:
        if self.now >= self._next_pose - _SAME:
            self._measured = self._faults.seen(self._simulated.measure(self.now))
            self._next_pose += self._pose_period

    def _strike(self, since: float) -> None:
        self._faults.at(since, self._simulated, self._fleet.names)
        graph = self._faults.graph(self._graph)
        if graph.edges != self._graph_now.edges:
            self._graph_now = graph
            self.coordinator.change(self.now, graph=graph)
            self.work()

    def run(self, manoeuvre: str, wall_time: float) -> Run:
        """What happened."""
        configuration, log, decision = self._configuration, self._log, self.coordinator.decision
        rows = [k for k, name in enumerate(self._fleet.names) if name in self._carried]
        frames = tuple(attrs.evolve(frame, poses=frame.poses[rows]) for frame in log.frames)
        away = turned_away(self.coordinator, self._sighting, self._moving_since or 0.0) if self._sighting else {}
        state = State.ENDED if decision.completed else decision.state
        fleet = Fleet(tuple(self._fleet.robots[k] for k in rows))
        return Run(
            fleet=fleet,
            edges=self._graph.relative_to(configuration.driven.names).edges, manoeuvre=manoeuvre,
            times=np.array(log.times), poses=np.stack(log.poses, axis=1)[rows],
            speeds=np.stack(log.speeds, axis=1)[rows], curvatures=np.stack(log.curvatures, axis=1)[rows],
            command_times=np.array(log.command_times), commanded=np.stack(log.commanded, axis=1)[rows],
            end_poses=self._ends[rows],
            min_clearance=configuration.settings.site_rules.min_clearance, state=state.value,
            completed=decision.completed, began=self._moving_since or 0.0, ended=_ended(log), cautions=log.cautions(),
            edge_changes=tuple((when, _among(edges, fleet.names)) for when, edges in self._edge_changes),
            tick_ms=np.array(log.tick_ms), wall_time=wall_time, frames=frames, events=tuple(log.events),
            facts={
                "simulated": True, "invented": configuration.invented, "site": configuration.fleet_name,
                "file": configuration.file, "coupling": decision.coupling, "alignment": decision.alignment,
                "seed": self._seed, **({"turned_away": away} if away else {}),
            },
            site_rules=configuration.settings.site_rules, strip=self._edges[0], pieces=self._edges[1],
        )


def _among(edges: Sequence[Edge], names: Sequence[str]) -> tuple[Edge, ...]:
    """The edges between robots that are named."""
    return tuple(edge for edge in edges if edge[0] in names and edge[1] in names)


def _raise_if_refused(answers: Sequence[Answer]) -> None:
    for answer in answers:
        if not answer.ok:
            reason, _, remedy = answer.text.rpartition("; ")
            raise RefusedError(reason or answer.text, remedy)


def _ended(log: _Log) -> float:
    """When the fleet came to rest."""
    moving = np.abs(np.stack(log.speeds, axis=1)).max(axis=0) > 1e-3
    return log.times[int(np.flatnonzero(moving)[-1])] if moving.any() else log.times[-1]
