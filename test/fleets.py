# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Named fleets and problems, shared by the tests of the core: invented machines, known answers.

Solved references are kept, since solving is what takes time. Whoever gets one must not change its arrays.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from functools import lru_cache
from types import SimpleNamespace
from typing import Optional

import attrs
import numpy as np

from coord_planner.core import graph as graphs
from coord_planner.core import manoeuvre, reference
from coord_planner.core.coordinator import Coordinator, Solve
from coord_planner.core.fast.ticks import TickSolve
from coord_planner.core.fleet import Fleet, Footprint, Limits, Response, Robot
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.manoeuvre import EqualRadius, Manoeuvre, ToEnds
from coord_planner.core.messages import Answer, Decision, PoseSample, Snapshot, State
from coord_planner.core.problem import POSE, SPEED, SPEED_COMMAND
from coord_planner.core.reference import Reference
from coord_planner.core.settings import Coupling, Horizon, Settings, SiteRules
from coord_planner.trial.vehicle import SimulatedFleet

LIMITS = Limits(
    max_curvature=0.8, max_curvature_rate=0.6, min_speed=0.0, max_speed=1.4, max_acceleration=0.6, max_braking=1.0,
    max_turn_rate=1.0, max_lateral_acceleration=1.0,
)
# Limits that nothing in these tests meets, for checks of what the cost alone does.
HARDLY_ANY = Limits(
    max_curvature=20.0, max_curvature_rate=50.0, min_speed=-20.0, max_speed=20.0, max_acceleration=20.0,
    max_braking=20.0, max_turn_rate=20.0, max_lateral_acceleration=20.0,
)
PROMPT, SMALL = Response(), Footprint()  # answers at once; 1.2 m by 0.8 m
LATE = Response(speed_lag=0.25, curvature_lag=0.2, command_delay=0.1)
SPACING = 2.5  # metres, abreast


def carts(
    count: int, limits: Limits = LIMITS, response: Response = PROMPT, footprint: Footprint = SMALL,
) -> Fleet:
    """``cart_1`` ... side by side, ``cart_1`` on the left."""
    return Fleet(tuple(Robot(f"cart_{k + 1}", limits, footprint, response) for k in range(count)))


def abreast(count: int, spacing: float = SPACING) -> np.ndarray:
    """Start poses, shape (N, 3): all look along x, the first on the left."""
    return np.stack([np.zeros(count), spacing * np.arange(count)[::-1], np.zeros(count)], axis=1)


def states(poses: np.ndarray, speed: float = 0.0) -> np.ndarray:
    """Settled states at poses, shape (N, 7)."""
    settled = np.zeros((len(poses), 7))
    settled[:, POSE] = poses
    settled[:, [SPEED, SPEED_COMMAND]] = speed
    return settled


def settings(**groups: Mapping[str, object]) -> Settings:
    """Defaults, with some values of some groups changed."""
    base = Settings(coupling=Coupling(strength=2.0), site_rules=SiteRules(min_clearance=0.85))
    changed = {name: attrs.evolve(getattr(base, name), **values) for name, values in groups.items()}
    return attrs.evolve(base, **changed)


def solve(
    wanted: Manoeuvre, fleet: Fleet, poses: np.ndarray, with_settings: Settings, graph: Optional[NeighbourGraph] = None,
    speed: float = 0.0,
) -> Reference:
    """A reference straight from what is asked, as the coordinator makes it; a path graph when none is given."""
    graph = graphs.path(fleet.names) if graph is None else graph
    task = manoeuvre.work_out("turn", wanted, fleet, with_settings, poses, speed, graph.hops())
    return reference.make(task, fleet, graph, with_settings, states(poses, speed))


@lru_cache
def corner(count: int = 3, late: bool = False) -> Reference:
    """Everyone turns left by 90 degrees at 4 m, from standing to standing."""
    fleet = carts(count, response=LATE if late else PROMPT)
    return solve(EqualRadius(angle_deg=90.0, radius=4.0), fleet, abreast(count), settings())


@lru_cache
def wheel(mirrored: bool = False) -> Reference:
    """Three abreast turn like a wheel, the outer ones on the longer ways; the smallest clearance binds."""
    side = -1.0 if mirrored else 1.0
    ends = tuple(f"cart_{k + 1} pose {4.0 + 1.85 * k} {side * 12.0} {side * 90.0}" for k in range(3))
    poses = abreast(3)
    poses[:, 1] *= side
    return solve(ToEnds(ends_deg=ends), carts(3), poses, settings())


def dense(made: Reference, between: int = 5) -> np.ndarray:
    """States of a reference at its nodes and between them, shape (N, K, 7)."""
    times = made.plan.times
    return made.plan.sample(np.unique(np.concatenate([times, np.linspace(times[0], times[-1], between * len(times))])))


def length(made: Reference, k: int) -> float:
    """Metres that one robot drives in a reference, chord by chord (never more than it drives)."""
    return float(np.linalg.norm(np.diff(dense(made)[k, :, :2], axis=0), axis=1).sum())


PERFECT = {
    "pose_noise_xy": 0.0, "pose_noise_heading_deg": 0.0, "pose_delay": 0.0, "speed_lag": -1.0, "curvature_lag": -1.0,
    "command_delay": -1.0, "speed_factor": 1.0,
}


class Yard:
    """A coordinator that drives simulated machines, step by step, so that a test can interfere at any moment.

    Attributes that tests change on the way:
        hidden: robots whose poses do not arrive. moved: (x, y) added to measured positions, by name.
        not_ready: robots that may not be driven.
    What it keeps: ``answers``, ``decisions``, ``sent`` (time, commands of shape (N, 2), who gets none keeps the
    last), ``told`` (time, who gets a command), ``track`` (time, true poses).
    """

    def __init__(
        self, fleet: Fleet, poses: np.ndarray, manoeuvres: Mapping[str, Manoeuvre], with_settings: Settings,
        graph: Optional[NeighbourGraph] = None, seed: int = 0, solve: Optional[Solve] = None,
        driven: tuple[str, ...] = (), **imperfect: float,
    ) -> None:
        self.fleet, self.settings = fleet, with_settings
        self.graph = graph = graphs.path(fleet.names) if graph is None else graph
        part = self.part(driven) if driven else fleet
        self.coordinator = Coordinator(
            part, graph.relative_to(part.names), with_settings, manoeuvres, budget=60.0,
            solve=solve or TickSolve(time.perf_counter),
        )
        starts = {name: tuple(pose) for name, pose in zip(fleet.names, poses)}
        self.machines = SimulatedFleet(
            fleet, starts, SimpleNamespace(**(PERFECT | imperfect)), dict.fromkeys(fleet.names, 0.5),
            np.random.default_rng(seed),
        )
        self.now, self._beats = 0.0, 0
        self.hidden: set[str] = set()
        self.moved: dict[str, tuple[float, float]] = {}
        self.not_ready: frozenset[str] = frozenset()
        self.answers: list[Answer] = []
        self.decisions: list[Decision] = []
        self.sent: list[tuple[float, np.ndarray]] = []
        self.track: list[tuple[float, np.ndarray]] = []
        self._seen: dict[str, PoseSample] = {}
        self._told = np.zeros((len(fleet), 2))
        self.told: list[tuple[float, frozenset[str]]] = []

    def part(self, names: Sequence[str]) -> Fleet:
        """Some of the machines."""
        return Fleet(tuple(robot for robot in self.fleet.robots if robot.name in names))

    def want(self, *names: str) -> None:
        """Others shall be part of the fleet from now on."""
        self.coordinator.change(self.now, fleet=self.part(names), graph=self.graph)

    def snapshot(self) -> Snapshot:
        """What is known now; hidden robots keep their last pose."""
        for name, pose in self.machines.measure(self.now).items():
            if name not in self.hidden:
                dx, dy = self.moved.get(name, (0.0, 0.0))
                self._seen[name] = attrs.evolve(pose, x=pose.x + dx, y=pose.y + dy)
        return Snapshot(self.now, dict(self._seen), self.not_ready)

    def begin(self, name: str, **overrides: float) -> Answer:
        """Ask, do the slow work, and return the answer."""
        self.coordinator.begin(name, self.snapshot(), overrides=overrides, answered=self.answers.append)
        self.work()
        return self.answers[-1]

    def resume(self) -> Answer:
        self.coordinator.resume(self.snapshot(), self.answers.append)
        self.work()
        return self.answers[-1]

    def work(self) -> None:
        """Slow work is done while simulated time stands still."""
        for job in self.coordinator.jobs():
            self.coordinator.deliver(job(), self.now)

    def run(self, seconds: float, each: Callable[[Yard], None] = lambda _yard: None) -> None:
        """Let time pass; ``each`` is called after every tick."""
        until = self.now + seconds
        while self.now < until - 1e-9:
            self._beat(each)

    def run_to(self, *wanted: State, longest: float = 60.0) -> State:
        """Let time pass until the fleet is in one of some states."""
        until = self.now + longest
        while self.coordinator.state not in wanted:
            assert self.now < until, f"still {self.coordinator.state.value} after {longest} s"
            self._beat(lambda _yard: None)
        return self.coordinator.state

    def _beat(self, each: Callable[[Yard], None]) -> None:
        """One period of the commands; every second one a tick."""
        if self._beats % 2 == 0:
            self.decisions.append(self.coordinator.step(self.snapshot()))
            each(self)
            self.work()
        commands = self.coordinator.commands(self.now)
        if commands is not None:
            for name, command in commands.items():
                self._told[self.fleet.index(name)] = command.speed, command.curvature
            self.sent.append((self.now, self._told.copy()))
            self.told.append((self.now, frozenset(commands)))
            for name, command in commands.items():
                self.machines.command(name, command, self.now)
        self.track.append((self.now, self.machines.poses()))
        self._beats += 1
        self.now = round(0.05 * self._beats, 9)
        self.machines.advance(self.now)

    def standing(self) -> bool:
        """Whether every machine truly stands."""
        return bool(np.abs(self.machines.speeds()).max() < 1e-2)

    def codes(self) -> set[str]:
        """Codes of all warnings so far."""
        return {caution.code for decision in self.decisions for caution in decision.warnings}

    def breaches(self, fleet: Optional[Fleet] = None, since: float = -1.0) -> dict[str, float]:
        """Largest excess over each limit among the commands that were sent, in the unit of the limit."""
        fleet = self.fleet if fleet is None else fleet
        times = np.array([time for time, _ in self.sent if time >= since])
        values = np.stack([value for time, value in self.sent if time >= since], axis=1)
        return excess(fleet, times, values)


def excess(fleet: Fleet, times: np.ndarray, commands: np.ndarray) -> dict[str, float]:
    """How far commands of shape (N, C, 2) exceed each limit, at most; rates from command to command."""
    speed, curvature = np.abs(commands[:, :, 0]), np.abs(commands[:, :, 1])
    step = np.maximum(np.diff(times), 1e-9)
    faster, steered = np.diff(speed, axis=1) / step, np.abs(np.diff(commands[:, :, 1], axis=1)) / step
    measured = {
        "max_speed": speed, "max_curvature": curvature, "max_turn_rate": speed * curvature,
        "max_lateral_acceleration": speed**2 * curvature, "max_acceleration": faster, "max_braking": -faster,
        "max_curvature_rate": steered,
    }
    return {
        name: float(np.max(values - fleet.limit(name)[:, None], initial=-np.inf)) for name, values in measured.items()
    }


def small_yard(
    count: int = 2, response: Response = LATE, solve: Optional[Solve] = None, driven: tuple[str, ...] = (),
    **imperfect: float,
) -> Yard:
    """Two carts, a short horizon: quick to plan for. ``corner``, ``led``, ``placed`` and ``passing`` can be begun."""
    manoeuvres: dict[str, Manoeuvre] = {
        "corner": EqualRadius(angle_deg=60.0, radius=3.0, speed=1.0),
        "led": ToEnds(ends_deg=("cart_1 heading 60",), speed=1.0, alignment=10.0),
        "placed": ToEnds(ends_deg=("cart_1 pose 6 8 90", "cart_2 pose 9 8 90")),
        "passing": EqualRadius(angle_deg=60.0, radius=3.0, speed=1.0, end_speed=0.5),
    }
    horizon = Horizon(intervals=12)
    return Yard(carts(count, response=response), abreast(count), manoeuvres, settings(horizon=attrs.asdict(horizon)),
                solve=solve, driven=driven, **imperfect)

