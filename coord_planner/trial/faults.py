# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What can go wrong in a rehearsal, and when."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import attrs
import numpy as np

from ..core.graph import NeighbourGraph
from ..core.messages import Command, PoseSample
from ..core.plan import Plan
from ..core.problem import Problem
from ..core.solver import Start
from ..errors import SettingsError, SolveError
from .vehicle import SimulatedFleet

Solve = Callable[[Problem, Start, bool, float], Plan]


@attrs.frozen
class Kind:
    """What a kind of fault needs, and what it means.

    Attributes:
        target: "robot", "edge" or "" (the planner itself).
        value: what ``value`` means; "" when the kind takes none.
        lowest, highest: range of ``value``.
        meaning: for people.
    """

    target: str
    value: str
    lowest: float
    highest: float
    meaning: str


KINDS: dict[str, Kind] = {
    "pose_lost": Kind("robot", "", 0.0, 0.0, "no pose of the robot arrives"),
    "pose_frozen": Kind("robot", "", 0.0, 0.0, "the robot's pose stays what it was, with fresh stamps"),
    "pose_jump": Kind("robot", "m", 0.0, 100.0, "the robot's pose is off by so much, to its left"),
    "pose_noise": Kind("robot", "m", 0.0, 10.0, "poses scatter by so much more; headings by half as many radians"),
    "robot_stuck": Kind("robot", "", 0.0, 0.0, "the robot does not move"),
    "robot_slow": Kind("robot", "part", 0.0, 1.0, "the robot reaches only this part of its commanded speed"),
    "not_ready": Kind("robot", "", 0.0, 0.0, "the robot says that it must not be driven"),
    "link_lost": Kind("edge", "", 0.0, 0.0, "two neighbours no longer observe each other"),
    "command_delay": Kind("robot", "s", 0.0, 10.0, "commands reach the robot so much later"),
    "command_lost": Kind("robot", "", 0.0, 0.0, "commands do not reach the robot"),
    "planner_late": Kind("", "s", 0.0, 10.0, "a plan takes so much longer; beyond the budget it comes too late"),
    "planner_fails": Kind("", "", 0.0, 0.0, "no plan is found"),
}


@attrs.frozen
class Fault:
    """One thing that goes wrong for a while.

    Attributes:
        kind: one of KINDS.
        robot: its name, for kinds that strike a robot.
        from_s, to_s: seconds since the manoeuvre began to move.
        value: meaning by kind.
        edge: the two neighbours, for kinds that strike an edge.

    Raises:
        SettingsError: an unknown kind, no target, a value out of range, or an end before the beginning.
    """

    kind: str
    robot: str
    from_s: float
    to_s: float
    value: float = 0.0
    edge: tuple[str, str] = ("", "")

    def __attrs_post_init__(self) -> None:
        if self.kind not in KINDS:
            raise SettingsError(f"{self.kind!r} is not known", key="kind", allowed="one of " + ", ".join(KINDS))
        kind = KINDS[self.kind]
        if kind.target == "robot" and not self.robot:
            raise SettingsError(f"{self.kind} strikes a robot; none is given", key="robot", allowed="a robot's name")
        if kind.target == "edge" and not all(self.edge):
            raise SettingsError(f"{self.kind} strikes an edge; none is given", key="edge", allowed="two robots' names")
        if not 0.0 <= self.from_s < self.to_s:
            raise SettingsError(
                f"it lasts from {self.from_s:g} to {self.to_s:g} s", key="to_s",
                allowed="later than from_s, from 0 s on"
            )
        if kind.value and not kind.lowest <= self.value <= kind.highest:
            raise SettingsError(
                f"{self.value:g} {kind.value} is out of range", key="value",
                allowed=f"{kind.lowest:g} to {kind.highest:g} {kind.value}",
            )

    def active(self, since: float) -> bool:
        """Whether it acts at seconds since the beginning."""
        return self.from_s <= since < self.to_s


def check_targets(faults: Sequence[Fault], graph: NeighbourGraph) -> None:
    """SettingsError for a fault that strikes a robot or an edge that is not there."""
    edges = [set(edge[:2]) for edge in graph.edges]
    for fault in faults:
        if fault.robot and fault.robot not in graph.names:
            raise SettingsError(f"{fault.robot!r} is not in the fleet", key="robot", allowed=", ".join(graph.names))
        if any(fault.edge) and set(fault.edge) not in edges:
            raise SettingsError(
                f"{' '.join(fault.edge)!r} is no edge of the neighbour graph", key="edge",
                allowed=", ".join(" ".join(edge[:2]) for edge in graph.edges),
            )


class Faults:
    """Puts faults into force between the simulated fleet and the coordinator.

    Args:
        faults: what goes wrong. rng: of the extra noise.
    """

    def __init__(self, faults: Sequence[Fault], rng: np.random.Generator) -> None:
        self._faults, self._rng = tuple(faults), rng
        self._since = -1.0
        self._seen: dict[str, PoseSample] = {}  # the last pose before it was lost or froze
        self._queue: list[tuple[float, str, Command]] = []

    def at(self, since: float, simulated: SimulatedFleet, names: Sequence[str]) -> None:
        """Seconds since the beginning; machines that are stuck or slow become so, and well again."""
        self._since = since
        factors = dict.fromkeys(names, 1.0)
        for fault in self._now("robot_slow", "robot_stuck"):
            factors[fault.robot] = min(factors[fault.robot], fault.value if fault.kind == "robot_slow" else 0.0)
        for name, factor in factors.items():
            simulated.slow(name, factor)

    def seen(self, measured: Mapping[str, PoseSample]) -> dict[str, PoseSample]:
        """Poses as they arrive at the planner."""
        arriving = dict(measured)
        for fault in self._now("pose_lost", "pose_frozen"):
            last = self._seen.get(fault.robot, measured[fault.robot])
            frozen = fault.kind == "pose_frozen"
            arriving[fault.robot] = attrs.evolve(last, stamp=measured[fault.robot].stamp) if frozen else last
        self._seen = {name: arriving[name] for name in arriving}
        for fault in self._now("pose_jump", "pose_noise"):
            arriving[fault.robot] = self._shifted(arriving[fault.robot], fault)
        return arriving

    def not_ready(self) -> frozenset[str]:
        """Robots that say that they must not be driven."""
        return frozenset(fault.robot for fault in self._now("not_ready"))

    def graph(self, whole: NeighbourGraph) -> NeighbourGraph:
        """The neighbour graph without the edges that are lost."""
        lost = [set(fault.edge) for fault in self._now("link_lost")]
        return NeighbourGraph(whole.names, tuple(edge for edge in whole.edges if set(edge[:2]) not in lost))

    def send(self, now: float, commands: Mapping[str, Command], simulated: SimulatedFleet) -> None:
        """Commands on their way to the machines."""
        lost = {fault.robot for fault in self._now("command_lost")}
        late = {fault.robot: fault.value for fault in self._now("command_delay")}
        for name, each in commands.items():
            if name not in lost:
                arrives = now + late.get(name, 0.0)
                # Nothing overtakes: what was on its way when a delay ended is outdated by what comes after it.
                self._queue = [entry for entry in self._queue if entry[1] != name or entry[0] < arrives - 1e-9]
                self._queue.append((arrives, name, each))
        due = [entry for entry in self._queue if entry[0] <= now + 1e-9]
        self._queue = [entry for entry in self._queue if entry[0] > now + 1e-9]
        for _, name, each in sorted(due, key=lambda entry: entry[0]):
            simulated.command(name, each, now)

    def solve(self, solve: Solve, allowed: float) -> Solve:
        """The tick's solver as the planner then has it; ``allowed``: the budget of the file, seconds."""

        def struck(problem: Problem, start: Start, warm: bool, budget: float) -> Plan:
            if any(self._now("planner_fails")):
                raise SolveError("the solver found no plan (a fault of the rehearsal)")
            late = max((fault.value for fault in self._now("planner_late")), default=0.0)
            if late > allowed:
                raise SolveError(f"the plan came {late:.2f} s late (a fault of the rehearsal)")
            return solve(problem, start, warm, budget)

        return struck

    def _now(self, *kinds: str) -> list[Fault]:
        return [fault for fault in self._faults if fault.kind in kinds and fault.active(self._since)]

    def _shifted(self, pose: PoseSample, fault: Fault) -> PoseSample:
        if fault.kind == "pose_jump":
            left = np.array([-np.sin(pose.heading), np.cos(pose.heading)]) * fault.value
            return attrs.evolve(pose, x=pose.x + float(left[0]), y=pose.y + float(left[1]))
        dx, dy, turn = self._rng.normal(size=3) * fault.value * np.array([1.0, 1.0, 0.5])
        return PoseSample(pose.stamp, pose.x + float(dx), pose.y + float(dy), pose.heading + float(turn))
