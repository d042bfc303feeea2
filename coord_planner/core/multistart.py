# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The global minimum of the classical form, at the windings that the headings state: many first guesses, carried along.

The problem has many local minima (loops, S-shapes, who turns with whom). First guesses are combinations of the
robots' own minima, chosen by what they cost together, and of minima of one curvature for all. A small population of
them is carried up in the coupling from none, another down from strong; on the way the best are disturbed.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterable
from typing import Optional

import attrs
import numpy as np

from ..errors import SolveError
from .theory.classical import ClassicalProblem
from .theory.coarse import Coarse, minimise
from .theory.search import alone, in_common, resampled, shapes

INTERVALS = 32  # on which minima are looked for; more are taken only for the best few
_KEPT = 8  # of a population
_OWN = 7  # minima of each robot that are combined
_COMBINED = 20000  # combinations that are looked at
_STEP = 4.0  # factor from one coupling to the next on the way
_HOPS = (24, 12)  # disturbances of the best at the end, and for each robot more
_REFINED = 5  # minima that are looked at on more intervals
_BETWEEN = 80  # intervals on which most of them drop out
_HOPS_CLOSER = 20  # on twice as many intervals
_HOPS_BETWEEN = 16  # disturbances there, where curls turn by more than _TIGHT radians in an interval
_TIGHT = 1.5
_LONG = 150  # iterations for plans on more intervals
_NEARLY = (0.3, 0.02)  # relative difference of cost within which a minimum may still turn out the cheapest
_SAME = 1e-6  # relative difference of cost below which two minima count as one

Progress = Callable[[float], None]


@attrs.frozen(eq=False)
class Minima:
    """Distinct minima, cheapest first; how many first guesses were tried, and how many led to one."""

    found: tuple[Coarse, ...]
    tried: int
    converged: int

    @property
    def best(self) -> Coarse:
        """The cheapest."""
        return self.found[0]


class _Tally:
    """Counts what is tried, and tells how far the search is."""

    def __init__(self, progress: Progress, expected: int) -> None:
        self.tried = self.converged = 0
        self._progress, self._expected = progress, max(expected, 1)

    def minimise(self, problem: ClassicalProblem, guess: np.ndarray, iterations: int = 60) -> Coarse:
        plan = minimise(problem, guess, iterations)
        self.tried += 1
        self.converged += plan.converged
        self._progress(min(self.tried / self._expected, 1.0))
        return plan


def minima(
    problem: ClassicalProblem, *, seed: int = 0, hops: Optional[int] = None,
    progress: Progress = lambda _part: None,
) -> Minima:
    """Minima of the coupled problem on few intervals; on twice as many where curls are too tight for these.

    Args:
        seed: of the disturbances. hops: disturbances of the best at the end; more for more robots when left out.
        progress: told which part of the work is done, 0 to 1.

    Raises:
        SolveError: no first guess led to a plan that meets the ends.
    """
    rough = _minima(problem, seed, INTERVALS, hops, progress)
    if len(problem) == 1 or not _tight(rough.best):
        return rough
    closer = _minima(problem, seed, 2 * INTERVALS, _HOPS_CLOSER if hops is None else hops, progress)
    same = [minimise(problem, resampled(plan.curvature, 2 * INTERVALS), _LONG) for plan in rough.found[:_REFINED]]
    tried, converged = rough.tried + closer.tried, rough.converged + closer.converged
    return Minima(tuple(distinct([*closer.found, *same])), tried, converged)


def _minima(
    problem: ClassicalProblem, seed: int, intervals: int, hops: Optional[int], progress: Progress
) -> Minima:
    own = [shapes(alone(problem, robot), intervals) for robot in range(len(problem))]
    if len(problem) == 1:
        return Minima(own[0].minima, own[0].tried, own[0].converged)
    curvatures = [[plan.curvature[0] for plan in search.minima[:_OWN]] for search in own]
    ladder = _ladder(problem)
    hops = _HOPS[0] + _HOPS[1] * len(problem) if hops is None else hops
    tally = _Tally(progress, _KEPT * (len(ladder) + 2) + hops)
    random = np.random.default_rng(seed)
    population = _carried(problem, _combinations(problem, curvatures), ladder, tally, random)
    population += _carried(problem, _in_common(problem, intervals), _from_strong(problem), tally, random)
    best = distinct(population)
    for hop in range(hops if best else 0):
        guess = best[min(int(random.integers(4)), len(best) - 1)].curvature.copy()
        if hop % 3:
            guess += disturbance(guess.shape, random)
        else:  # one robot takes another of its own shapes
            robot = int(random.integers(len(problem)))
            guess[robot] = curvatures[robot][int(random.integers(len(curvatures[robot])))]
        best = distinct([*best, tally.minimise(problem, guess)])
    if not best:
        raise SolveError(f"none of {tally.tried} first guesses led to a plan that meets the ends; "
                         "give more time, or ends that are easier to reach")
    return Minima(tuple(best), tally.tried, tally.converged)


def refined(problem: ClassicalProblem, rough: Minima, intervals: int, seed: int = 0) -> Coarse:
    """The cheapest of the best few minima on more intervals: few intervals can exchange minima that cost nearly the
    same. Where curls are so tight that few intervals hardly see them, there are disturbances on more intervals too.

    Raises:
        SolveError: none of them is one on more intervals.
    """
    plans = [plan for plan in rough.found[:_REFINED] if plan.cost <= rough.best.cost * (1 + _NEARLY[0])]
    if intervals >= _BETWEEN:
        plans = distinct(minimise(problem, resampled(plan.curvature, _BETWEEN), _LONG) for plan in plans)
        if plans and _tight(rough.best):
            plans = _disturbed(problem, plans, np.random.default_rng(seed))
        plans = [plan for plan in plans if plan.cost <= plans[0].cost * (1 + _NEARLY[1])]
    plans = distinct(minimise(problem, resampled(plan.curvature, intervals), _LONG) for plan in plans)
    if not plans:
        raise SolveError(f"the minima on {rough.best.curvature.shape[1]} intervals are none on {intervals}; "
                         "give more intervals, or ends that are easier to reach")
    return plans[0]


def _disturbed(problem: ClassicalProblem, plans: list[Coarse], random: np.random.Generator) -> list[Coarse]:
    for _ in range(_HOPS_BETWEEN):
        guess = plans[min(int(random.integers(3)), len(plans) - 1)].curvature
        plans = distinct([*plans, minimise(problem, guess + disturbance(guess.shape, random), _LONG)])
    return plans


def _tight(plan: Coarse) -> bool:
    """Whether a robot turns so far in an interval that other minima may look alike."""
    return bool(np.abs(plan.curvature).max() > _TIGHT * plan.curvature.shape[1])


def distinct(plans: Iterable[Coarse], most: Optional[int] = None) -> list[Coarse]:
    """Converged plans of different cost, cheapest first."""
    kept: list[Coarse] = []
    for plan in sorted((plan for plan in plans if plan.converged), key=lambda plan: plan.cost):
        if not kept or plan.cost > kept[-1].cost * (1 + _SAME) + 1e-15:
            kept.append(plan)
    return kept[:most]


def disturbance(shape: tuple[int, int], random: np.random.Generator) -> np.ndarray:
    """Smooth waves, half of them common to all robots, as large as a C or an S."""
    time = (np.arange(shape[1]) + 0.5) / shape[1]
    waves = np.array([np.cos(2 * np.pi * time), np.sin(2 * np.pi * time), np.cos(np.pi * time)])
    common = np.repeat(random.normal(size=(1, 3)), shape[0], axis=0)
    own = random.normal(size=(shape[0], 3)) * (random.random((shape[0], 1)) < 0.5)
    return 6.0 * (common * (random.random() < 0.5) + own) @ waves


def _ladder(problem: ClassicalProblem) -> list[float]:
    """Couplings from nearly none to the asked one."""
    strength = problem.coupling * max(float(np.linalg.eigvalsh(problem.laplacian)[-1]), 1e-12)
    steps = max(int(np.ceil(np.log(max(strength, 1e-12) / 0.3) / np.log(_STEP))), 0)
    return [problem.coupling / _STEP**step for step in range(steps, -1, -1)]


def _from_strong(problem: ClassicalProblem) -> list[float]:
    """Couplings from a hundred times the asked one, or from where it is strong, to the asked one."""
    scale = max(float(np.linalg.eigvalsh(problem.laplacian)[-1]), 1e-12)
    least = max(problem.coupling, 0.01 / scale)
    return [*(least * factor for factor in (100.0, 25.0, 5.0)), problem.coupling]


def _combinations(problem: ClassicalProblem, own: list[list[np.ndarray]]) -> list[np.ndarray]:
    """Own minima of all robots together: the cheapest by themselves, at the asked coupling and on the way to it.

    Where there are too many combinations, each robot's less likely minima are left out.
    """
    own = list(own)
    while np.prod([len(each) for each in own]) > _COMBINED:
        longest = max(range(len(own)), key=lambda robot: len(own[robot]))
        own[longest] = own[longest][:-1]
    choices = np.array(list(itertools.product(*(range(len(each)) for each in own))))
    efforts, apart = np.zeros(len(choices)), np.zeros(len(choices))
    for robot, each in enumerate(own):
        efforts += np.array([shape @ shape for shape in each])[choices[:, robot]]
    for k, j in itertools.combinations(range(len(own)), 2):
        if problem.laplacian[k, j] != 0:
            between = np.array([[np.sum((a - b) ** 2) for b in own[j]] for a in own[k]])
            apart -= problem.laplacian[k, j] * between[choices[:, k], choices[:, j]]
    chosen: dict[tuple[int, ...], None] = {}
    for coupling, count in ((0.0, 2), (0.03 * problem.coupling, 2), (0.3 * problem.coupling, 2), (problem.coupling, 3)):
        for which in np.argsort(efforts + coupling * apart, kind="stable")[:count]:
            chosen[tuple(choices[which])] = None
    return [np.array([each[which] for each, which in zip(own, choice)]) for choice in chosen]


def _in_common(problem: ClassicalProblem, intervals: int) -> list[np.ndarray]:
    try:
        common = shapes(in_common(problem), intervals)
    except SolveError:  # the mean of the ends may be out of reach although each of them is within it
        return []
    return [np.repeat(found.curvature, len(problem), axis=0) for found in common.minima[:4]]


def _carried(
    problem: ClassicalProblem, guesses: list[np.ndarray], couplings: list[float], tally: _Tally,
    random: np.random.Generator,
) -> list[Coarse]:
    """A population carried from coupling to coupling; on each step one that was disturbed joins it."""
    plans: list[Coarse] = []
    for coupling in couplings:
        there = problem.with_coupling(coupling)
        plans = distinct([tally.minimise(there, guess) for guess in guesses], _KEPT)
        if plans and coupling != couplings[-1]:
            guess = plans[0].curvature + disturbance(plans[0].curvature.shape, random)
            plans = distinct([*plans, tally.minimise(there, guess)], _KEPT)
        guesses = [plan.curvature for plan in plans] or guesses
    return plans
