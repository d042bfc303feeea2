# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The fixed problem set of the benchmark: a corner driven in closed loop, with fresh pose noise on every tick.

Everything in it is invented. One robot's corner is planned once; a fleet drives it side by side, every robot from its
own place: displacements are equal, so that the common reference is the best one for every graph and coupling.
"""

from __future__ import annotations

import functools
from typing import Optional

import attrs
import numpy as np

from ..core import grid, reference, se2, solver
from ..core.fleet import Fleet, Footprint, Limits, Response, Robot
from ..core.graph import NeighbourGraph
from ..core.manoeuvre import EqualRadius, work_out
from ..core.plan import Plan
from ..core.problem import CURVATURE, POSE, SPEED, STATES, Problem, bounds_in_force
from ..core.reference import Reference
from ..core.settings import Clearance, Settings, SiteRules
from ..core.watch import watch

SPACINGS = {"quiet": 4.0, "contacts": 1.95}  # metres between neighbours; 1.8 keep the clearance end to end
FORMATIONS = ("abreast", "file")
GRAPHS = ("path", "nearest")
INTERVALS, INTERVAL = 24, 0.25
EVERY = 0.1  # seconds from tick to tick
NOISE = np.array([0.03, 0.03, 0.03])  # standard deviations: m, m, rad
REACH = 2.5  # pairs nearer than this many spacings are watched

_LIMITS = Limits(max_curvature=0.8, max_curvature_rate=0.6, max_speed=1.4, max_acceleration=0.6)
_RESPONSE = Response(speed_lag=0.25, curvature_lag=0.2)
_SETTINGS = Settings(site_rules=SiteRules(min_clearance=0.5), clearance=Clearance(pose_uncertainty=0.03))
_CORNER = EqualRadius(angle_deg=90.0, radius=4.0, speed=1.0, end_speed=1.0)


@attrs.frozen(eq=False)
class Posed:
    """One tick: its problem at the measured and at the predicted state, its nodes in seconds, where to start."""

    problem: Problem
    predicted: Problem
    s: np.ndarray
    start: solver.Start


class Course:
    """A fleet on its way round the corner. Not thread-safe.

    Args:
        case: of SPACINGS. formation: of FORMATIONS. graph: of GRAPHS, "nearest": also the next but one.
    """

    def __init__(self, case: str, robots: int, formation: str, graph: str, seed: int) -> None:
        self._reference = _corner()
        self._fleet = _fleet(robots)
        spacing = SPACINGS[case]
        along = spacing * np.arange(robots)
        still = np.zeros(robots)
        self._places = np.stack([still, -along] if formation == "abreast" else [-along, still], axis=1)
        hops = [1] if graph == "path" else [1, 2]
        edges = [(k, k + hop) for hop in hops for k in range(robots - hop)]
        self._edges = np.array(edges, dtype=int).reshape(-1, 2)
        near = int(np.ceil(REACH)) - 1
        pairs = [(k, j) for k in range(robots) for j in range(k + 1, min(k + near, robots - 1) + 1)]
        self._pairs = np.array(pairs, dtype=int).reshape(-1, 2)
        self._rng = np.random.default_rng(seed)
        self._s, self._states = 0.0, self._asked(0.0)
        self._last: Optional[tuple[np.ndarray, Plan]] = None

    @property
    def ticks(self) -> int:
        """How many there are from standing still until the corner is behind the fleet."""
        return int(self._reference.end / EVERY)

    @property
    def states(self) -> np.ndarray:
        """Where the robots really are, shape (N, 7)."""
        return self._states

    def pose(self) -> Posed:
        """The next tick."""
        s = grid.nodes(self._s, INTERVAL, INTERVALS)
        measured = self._states.copy()
        measured[:, POSE] += self._rng.normal(size=(len(measured), 3)) * NOISE
        guess, steps = self._guess(s, measured)
        problem = self._problem(s, measured, guess)
        start = solver.start_from_states(problem, guess)
        if self._last is not None and steps is not None:
            start = solver.Start(start.vector, solver.start_from_plan(self._last[1], problem.shape, steps).multipliers)
        return Posed(problem, attrs.evolve(problem, initial=self._states), s, start)

    def drive(self, posed: Posed, plan: Plan) -> None:
        """Drive with the plan's commands until the next tick, from where the robots really are."""
        self._last = posed.s, plan
        lasting = np.diff(np.minimum(plan.times - plan.times[0], EVERY))
        for i in np.flatnonzero(lasting > 1e-9):
            self._states = driven(self._fleet, self._states, plan.rates[:, i], float(lasting[i]))
        self._s = round(self._s + EVERY, 9)

    def _asked(self, s: float) -> np.ndarray:
        states = np.repeat(self._reference.state(s), len(self._fleet), axis=0)
        states[:, :2] += self._places
        return states

    def _guess(self, s: np.ndarray, measured: np.ndarray) -> tuple[np.ndarray, Optional[int]]:
        """States at the nodes, (N, M + 1, 7), the last plan's where it has them, and by how much that is shifted."""
        guess = np.stack([self._asked(float(moment)) for moment in s], axis=1)
        steps = None
        if self._last is not None:
            nodes, plan = self._last
            steps = int(np.flatnonzero(np.abs(nodes[1:] - s[1]) < 1e-6)[0])
            kept = plan.states[:, 1 + steps :]
            guess[:, 1 : 1 + kept.shape[1]] = kept
        guess[:, 0] = measured
        return guess, steps

    def _problem(self, s: np.ndarray, measured: np.ndarray, guess: np.ndarray) -> Problem:
        task, rules, count = self._reference.task, _SETTINGS.site_rules, len(self._fleet)
        asked = reference.asked_speeds(task, s)
        return Problem(
            fleet=self._fleet, edges=self._edges, weights=np.ones(len(self._edges)), coupling=1.0, alignment=0.0,
            prices=_SETTINGS.prices, times=s, pace=1.0, initial=measured,
            asked_speed=np.repeat(asked, count, axis=0),
            turn_speed=np.repeat(reference.turn_speeds(task, asked), count, axis=0),
            full_speed=np.repeat(task.asked, count), target=self._asked(float(s[-1])),
            bounds=bounds_in_force(
                self._fleet, measured, s, task.arrival, task.end_speed, rules.max_speed, rules.max_lateral_acceleration
            ),
            watch=watch(self._fleet, _SETTINGS, self._pairs, guess[:, :, POSE], task.speed),
        )


def driven(fleet: Fleet, states: np.ndarray, rates: np.ndarray, h: float) -> np.ndarray:
    """States, shape (N, 7), after ``h`` seconds with constant rates of the commands, shape (N, 2): lags and an arc."""
    after, means = states.copy(), []
    for reached, name, rate in zip((CURVATURE, SPEED), ("curvature_lag", "speed_lag"), rates.T):
        command, lag = reached + 2, np.maximum(fleet.response(name), 1e-9)
        after[:, command] += h * rate
        settled = after[:, command] - rate * lag
        after[:, reached] = settled + (states[:, reached] - states[:, command] + rate * lag) * np.exp(-h / lag)
        means.append((states[:, command] + after[:, command]) / 2 - lag * (after[:, reached] - states[:, reached]) / h)
    distance = h * means[1]
    x, y, theta = states[:, POSE].T
    after[:, POSE] = np.stack(se2.arc(x, y, theta, distance, distance * means[0]), axis=1)
    return after


def _fleet(robots: int) -> Fleet:
    return Fleet(tuple(Robot(f"robot_{k + 1}", _LIMITS, Footprint(), _RESPONSE) for k in range(robots)))


@functools.lru_cache(maxsize=1)
def _corner() -> Reference:
    """One robot's corner, from standing still."""
    fleet, alone = _fleet(1), np.zeros((1, len(STATES)))
    task = work_out("corner", _CORNER, fleet, _SETTINGS, alone[:, POSE], 0.0, np.zeros((1, 1)))
    return reference.make(task, fleet, NeighbourGraph(fleet.names), _SETTINGS, alone)
