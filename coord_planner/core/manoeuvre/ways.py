# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Guessed ways: arcs and straight lines from where each robot stands to where it shall arrive."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from .. import reeds_shepp
from ..dubins import ArcPath, paths, shortest
from ..fleet import Fleet, weakest
from .driving import COMFORT
from .scene import STRAIGHT, Laid, Scene

# Radii tried for a way to an end, as multiples of the machine's smallest: the widest that is hardly longer wins.
_RADII = (6.0, 4.0, 3.0, 2.0, 1.5, 1.25, 1.1)
_LONGER = 1.12
_SLOWEST = 0.1  # m/s
# Metres and radians, about the noise of a pose: who stands that near to its end is there. (Who stands a finger's
# breadth past it would have to drive a full circle.)
_THERE = 0.06

Seconds = Callable[[int, ArcPath], float]  # that a robot, by its position, takes for a way


def eased_turn(angle: float, radius: float, rate_per_metre: float, start: np.ndarray, pieces: int = 16) -> ArcPath:
    """A turn that eases in and out: curvature rises to 1/radius at ``rate_per_metre``, holds, and falls again.

    Clothoids (Fresnel integrals, DLMF 7.2) in short arcs. A turn too short to reach the radius stays wider.
    """
    turn = abs(angle)
    peak = min(1.0 / radius, math.sqrt(turn * rate_per_metre))
    ramp = peak / rate_per_metre
    hold = turn / peak - ramp if peak > 0 else 0.0
    side = math.copysign(1.0, angle)
    rising = [(side * peak * (i + 0.5) / pieces, ramp / pieces) for i in range(pieces)]
    return ArcPath(as_start(start), "eased", (*rising, (side * peak, hold), *rising[::-1]))


def straightened(scene: Scene) -> tuple[Scene, tuple[ArcPath, ...]]:
    """How each robot comes out of the bend that it is in, and the scene after that; no way for who drives straight."""
    rate = COMFORT * weakest(scene.fleet.limit("max_curvature_rate")) / max(scene.speed_now, _SLOWEST)
    ways = tuple(_eased_out(pose, bend, rate) for pose, bend in zip(scene.poses, scene.bends))
    poses = np.array([way.end for way in ways])
    return attrs.evolve(scene, poses=poses, bends=np.zeros(len(poses))), ways


def joined(first: ArcPath, then: ArcPath) -> ArcPath:
    """One way after another that begins where it ends."""
    return attrs.evolve(then, start=first.start, segments=(*first.segments, *then.segments)) if first.segments else then


def preceded(laid: Laid, first: tuple[ArcPath, ...]) -> Laid:
    """What was laid for robots that come out of their bends first."""
    marks = laid.marks
    if marks is not None:
        lengths = np.array([[way.length] for way in first])
        marks = np.concatenate([np.zeros_like(lengths), lengths + marks], axis=1)
    return attrs.evolve(
        laid, ways=tuple(joined(out, way) for out, way in zip(first, laid.ways)), marks=marks,
        otherwise=tuple(preceded(each, first) for each in laid.otherwise),
    )


def _eased_out(pose: np.ndarray, bend: float, rate_per_metre: float, pieces: int = 8) -> ArcPath:
    if abs(bend) < STRAIGHT:
        return ArcPath(as_start(pose), "straight", ())
    length = abs(bend) / rate_per_metre / pieces
    falling = tuple((bend * (pieces - i - 0.5) / pieces, length) for i in range(pieces))
    return ArcPath(as_start(pose), "eased", falling)


def ways_to_ends(
    fleet: Fleet, poses: np.ndarray, ends: np.ndarray, neighbours: np.ndarray, keep_winding: bool = False,
    seconds: Optional[Seconds] = None, least: float = 1.0,
) -> tuple[tuple[ArcPath, ...], np.ndarray]:
    """A way for each robot, and the ends with their windings chosen: those of the shortest way.

    Args:
        seconds: that a robot takes for a way; given where robots whose lowest speed is below 0 may drive backward.
        least: radius of their ways at the least, as a multiple of their smallest.
    """
    wound = ends.copy()
    found: dict[int, ArcPath] = {}
    for k in map(int, np.flatnonzero(~np.isnan(ends[:, 2]))):
        turning = ends[k, 2] - poses[k, 2]
        if not keep_winding:
            turning = math.remainder(turning, 2 * math.pi)
        if not keep_winding and np.hypot(*(ends[k, :2] - poses[k, :2])) < _THERE and abs(turning) < _THERE:
            found[k], wound[k] = ArcPath(as_start(poses[k]), "there", ((0.0, 0.0),)), poses[k]
            continue
        if np.isnan(ends[k, 0]):
            found[k] = _turn_only(fleet, k, poses[k], turning)
        else:
            chosen = turning if keep_winding else None
            found[k] = _way_to_pose(fleet, k, poses[k], ends[k], chosen)
            if seconds is not None and fleet.robots[k].limits.min_speed < 0.0:
                found[k] = _reversing(fleet, k, ends[k], found[k], chosen, seconds, least)
        wound[k, 2] = poses[k, 2] + (found[k].turning if not np.isnan(ends[k, 0]) else turning)
    leaders = list(found)
    for k in range(len(fleet)):
        if k not in found:
            leader = min(leaders, key=lambda j: float(neighbours[k, j]))
            joined = np.isfinite(neighbours[k, leader])
            segments = found[leader].segments if joined else ((0.0, found[leader].length),)
            found[k] = ArcPath(as_start(poses[k]), "copied", segments)
    return tuple(found[k] for k in range(len(fleet))), wound


def _turn_only(fleet: Fleet, k: int, pose: np.ndarray, turning: float) -> ArcPath:
    limits = fleet.robots[k].limits
    rate = COMFORT * limits.max_curvature_rate / limits.max_speed
    return eased_turn(turning, 2.0 / limits.max_curvature, rate, pose)


def _way_to_pose(fleet: Fleet, k: int, pose: np.ndarray, end: np.ndarray, turning: Optional[float]) -> ArcPath:
    """The widest way that is hardly longer than the shortest, with the asked winding where one is asked."""
    smallest = 1.0 / fleet.robots[k].limits.max_curvature
    start, goal = as_start(pose), as_start(end)

    def candidates(radius: float) -> list[ArcPath]:
        if turning is None:
            return [shortest(start, goal, radius)]
        return [path for path in paths(start, goal, radius) if abs(path.turning - turning) < 0.1]

    tightest = candidates(smallest * _RADII[-1])
    if not tightest:
        tightest = [shortest(start, goal, smallest * _RADII[-1])]
    best = min(tightest, key=lambda path: path.length)
    for multiple in _RADII:
        same = [
            path for path in candidates(smallest * multiple)
            if path.length <= _LONGER * best.length and abs(path.turning - best.turning) < 0.1
        ]
        if same:
            return min(same, key=lambda path: path.length)
    return best


def _reversing(
    fleet: Fleet, k: int, end: np.ndarray, forward: ArcPath, turning: Optional[float], seconds: Seconds, least: float
) -> ArcPath:
    """The widest way with changes of gear that takes hardly longer than the quickest, where it beats the forward one.

    Args:
        least: radius at the least, as a multiple of the smallest.
    """
    def best(multiple: float) -> Optional[ArcPath]:
        found = [
            path for path in reeds_shepp.paths(
                forward.start, as_start(end), multiple / fleet.robots[k].limits.max_curvature
            ) if turning is None or abs(path.turning - turning) < 0.1
        ]
        return min(found, key=lambda path: seconds(k, path), default=None)

    tightest = best(max(_RADII[-1], least))
    if tightest is None or (seconds(k, tightest) >= seconds(k, forward) and least <= 1.0):
        return forward
    for multiple in _RADII:
        wider = best(multiple) if multiple > least else None
        if wider is not None and seconds(k, wider) <= _LONGER * seconds(k, tightest):
            return wider
    return tightest


def as_start(pose: np.ndarray) -> tuple[float, float, float]:
    """A pose, shape (3,), as three plain numbers."""
    return float(pose[0]), float(pose[1]), float(pose[2])
