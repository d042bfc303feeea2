# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One problem, many first guesses, the best plan, or what stands in the way of any."""

from __future__ import annotations

from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from ...errors import SolveError
from .. import multistart, se2
from . import impossible
from .guesses import guesses
from .impossible import Obstacle
from .judged import Judgement, disagreement, judge, with_neighbours
from .problem import DirectProblem, Units
from .program import variable_blocks
from .solution import Guess, Solved, solve

SOLVED, INFEASIBLE, FAILED = "solved", "infeasible", "failed"
_COARSE = 40  # intervals on which guesses are compared where limits count
_DENSE = 1600  # robots times intervals
_HOPELESS = 5  # guesses after which nothing more is tried, when all of them have to miss something
_FINER = 2  # of the best there that are solved on all intervals
_SAME = 1e-5  # relative difference of cost below which two plans count as one
_ESCAPES = 3  # from saddle points
_STEP = 1e-2  # of such an escape

Progress = Callable[[float], None]


@attrs.frozen(eq=False)
class DirectPlan:
    """What came of a problem.

    Attributes:
        status: SOLVED, INFEASIBLE or FAILED. reason: in words, when not solved. obstacles: what stands in the way.
        solved: the solution in the problem's own units; None where there is none. judgement: of it.
        tried, converged: first guesses, and those that led to a plan. reached: distinct costs of these plans in the
            problem's units (metres and seconds), ascending; of all groups together the cheapest and the dearest,
            where the fleet falls apart into several.
    """

    problem: DirectProblem
    status: str
    reason: str = ""
    obstacles: tuple[Obstacle, ...] = ()
    solved: Optional[Solved] = None
    judgement: Optional[Judgement] = None
    tried: int = 0
    converged: int = 0
    reached: tuple[float, ...] = ()

    @property
    def units(self) -> Units:
        """Units of ``solved`` and ``judgement``."""
        return Units.of(self.problem)

    @property
    def times(self) -> np.ndarray:
        """Nodes, shape (M + 1,), seconds: equally spaced, or so between changes of gear."""
        if not self._solution.shape.phases:
            return self.problem.times
        return np.concatenate([[0.0], np.cumsum(self._solution.intervals)]) * self.problem.duration

    @property
    def curvature(self) -> np.ndarray:
        """In each interval, shape (N, M), 1/m."""
        return self._solution.curvature / self.units.metre

    @property
    def speed(self) -> np.ndarray:
        """In each interval, shape (N, M), m/s."""
        return self._solution.speed * self.units.metre / self.units.second

    @property
    def poses(self) -> np.ndarray:
        """At the nodes, driven with these controls, shape (N, M + 1, 3), m, m, rad."""
        poses = self._solution.poses
        metres = poses[..., :2] * self.units.metre + np.array(self.units.middle)
        return np.concatenate([metres, poses[..., 2:]], axis=-1)

    def between(self, count: int) -> np.ndarray:
        """Poses at the nodes and at ``count`` - 1 moments within each interval, shape (N, K, 3)."""
        speed, curvature = np.repeat(self.speed, count, axis=1), np.repeat(self.curvature, count, axis=1)
        distance = speed * np.repeat(np.diff(self.times), count) / count
        return se2.rollout(self.problem.starts, distance, distance * curvature)

    @property
    def turning(self) -> np.ndarray:
        """What is priced, omega over the asked speed, shape (N, M), 1/m."""
        return self.curvature * self.speed / self.problem.speeds.asked

    @property
    def cost(self) -> float:
        """What was minimised."""
        return self._solution.cost * self.units.cost

    @property
    def effort(self) -> float:
        """1/2 integral u'u."""
        return float(np.sum(self.turning**2 * np.diff(self.times))) / 2

    @property
    def disagreement(self) -> float:
        """1/2 integral u'Lu, without chi."""
        return disagreement(self.problem, self.turning, np.diff(self.times))

    @property
    def _solution(self) -> Solved:
        if self.solved is None:
            raise SolveError(f"there is no plan: {self.reason}")
        return self.solved


@attrs.frozen(eq=False)
class _Best:
    """The best of a group of robots: a guess on all intervals, or the obstacles."""

    guess: Optional[Guess]
    tried: int
    converged: int
    reached: tuple[float, ...]
    obstacles: tuple[Obstacle, ...] = ()
    said: str = ""


def plan(
    problem: DirectProblem, *, seed: int = 0, neighbours: bool = True, progress: Progress = lambda _part: None,
) -> DirectPlan:
    """The best plan that the first guesses lead to, judged.

    Args:
        seed: of the random first guesses. neighbours: check derivatives of the cost against problems next to it.
        progress: told which part of the work is done, 0 to 1.
    """
    found = impossible.obstacles(problem)
    if found:
        return DirectPlan(problem, INFEASIBLE, impossible.sentence(found), found)
    units = Units.of(problem)
    own = units.problem(problem)
    # Changes of gear divide the time for all robots alike, so that they are planned together.
    groups = [list(range(len(problem)))] if problem.speeds.reversing else problem.groups()
    best: list[_Best] = []
    for i, group in enumerate(groups):
        part = _best(own.part(group), problem.part(group), seed,
                     lambda done, i=i: progress(0.9 * (i + done) / len(groups)))  # type: ignore[misc]
        best.append(part)
        if part.guess is None:
            status = INFEASIBLE if part.obstacles else FAILED
            return DirectPlan(problem, status, impossible.sentence(part.obstacles, part.said), part.obstacles,
                              tried=part.tried, converged=part.converged)
    solved, judgement = _finished(own, _joined(groups, best), neighbours)
    progress(1.0)
    reached = best[0].reached if len(best) == 1 else (
        sum(part.reached[0] for part in best), sum(part.reached[-1] for part in best))
    status, reason = SOLVED, ""
    if not judgement.check.clean:
        status, reason = FAILED, f"the solver said {solved.said!r}; {judgement.check.words}"
    return DirectPlan(problem, status, reason, (), solved, judgement, sum(part.tried for part in best),
                      sum(part.converged for part in best), tuple(cost * units.cost for cost in dict.fromkeys(reached)))


def _joined(groups: list[list[int]], best: list[_Best]) -> Guess:
    """One guess for the whole fleet."""
    if len(best) == 1 and best[0].guess is not None:
        return best[0].guess
    order = np.argsort(np.concatenate(groups))
    chosen = [part.guess for part in best if part.guess is not None]
    return Guess(np.concatenate([guess.curvature for guess in chosen])[order],
                 np.concatenate([guess.speed for guess in chosen])[order])


def _finished(problem: DirectProblem, guess: Guess, neighbours: bool) -> tuple[Solved, Judgement]:
    """The solution that a guess leads to, away from saddle points."""
    solved = solve(problem, guess)
    judgement = judge(solved)
    for _ in range(_ESCAPES):
        if judgement.check.steepest is None or not solved.success:
            break
        solved = min((_escaped(solved, judgement.check.steepest * sign) for sign in (1.0, -1.0)),
                     key=lambda other: other.cost if other.success else np.inf)
        judgement = judge(solved)
    return solved, with_neighbours(judgement, solved) if neighbours and judgement.check.clean else judgement


def _escaped(solved: Solved, direction: np.ndarray) -> Solved:
    """The solution reached from a little way along a direction in which the cost falls."""
    away = variable_blocks(solved.shape).unpack(direction)
    size = float(np.abs(away["curvature"]).max())
    part = _STEP * max(1.0, float(np.abs(solved.curvature).max())) / max(size, 1e-12)
    guess = attrs.evolve(solved.guess, curvature=solved.curvature + part * away["curvature"])
    return solve(solved.problem, guess)


def _best(own: DirectProblem, part: DirectProblem, seed: int, progress: Progress) -> _Best:
    """The best guess for one group: ``own`` in the units of the whole, ``part`` in metres and seconds."""
    if own.classical:
        return _best_classical(own, part, seed, progress)
    return _best_limited(own, part, seed, progress)


def _best_classical(own: DirectProblem, part: DirectProblem, seed: int, progress: Progress) -> _Best:
    relaxed = own.relaxed()
    try:
        rough = multistart.minima(relaxed, seed=seed, progress=progress)
        # On many intervals the sparse solver that comes next is quicker than the dense one here.
        fine = multistart.refined(relaxed, rough, min(own.intervals, max(_DENSE // len(own), _COARSE)), seed)
    except SolveError:  # as near to impossible as these ends are, a solver that may miss them at first gets further
        return _best_limited(own, part, seed, progress)
    reached = tuple(minimum.cost for minimum in rough.found)
    guess = Guess(fine.curvature, np.ones_like(fine.curvature)).on(own.intervals)
    return _Best(guess, rough.tried, rough.converged, reached)


def _best_limited(own: DirectProblem, part: DirectProblem, seed: int, progress: Progress) -> _Best:
    """Guesses solved on few intervals, the best of them on all."""
    coarse = attrs.evolve(own, intervals=min(own.intervals, _COARSE))
    starts, tried, converged = guesses(coarse, coarse.intervals, seed)
    progress(0.3)
    solutions, soft = [], []
    for i, guess in enumerate(starts):
        solution = solve(coarse, guess)
        if not solution.success:  # first what is missed, then the cost
            soft.append(solve(coarse, guess, soft=True))
            if _missed(soft[-1]) <= impossible.MISSED:
                solution = solve(coarse, soft[-1].guess)
        solutions.append(solution)
        progress(0.3 + 0.5 * (i + 1) / len(starts))
        if i + 1 >= _HOPELESS and all(_missed(each) > impossible.MISSED for each in soft) and len(soft) > i:
            break
    kept = _distinct(solutions)
    tried, converged = tried + len(solutions), converged + sum(solution.success for solution in solutions)
    reached = tuple(solution.cost for solution in kept)
    finer = _distinct([solve(own, solution.guess.on(own.intervals)) for solution in kept[:_FINER]])
    progress(1.0)
    if finer:
        return _Best(finer[0].guess, tried, converged, reached)
    return _unmet(part, soft, tried, converged, "none of the first guesses led to a plan that meets the ends")


def _unmet(part: DirectProblem, soft: list[Solved], tried: int, converged: int, said: str) -> _Best:
    """Why there is no plan: what must be missed at least."""
    nearest = min(soft, key=_missed, default=None)
    if nearest is not None and _missed(nearest) > impossible.MISSED:
        return _Best(None, tried, converged, (), impossible.in_the_way(part, nearest), said)
    return _Best(None, tried, converged, (), (), f"{said}; give more time, more intervals, or ends that are easier "
                                                 "to reach")


def _missed(soft: Solved) -> float:
    named = soft.named
    return float(max(named[name].max(initial=0.0) for name in ("over", "under", "short")))


def _distinct(solutions: list[Solved]) -> list[Solved]:
    kept: list[Solved] = []
    for solution in sorted((each for each in solutions if each.success), key=lambda each: each.cost):
        if not kept or solution.cost > kept[-1].cost + _SAME * (1e-6 + abs(kept[-1].cost)):
            kept.append(solution)
    return kept
