# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""First guesses, and the minima they lead to: the classical problem has many, and the lowest is wanted.

Everything in units of the way's length (duration 1), at the windings that the headings state.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import attrs
import numpy as np

from ...errors import SolveError
from .classical import ClassicalProblem
from .coarse import Coarse, minimise

_SWINGS = (3.0, 9.0, 16.0)  # amplitudes of the first guesses' waves; a heading swings by amplitude / 2 pi
_SAME = 1e-6  # relative difference of cost below which two minima count as one


@attrs.frozen(eq=False)
class Search:
    """Distinct minima, cheapest first, and how many first guesses were tried and led to one."""

    minima: tuple[Coarse, ...]
    tried: int
    converged: int

    @property
    def best(self) -> Coarse:
        """The cheapest minimum."""
        return self.minima[0]


def shapes(problem: ClassicalProblem, intervals: int = 32) -> Search:
    """Minima of a problem of one robot: an arc, C, S and loops as first guesses; an arc alone where it arrives.

    Raises:
        SolveError: no first guess led to a plan that meets the end.
    """
    arc, *waves = _waves(problem, intervals)
    found = minimise(problem, arc)
    if found.converged and np.ptp(found.curvature) < 1e-9:  # nothing that turns as far costs less than an arc
        return _collect([found])
    return _collect([found, *(minimise(problem, guess, iterations=40) for guess in waves)])


def minima(problem: ClassicalProblem, *, intervals: int = 32, seed: int = 0, hops: int = 12) -> Search:
    """Minima of the coupled problem.

    First guesses: every robot's own shapes, carried up in coupling; one curvature for all, carried down from strong
    coupling; seeded combinations of shapes; then ``hops`` seeded steps away from the best so far.

    Raises:
        SolveError: no first guess led to a plan that meets the ends.
    """
    if len(problem) == 1:
        return shapes(problem, intervals)
    random = np.random.default_rng(seed)
    own = _own(problem, intervals)
    found = [carried for guess in _combinations(own, random, 6) for carried in [_carry(problem, guess, up=True)]]
    found += [_carry(problem, guess, up=False) for guess in _in_common(problem, intervals)]
    search = _collect(found)
    for _ in range(hops):
        guess = search.best.curvature + _disturbance(search.best.curvature.shape, random)
        search = _collect([*search.minima, minimise(problem, guess)], search)
    return search


def resampled(curvature: np.ndarray, intervals: int) -> np.ndarray:
    """The profile (N, M) on another number of equal intervals, linear between the middles of the intervals."""
    old, new = ((np.arange(count) + 0.5) / count for count in (curvature.shape[1], intervals))
    return np.array([np.interp(new, old, row) for row in curvature])


def alone(problem: ClassicalProblem, robot: int) -> ClassicalProblem:
    """The problem of one robot without neighbours."""
    return attrs.evolve(problem, starts=problem.starts[[robot]], ends=problem.ends[[robot]],
                        laplacian=np.zeros((1, 1)))


def in_common(problem: ClassicalProblem) -> ClassicalProblem:
    """One robot whose end, seen from its start, is the mean of the asked ones; it stands for the whole fleet.

    Where all asked ends look alike from their starts this is the strong-coupling limit, at a cost N times as large.
    """
    places, turns = problem.displacements()[problem.placed], problem.turns()[problem.headed]
    end = np.full(3, np.nan)
    if len(places):
        end[:2] = np.array([places.mean().real, places.mean().imag]) * problem.duration
        end[2] = 0.0
    if len(turns):
        end[2] = turns.mean()
    return ClassicalProblem(np.zeros(3), end, np.zeros((1, 1)), 0.0, problem.duration)


def _waves(problem: ClassicalProblem, intervals: int) -> Iterator[np.ndarray]:
    """Arcs with waves of one period (C to either side, S) and of half a period, shape (1, M)."""
    time = (np.arange(intervals) + 0.5) / intervals
    arc = np.full(intervals, np.nan_to_num(problem.turns()[0]))
    yield arc[None]
    if not problem.placed[0]:
        return
    for swing in _SWINGS:
        for phase in np.arange(8) * np.pi / 4:
            yield (arc + swing * np.cos(2 * np.pi * time + phase))[None]
        for side in (1, -1):
            yield (arc + side * swing * np.cos(np.pi * time))[None]


def _own(problem: ClassicalProblem, intervals: int) -> list[list[np.ndarray]]:
    """For each robot the curvatures (M,) of its own minima, cheapest first."""
    return [[found.curvature[0] for found in shapes(alone(problem, robot), intervals).minima[:4]]
            for robot in range(len(problem))]


def _combinations(own: list[list[np.ndarray]], random: np.random.Generator, count: int) -> Iterator[np.ndarray]:
    yield np.array([shapes[0] for shapes in own])
    choices = {tuple(int(random.integers(len(shapes))) for shapes in own) for _ in range(count - 1)}
    for choice in sorted(choices - {(0,) * len(own)}):
        yield np.array([shapes[which] for shapes, which in zip(own, choice)])


def _in_common(problem: ClassicalProblem, intervals: int) -> Iterator[np.ndarray]:
    for found in shapes(in_common(problem), intervals).minima[:4]:
        yield np.repeat(found.curvature, len(problem), axis=0)


def _carry(problem: ClassicalProblem, guess: np.ndarray, *, up: bool) -> Coarse:
    """The minimum reached by continuation in the coupling, from none or from strong."""
    scale = max(float(np.linalg.eigvalsh(problem.laplacian)[-1]), 1e-12)
    factors = np.array([1e-2, 1e-1, 1.0]) if up else np.array([100.0, 10.0, 1.0])
    for factor in factors:
        coupling = problem.coupling * factor if up else max(problem.coupling, 0.01 / scale) * factor
        found = minimise(problem.with_coupling(coupling), guess)
        guess = found.curvature if found.converged else guess
    return minimise(problem, guess)


def _disturbance(shape: tuple[int, int], random: np.random.Generator) -> np.ndarray:
    """Smooth waves, half of them common to all robots, as large as a C or an S."""
    time = (np.arange(shape[1]) + 0.5) / shape[1]
    waves = np.array([np.cos(2 * np.pi * time), np.sin(2 * np.pi * time), np.cos(np.pi * time)])
    common = np.repeat(random.normal(size=(1, 3)), shape[0], axis=0)
    own = random.normal(size=(shape[0], 3)) * (random.random((shape[0], 1)) < 0.5)
    return 6.0 * (common * (random.random() < 0.5) + own) @ waves


def _collect(found: Iterable[Coarse], before: Search | None = None) -> Search:
    tried = converged = 0
    kept: list[Coarse] = []
    for plan in found:
        tried += 1
        if plan.converged:
            converged += 1
            if not any(abs(plan.cost - other.cost) <= _SAME * (1e-9 + other.cost) for other in kept):
                kept.append(plan)
    if not kept:
        raise SolveError(f"none of {tried} first guesses led to a plan that meets the ends; "
                         "give more time, or ends that are easier to reach")
    kept.sort(key=lambda plan: plan.cost)
    if before is not None:
        tried, converged = before.tried + 1, before.converged + converged - len(before.minima)
    return Search(tuple(kept), tried, converged)
