# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""First guesses for a problem with limits, clearances or free speeds, in its own units."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Optional

import attrs
import numpy as np

from ...errors import SolveError
from .. import dubins, multistart, reeds_shepp
from ..dubins import ArcPath
from ..theory.search import resampled
from .problem import DirectProblem
from .solution import Guess, shared_out

_FROM_MINIMA = 5  # of the classical form
_WORDS = 4  # ways of each robot
_MOST = 12  # guesses in all
_RADII = (0.5, 0.25, 0.12)  # tried where nothing bounds the curvature, in ways' lengths over a turn
_TOGETHER = 0.03  # of the time: changes of gear that are nearer become one
_NOTHING = 1e-9  # of the way's length: pieces below it change no gear
_TIGHTEST, _SCANNED = 0.01, 40  # radii looked at for ways of a given length, in ways' lengths, up to 1
_LONGER = 1.15  # a way that leaves room to turn, in distances


def guesses(problem: DirectProblem, intervals: int, seed: int) -> tuple[list[Guess], int, int]:
    """Guesses, most likely ones first; how many first guesses led to those that come from the classical form, and
    how many of these arrived.
    """
    found, tried, converged = _classical(problem, intervals, seed)
    found = [*_words(problem, intervals), *found]
    found.append(_arcs(problem, intervals))
    random = np.random.default_rng(seed)
    first = found[0]
    found.append(Guess(first.curvature + multistart.disturbance(first.curvature.shape, random) / 2, first.speed))
    return found[:_MOST], tried, converged


def _classical(problem: DirectProblem, intervals: int, seed: int) -> tuple[list[Guess], int, int]:
    """Minima of the same problem without limits, at each speed that may be the right one."""
    found, tried, converged = [], 0, 0
    for speed in _speeds(problem):
        try:
            relaxed = attrs.evolve(problem.relaxed(), duration=speed)
            rough = multistart.minima(relaxed, seed=seed, hops=2)
        except (ValueError, SolveError):  # too slow to reach an end; or no plan of that length has been found
            continue
        tried, converged = tried + rough.tried, converged + rough.converged
        for plan in rough.found[:_FROM_MINIMA]:
            found.append(Guess(resampled(plan.curvature, intervals) / speed,
                               np.full((len(problem), intervals), speed)))
    return found, tried, converged


def _speeds(problem: DirectProblem) -> list[float]:
    """The asked speed; where the speed is free also one that just reaches the farthest end, and the highest."""
    speeds = problem.speeds
    if speeds.fixed:
        return [speeds.asked]
    moved = (problem.ends - problem.starts)[problem.placed, :2]
    farthest = float(np.hypot(*moved.T).max(initial=0.0))
    slow = min(max(_LONGER * farthest, speeds.lowest, 0.05 * speeds.highest), speeds.highest)
    return list(dict.fromkeys([speeds.asked, slow, speeds.highest]))


def _words(problem: DirectProblem, intervals: int) -> list[Guess]:
    """Shortest paths of bounded curvature, stretched over the time: with their gears, where robots may reverse."""
    own = [_ways(problem, k) for k in range(len(problem))]
    count = max(len(each) for each in own)
    return [_driven(problem, [each[min(which, len(each) - 1)] if each else None for each in own], intervals)
            for which in range(count)]


def _ways(problem: DirectProblem, k: int) -> list[ArcPath]:
    """The shortest ways of robot k with the asked winding; of each schedule of gears the shortest one first."""
    if not problem.placed[k]:
        return []
    if problem.speeds.fixed:
        return _as_long(problem, k)[:_WORDS]
    ways: list[ArcPath] = []
    for radius in _radii(problem, k):
        ways += [way for way in _joining(problem, k, radius) if 0 < way.length <= problem.speeds.fastest * (1 + 1e-9)]
    ways.sort(key=lambda way: way.length)
    first: dict[tuple[int, ...], ArcPath] = {}
    for way in ways:
        first.setdefault(tuple(gear for gear, _ in _runs(way)), way)
    others = [way for way in ways if way not in first.values()]
    return sorted([*first.values(), *others][:_WORDS], key=lambda way: way.length)


def _joining(problem: DirectProblem, k: int, radius: float) -> list[ArcPath]:
    """Ways of one radius to the end, with the asked winding."""
    kind: Callable[..., Sequence[ArcPath]] = reeds_shepp.paths if problem.speeds.reversing else dubins.paths
    turning = float(problem.ends[k, 2] - problem.starts[k, 2])
    return [way for way in kind(problem.starts[k].tolist(), problem.ends[k].tolist(), radius)
            if abs(way.turning - turning) < 1e-6]


def _as_long(problem: DirectProblem, k: int) -> list[ArcPath]:
    """Ways that are exactly as long as the asked one: the radius is what makes them so. The widest first."""
    length = problem.length

    def named(radius: float) -> dict[str, ArcPath]:
        return {way.word: way for way in _joining(problem, k, radius)}

    sharpest = float(problem.caps.curvature(problem.speeds)[k])
    radii = np.geomspace(max(1.0 / sharpest, _TIGHTEST), 1.0, _SCANNED)
    found = []
    before = named(radii[0])
    for low, high in zip(radii, radii[1:]):
        after = named(high)
        for word in before.keys() & after.keys():
            if (before[word].length - length) * (after[word].length - length) <= 0:
                way = _with_length(word, low, high, length, named)
                if way is not None:
                    found.append((high, way))
        before = after
    return [way for _, way in sorted(found, key=lambda pair: -pair[0])]


def _with_length(
    word: str, low: float, high: float, length: float, named: Callable[[float], dict[str, ArcPath]]
) -> Optional[ArcPath]:
    """The way of a word whose length is the asked one, by bisection of its radius; None where it jumps over it."""
    rises = named(high)[word].length > named(low)[word].length
    way = None
    for _ in range(60):
        middle = (low + high) / 2
        way = named(middle).get(word)
        if way is None:
            return None
        low, high = (low, middle) if (way.length > length) == rises else (middle, high)
    return way if way is not None and abs(way.length - length) < 1e-6 * length else None


def _radii(problem: DirectProblem, k: int) -> list[float]:
    sharpest = float(problem.caps.curvature(problem.speeds)[k])
    usual = [radius / np.pi for radius in _RADII]
    return [1.0 / sharpest] if sharpest > 1.0 / usual[0] and np.isfinite(sharpest) else [
        max(radius, 1.0 / sharpest) for radius in usual]


def _runs(way: ArcPath) -> list[tuple[int, float]]:
    """Gear, and the part of the way at which it ends, of each run in one gear."""
    runs: list[tuple[int, float]] = []
    passed = 0.0
    for _, length in way.segments:
        passed += abs(length)
        if abs(length) > _NOTHING:
            gear = 1 if length > 0 else -1
            if runs and runs[-1][0] == gear:
                runs.pop()
            runs.append((gear, passed / way.length))
    return runs


def _driven(problem: DirectProblem, ways: list[Optional[ArcPath]], intervals: int) -> Guess:
    """Every robot on its way at a constant pace; on an even arc where it has none. Robots change gear together where
    they would do so at nearly the same moment.
    """
    runs = [[(1, 1.0)] if way is None else _runs(way) for way in ways]
    ends = [0.0]
    for part in sorted(part for each in runs for _, part in each[:-1]):
        if part - ends[-1] > _TOGETHER and part < 1 - _TOGETHER:
            ends.append(part)
    spans = np.diff([*ends, 1.0])
    counts = shared_out(spans, intervals)
    middles = [(i + (j + 0.5) / count) for i, count in enumerate(counts) for j in range(count)]
    moments = np.interp(middles, np.arange(len(spans) + 1), [*ends, 1.0])
    h = np.repeat(spans / np.array(counts), counts)
    even = _arcs(problem, intervals)
    curvature, speed = even.curvature, even.speed
    for k, way in enumerate(ways):
        if way is not None:
            gears = np.array([_gear(runs[k], (a + b) / 2) for a, b in zip(ends, [*ends[1:], 1.0])])
            curvature[k], speed[k] = _paced(way, problem, moments, h, np.repeat(gears, counts))
    return Guess(curvature, speed) if len(counts) == 1 else Guess(curvature, speed, counts, spans)


def _gear(runs: list[tuple[int, float]], part: float) -> int:
    return next(gear for gear, end in runs if part < end + 1e-9)


def _paced(
    way: ArcPath, problem: DirectProblem, moments: np.ndarray, h: np.ndarray, gears: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Mean curvature and speed in intervals about the given parts of the way, (M,) each."""
    turned = np.cumsum([0.0, *(curvature * length for curvature, length in way.segments)])
    passed = np.cumsum([0.0, *(abs(length) for _, length in way.segments)])
    turn = np.interp((moments + h / 2) * way.length, passed, turned)
    turn -= np.interp((moments - h / 2) * way.length, passed, turned)
    if problem.speeds.fixed:  # the way is too short for the speed; what it turns is kept
        return turn / (h * problem.speeds.asked), np.full(len(h), problem.speeds.asked)
    lowest, highest = problem.speeds.lowest, problem.speeds.highest
    fastest = np.where(gears > 0, highest, -lowest)
    speed = gears * np.clip(way.length, max(lowest, 0.0), fastest)
    return turn / (h * way.length) * gears, speed


def _arcs(problem: DirectProblem, intervals: int) -> Guess:
    """Everybody turns evenly at the asked speed."""
    turns = np.nan_to_num(problem.ends[:, 2] - problem.starts[:, 2])
    shape = (len(problem), intervals)
    return Guess(np.broadcast_to(turns[:, None] / problem.speeds.asked, shape).copy(),
                 np.full(shape, problem.speeds.asked))
