# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Whatever arrives, at whatever moment: never an exception, never a command that is not finite or outside a limit.

FUZZ_EXAMPLES=10000 runs as many examples as are asked for (60 otherwise). Most of them have a solver that costs
nothing and returns anything; references are made once and cut to length. Some have the real solvers.
"""

import contextlib
import math
import os
from functools import lru_cache

import attrs
import fleets
import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

from coord_planner.core import graph as graphs
from coord_planner.core import ocp, reference
from coord_planner.core.area import area_of
from coord_planner.core.coordinator import Coordinator
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.manoeuvre import EqualRadius, ToEnds, TurnAway
from coord_planner.core.messages import PoseSample, Snapshot, State
from coord_planner.core.plan import from_solution
from coord_planner.core.settings import SpeedCap
from coord_planner.errors import RefusedError, SolveError

EXAMPLES = int(os.environ.get("FUZZ_EXAMPLES", "60"))
COUNT, PERIOD = 2, 0.05
LIMITS = attrs.evolve(fleets.LIMITS, max_speed=1.2)
AREA = area_of("bed", (3, -4, 4, -4, 4, -2.2, 3, -2.2))
SETTINGS = fleets.settings(
    horizon={"intervals": 8}, site_rules={"keep_outs": (AREA,), "speed_caps": (SpeedCap(AREA, 0.6),)}
)
FLEET, STARTS = fleets.carts(COUNT, LIMITS, fleets.LATE), fleets.abreast(COUNT)
MANOEUVRES = {
    "corner": EqualRadius(angle_deg=60.0, radius=3.0, speed=1.0),
    "passing": EqualRadius(angle_deg=-30.0, radius=4.0, speed=0.8, end_speed=0.4),
    "away": TurnAway(),
    "led": ToEnds(ends_deg=("cart_1 pose 6 4 20",), speed=1.0),
}
ODD = st.sampled_from([math.nan, math.inf, -math.inf, 1e300, -1e300, 0.0, 1e9])
NUMBER = st.one_of(st.floats(-30, 30), ODD)
NAMES = st.sampled_from([*FLEET.names, "stranger", ""])
TEXTS = st.sampled_from(["corner", "passing", "led", "waltz", ""])


@lru_cache
def made(name):
    """A reference from the starts; a stand-in for one that would take its time."""
    return fleets.solve(MANOEUVRES[name], FLEET, STARTS, SETTINGS)


def cut(old, start):
    """What is left of a reference from a moment on."""
    plan = old.plan
    later = plan.times > start + 1e-6
    states = np.concatenate([old.state(start)[:, None], plan.states[:, later]], axis=1)
    shorter = attrs.evolve(plan, times=np.concatenate([[start], plan.times[later]]), states=states)
    return attrs.evolve(old, plan=shorter)


class AnyPlan:
    """A solver that costs nothing: what the start says, or nonsense, as the example wants."""

    def __init__(self):
        self.mood = "guess"

    def __call__(self, problem, start, warm, budget):
        if self.mood == "fails":
            raise SolveError("no plan (of the fuzz)")
        named = ocp.variable_blocks(problem.shape).unpack(start.vector)
        if self.mood == "nan":
            named = {key: np.full_like(value, np.nan) for key, value in named.items()}
        elif self.mood == "wild":
            named = {key: value * 50.0 + 3.0 for key, value in named.items()}
        elif self.mood == "infinite":
            named["speed_command"] = np.full_like(named["speed_command"], np.inf)
        rows = np.zeros(ocp.row_blocks(problem.shape).size)
        return from_solution(
            problem, named, cost=1.0, solved=self.mood != "unfinished", solve_time=0.01, iterations=1,
            vector=start.vector, multipliers=(np.zeros_like(start.vector), rows))


POSES = st.dictionaries(NAMES, st.one_of(
    st.just("lost"), st.just("late"),
    st.tuples(st.just("off"), st.floats(-3, 3), st.floats(-3, 3), st.floats(-7, 7), st.floats(-1, 1)),
    st.tuples(st.just("odd"), NUMBER, NUMBER, NUMBER, NUMBER),
), max_size=3)
CHANGES = st.one_of(
    st.tuples(st.just("limit"), st.sampled_from(["max_speed", "max_curvature", "max_turn_rate", "max_braking",
                                                 "max_lateral_acceleration", "max_curvature_rate"]),
              st.floats(0.3, 3.0)),
    st.tuples(st.just("coupling"), st.just("strength"), st.floats(0.0, 50.0)),
    st.tuples(st.just("site_rules"), st.sampled_from(["min_clearance", "max_speed", "keep_out_clearance"]),
              st.floats(0.1, 3.0)),
    st.tuples(st.just("progress"), st.just("slowest"), st.floats(0.05, 1.0)),
    st.tuples(st.just("edges"), st.booleans(), st.booleans()), st.tuples(st.just("members"), st.integers(1, 2)),
)
EVENTS = st.one_of(
    *[st.tuples(st.just("run"), st.integers(1, 30), POSES)] * 4,
    st.tuples(st.just("clock"), st.one_of(st.floats(-5, 5), st.sampled_from([math.nan, math.inf, 1e9]))),
    st.tuples(st.just("mood"), st.sampled_from(["guess", "fails", "nan", "wild", "infinite", "unfinished"])),
    st.tuples(st.just("said"), st.frozensets(NAMES, max_size=2), st.frozensets(NAMES, max_size=2),
              st.sampled_from(["", "other"])),
    st.tuples(st.just("begin"), TEXTS, st.dictionaries(
        st.sampled_from(["speed", "radius", "angle_deg", "coupling", "waltz"]),
        st.one_of(NUMBER, st.booleans(), st.just("fast")), max_size=2)),
    st.tuples(st.sampled_from(["halt", "resume", "abandon", "work", "work", "hoard", "again"])),
    st.tuples(st.just("change"), CHANGES),
    st.tuples(st.just("hazard"), NUMBER, NUMBER), st.tuples(st.just("arm"), st.sampled_from(["away", "led", ""])),
)


class World:
    """Machines that do as they are told, a clock, and a coordinator between them that is fed anything."""

    def __init__(self, solve):
        self.solve, self.fleet = solve, FLEET
        self.coordinator = Coordinator(FLEET, graphs.path(FLEET.names), SETTINGS, MANOEUVRES, 60.0, solve)
        self.poses, self.now, self.clock = STARTS.copy(), 0.0, 0.0
        self.sent, self.sent_at, self.lowered = None, 0.0, False
        self.not_ready, self.silent, self.other, self.odd = frozenset(), frozenset(), "", {}
        self.settings, self.hoarded, self.delivered, self.answers, self.asked = SETTINGS, [], [], [], 0

    def snapshot(self):
        found = {}
        for name, (x, y, heading) in zip(FLEET.names, self.poses):
            found[name] = PoseSample(self.now, x, y, heading)
        for name, kind in self.odd.items():
            here = found.get(name, PoseSample(self.now, 0.0, 0.0, 0.0))
            if kind == "lost":
                found.pop(name, None)
            elif kind == "late":
                found[name] = attrs.evolve(here, stamp=self.now - 0.4)
            elif kind[0] == "off":
                stamp, heading = here.stamp + kind[4], here.heading + kind[3]
                found[name] = PoseSample(stamp, here.x + kind[1], here.y + kind[2], heading)
            else:
                found[name] = PoseSample(*kind[1:])
        return Snapshot(self.now + self.clock, {
            name: attrs.evolve(pose, stamp=pose.stamp + (self.clock if math.isfinite(self.clock) else 0.0))
            for name, pose in found.items()
        }, self.not_ready, self.silent, self.other)

    def run(self, beats):
        for beat in range(beats):
            if beat % 2 == 0:
                decision = self.coordinator.step(self.snapshot())
                assert decision.state is self.coordinator.state
                assert np.isfinite(decision.plan_times).all() and 0.0 <= decision.progress <= 1.0
                self.work()
            self.drive(self.coordinator.commands(self.now + self.clock))
            self.now += PERIOD

    def drive(self, commands):
        if commands is None:
            if not self.coordinator.state.holds_fleet:
                self.sent = None
            return
        values = np.array([[each.speed, each.curvature] for each in commands.values()])
        self.check(values)
        for name, (speed, curvature) in zip(commands, values):
            k = FLEET.index(name)
            x, y, heading = self.poses[k]
            self.poses[k] = (x + PERIOD * speed * math.cos(heading), y + PERIOD * speed * math.sin(heading),
                             heading + PERIOD * speed * curvature)
        self.sent = values

    def check(self, values):
        fleet = self.coordinator.fleet
        assert np.isfinite(values).all()
        before = np.zeros_like(values) if self.sent is None or len(self.sent) != len(values) else self.sent
        limit, speed, bend = fleet.limit, np.abs(values[:, 0]), np.abs(values[:, 1])
        longest, tiny = 2 * PERIOD, 1e-9
        slowed = np.maximum(np.abs(before[:, 0]) - PERIOD * limit("max_braking"), 0.0)
        if not math.isfinite(self.clock) or self.clock < 0.0 or self.lowered:
            slowed = np.maximum(slowed, np.abs(before[:, 0]))  # no time has passed as the planner sees it
        top = np.minimum(limit("max_speed"), self.settings.site_rules.max_speed)
        assert (speed <= np.maximum(top, slowed) + tiny).all()
        assert (bend <= np.maximum(limit("max_curvature"), np.abs(before[:, 1])) + tiny).all()
        changed = values - before
        assert (changed[:, 0] <= longest * limit("max_acceleration") + tiny).all()
        assert (changed[:, 0] >= -longest * limit("max_braking") - tiny).all()
        assert (np.abs(changed[:, 1]) <= longest * limit("max_curvature_rate") + tiny).all()
        if not self.lowered:
            lateral = np.minimum(limit("max_lateral_acceleration"), self.settings.site_rules.max_lateral_acceleration)
            assert (speed * bend <= limit("max_turn_rate") + 1e-6).all()
            assert (speed**2 * bend <= lateral + 1e-6).all()

    def work(self):
        for job in self.coordinator.jobs():
            self.delivered.append(job())
            self.coordinator.deliver(self.delivered[-1], self.now + self.clock)

    def change(self, what):
        change = {}
        if what[0] == "limit":
            self.lowered = True
            robots = tuple(attrs.evolve(robot, limits=attrs.evolve(robot.limits, **{what[1]: what[2]}))
                           for robot in self.coordinator.fleet.robots)
            change["fleet"] = attrs.evolve(self.coordinator.fleet, robots=robots)
        elif what[0] == "edges":
            edges = (("cart_1", "cart_2", 1.0),) if what[1] and len(self.coordinator.fleet) == 2 else ()
            change["graph"] = NeighbourGraph(self.coordinator.fleet.names, edges)
        elif what[0] == "members":
            change["fleet"] = attrs.evolve(FLEET, robots=FLEET.robots[: what[1]])
            change["graph"] = graphs.path(FLEET.names[: what[1]])
            self.lowered = True
        else:
            self.lowered = self.lowered or what[0] == "site_rules"
            group = attrs.evolve(getattr(self.settings, what[0]), **{what[1]: what[2]})
            self.settings = change["settings"] = attrs.evolve(self.settings, **{what[0]: group})
        with contextlib.suppress(RefusedError):
            self.coordinator.change(self.now + self.clock, **change)

    def happen(self, event):
        kind, now = event[0], self.now + self.clock
        if kind == "run":
            self.odd = event[2]
            self.run(event[1])
        elif kind == "clock":
            self.clock = event[1]
        elif kind == "mood" and isinstance(self.solve, AnyPlan):
            self.solve.mood = event[1]
        elif kind == "said":
            self.not_ready, self.silent, self.other = event[1:]
        elif kind == "begin":
            self.asked += 1
            self.coordinator.begin(event[1], self.snapshot(), overrides=event[2], answered=self.answers.append)
        elif kind == "halt":
            assert self.coordinator.halt(now, "halted by the fuzz").text
        elif kind == "resume":
            self.asked += 1
            self.coordinator.resume(self.snapshot(), self.answers.append)
        elif kind == "abandon":
            self.coordinator.abandon(now)
        elif kind == "hazard":
            self.coordinator.hazard(event[1], event[2], now)
        elif kind == "arm":
            self.coordinator.arm(event[1], now)
        elif kind == "work":
            self.work()
        elif kind == "hoard":
            self.hoarded += self.coordinator.jobs()
        elif kind == "again":
            for outcome in [*self.delivered[-2:], *(job() for job in self.hoarded)]:
                self.coordinator.deliver(outcome, now)
            self.hoarded = []
        elif kind == "change":
            self.change(event[1])


def live(solve, events):
    """Begin, and then let everything happen; whatever it was, a person can halt the fleet and it stands."""
    world = World(solve)
    world.happen(("begin", "corner", {}))
    world.work()
    world.run(6)
    for event in events:
        world.happen(event)
    world.hoarded += world.coordinator.jobs()
    assert len(world.answers) <= world.asked  # nobody is answered twice
    world.clock, world.odd = 0.0, {}
    world.coordinator.halt(world.now, "enough")
    for _ in range(20):
        world.run(10)
        if world.coordinator.state in (State.IDLE, State.HELD):
            break
    assert world.coordinator.state in (State.IDLE, State.HELD, State.ENDED)
    assert world.sent is None or np.abs(world.sent[:, 0]).max() < 1e-6


@pytest.fixture
def cheap(monkeypatch):
    """References that are at hand instead of solved for."""
    at_hand = {name: made("led" if name == "away" else name) for name in MANOEUVRES}

    def make(task, fleet, graph, chosen, initial, *_args, **_more):
        if len(fleet) != COUNT or task.name not in at_hand:
            raise RefusedError("nothing at hand", "ask for something else")
        found = at_hand[task.name]
        task = attrs.evolve(found.task, name=task.name)
        return attrs.evolve(found, task=task, graph=graph, plan=attrs.evolve(found.plan, fleet=fleet))

    def rest(task, fleet, graph, chosen, old, start):
        return attrs.evolve(cut(old, start), graph=graph, task=task)

    monkeypatch.setattr(reference, "make", make)
    monkeypatch.setattr(reference, "make_again", make)
    monkeypatch.setattr(reference, "make_rest", rest)
    return reference


PHASES = (Phase.explicit, Phase.reuse, Phase.generate) if os.environ.get("FUZZ_QUICK") else tuple(Phase)
SLOW = {"phases": PHASES, "report_multiple_bugs": False, "deadline": None, "suppress_health_check": list(HealthCheck)}


@settings(max_examples=EXAMPLES, **SLOW)
@given(events=st.lists(EVENTS, max_size=14))
def test_whatever_arrives(cheap, events):
    live(AnyPlan(), events)


@settings(max_examples=max(2, EXAMPLES // 200), **SLOW)
@given(events=st.lists(EVENTS, max_size=6))
def test_whatever_arrives_with_the_real_solvers(events):
    from coord_planner.core.fast.ticks import TickSolve

    live(TickSolve(lambda: 0.0), events)


def test_the_cheap_solver_drives_a_turn_to_its_end(cheap):
    """Else the fuzz would only look at fleets that stand."""
    world = World(AnyPlan())
    world.happen(("begin", "corner", {}))
    world.work()
    world.run(260)
    assert world.answers[0].ok and world.coordinator.decision.completed
    assert world.poses[:, 2] == pytest.approx(math.radians(60.0), abs=0.05)
