"""A closed-loop run of planner and simulated fleet, faster than real time and the same for the same seed."""

from __future__ import annotations

import time as clock
from collections.abc import Callable, Sequence
from typing import Optional

import numpy as np

from ..config import Configuration
from ..core.coordinator import Coordinator
from ..core.messages import Answer, Caution, Decision, Snapshot, State
from ..errors import RefusedError
from .faults import Fault, apply
from .run import Run, RunFrame
from .vehicle import SimulatedFleet

_LONGEST = 900.0  # seconds of simulated time
_BUDGET = 60.0  # seconds of wall time for a tick's solve: never the reason for what a rehearsal shows
_FRAME_EVERY = 2  # ticks between plans kept for the page
_FRAME_POINTS = 13

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

    def decision(self, decision: Decision, tick_ms: float, gap: float) -> None:
        """Cautions that pause for less than ``gap`` seconds count as one."""
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
            self.frames.append(RunFrame(decision.time, decision.progress_rate, decision.plan_poses[:, picked],
                                        decision.plan_times[picked]))

    def cautions(self) -> tuple[tuple[float, float, Caution], ...]:
        spans = [span for group in self._cautions.values() for span in group]
        return tuple(sorted(spans, key=lambda span: span[0]))


def rehearse(
    configuration: Configuration, manoeuvre: str, *, seed: Optional[int] = None, faults: Sequence[Fault] = (),
    watch: Optional[Watch] = None, overrides: Optional[dict[str, float]] = None,
    progress: Callable[[float], None] = lambda _part: None,
) -> Run:
    """Run one manoeuvre from the configured starts to its end, its refusal or a stop that nobody resumes.

    Args:
        seed: of the noise; the file's own when left out.
        progress: called with the part of the manoeuvre that is done.

    Raises:
        RefusedError: the manoeuvre was refused; nothing has moved.
    """
    settings, simulation = configuration.settings, configuration.simulation
    rng = np.random.default_rng(simulation.seed if seed is None else seed)
    timeouts = {name: link.command_timeout for name, link in configuration.connections.items()}
    fleet = configuration.driven
    simulated = SimulatedFleet(fleet, configuration.starts, simulation, timeouts, rng)
    coordinator = Coordinator(
        fleet, configuration.graph.relative_to(fleet.names), settings, configuration.manoeuvres, _BUDGET
    )
    log = _Log()
    answers: list[Answer] = []
    began_at = clock.perf_counter()
    period = 1.0 / settings.commands.rate
    ticks_every = 1.0 / settings.horizon.rate
    poses_every = 1.0 / simulation.pose_rate
    now, next_tick, next_pose = 0.0, 0.0, 0.0
    moving_since: Optional[float] = None
    measured = simulated.measure(0.0)
    coordinator.begin(manoeuvre, Snapshot(0.0, measured), overrides=overrides, answered=answers.append)
    _work(coordinator, now)
    _raise_if_refused(answers)
    log.truth(now, simulated)
    while now < _LONGEST:
        if now >= next_pose - 1e-9:
            measured = simulated.measure(now)
            next_pose += poses_every
        if now >= next_tick - 1e-9:
            tick_began = clock.perf_counter()
            decision = coordinator.step(Snapshot(now, measured))
            log.decision(decision, 1e3 * (clock.perf_counter() - tick_began), 3 * ticks_every)
            if moving_since is None and decision.state is State.MOVING:
                moving_since = now
            if watch is not None:
                watch(coordinator, now)
            _work(coordinator, now)
            progress(decision.progress)
            next_tick += ticks_every
            if decision.state in (State.IDLE, State.HELD):
                break
        commands = coordinator.commands(now)
        if commands is not None:
            log.command_times.append(now)
            log.commanded.append(np.array([[c.speed, c.curvature] for c in commands.values()]))
            for name, command in commands.items():
                simulated.command(name, command, now)
        if moving_since is not None:
            apply(faults, now - moving_since, simulated, fleet.names)
        now = round((len(log.times)) * period, 9)
        simulated.advance(now)
        log.truth(now, simulated)
    return _run(configuration, manoeuvre, coordinator, log, moving_since or 0.0, clock.perf_counter() - began_at, seed)


def _work(coordinator: Coordinator, now: float) -> None:
    """Do slow work on the spot: simulated time stands still meanwhile."""
    for job in coordinator.jobs():
        coordinator.deliver(job(), now)


def _raise_if_refused(answers: Sequence[Answer]) -> None:
    for answer in answers:
        if not answer.ok:
            reason, _, remedy = answer.text.rpartition("; ")
            raise RefusedError(reason or answer.text, remedy)


def _run(
    configuration: Configuration, manoeuvre: str, coordinator: Coordinator, log: _Log, began: float,
    wall_time: float, seed: Optional[int],
) -> Run:
    decision = coordinator.decision
    fleet = configuration.driven
    state = State.ENDED if decision.completed else decision.state
    return Run(
        fleet=fleet, edges=configuration.graph.relative_to(fleet.names).edges, manoeuvre=manoeuvre,
        times=np.array(log.times), poses=np.stack(log.poses, axis=1), speeds=np.stack(log.speeds, axis=1),
        curvatures=np.stack(log.curvatures, axis=1), command_times=np.array(log.command_times),
        commanded=np.stack(log.commanded, axis=1), end_poses=coordinator.ends,
        min_clearance=configuration.settings.site_rules.min_clearance, state=state.value,
        completed=decision.completed, began=began, ended=_ended(log), cautions=log.cautions(),
        tick_ms=np.array(log.tick_ms), wall_time=wall_time, frames=tuple(log.frames), events=tuple(log.events),
        facts={
            "simulated": True, "invented": configuration.invented, "site": configuration.fleet_name,
            "file": configuration.file, "coupling": decision.coupling, "alignment": decision.alignment,
            "seed": configuration.simulation.seed if seed is None else seed,
        },
    )


def _ended(log: _Log) -> float:
    """When the fleet came to rest."""
    moving = np.abs(np.stack(log.speeds, axis=1)).max(axis=0) > 1e-3
    return log.times[int(np.flatnonzero(moving)[-1])] if moving.any() else log.times[-1]
