# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Guessed ways bent round keep-out areas, on one side or the other; the optimisation then stays on that side."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np
import shapely

from ..dubins import ArcPath, through
from ..fleet import Fleet, Robot
from ..settings import Settings
from ..watch import margin
from .scene import Laid, Scene

_STEP = 0.2  # metres between the places of a way that are looked at
_WIDEST = 60.0  # metres to the side that are looked at
_FOLD = 0.8  # part of the radius of a bend up to which one may go to its inner side
_SPARE = 0.1  # metres more than must be
_SLEWED = 0.1  # part of the footprint's length by which it stands out where it turns
_BENDS = 0.6  # part of the largest curvature that a detour takes
_ROUNDS = 6
_PLACES = 600  # that are looked at, at most
_LONGEST = 3.0  # times the length of a way, and both ways to the widest, that a detour may have
_BOTH = (1.0, -1.0)  # left, right
SIDES = (None, *_BOTH)  # the nearer one for each, and all to one side


def choices(laid: Laid, scene: Scene, speed: float) -> tuple[Laid, ...]:
    """The same ends with ways round the site's keep-outs, the most promising first; as it is where none is met.

    First everyone takes the side that is nearer for himself; then all go left, then all right.
    """
    if not scene.settings.site_rules.keep_outs:
        return (laid,)
    fixed = ~np.isnan(laid.ends[:, 0])
    found: list[tuple[ArcPath, ...]] = []
    for side in SIDES:
        ways = tuple(
            round_areas(
                way, blocked_by_site(scene.fleet, scene.settings, k, speed), side,
                bend_of(scene.fleet.robots[k], laid.max_curvature), fixed[k],
            ) for k, way in enumerate(laid.ways)
        )
        if ways not in found:
            found.append(ways)
    return tuple(_with_ways(laid, ways) for ways in found)


def _with_ways(laid: Laid, ways: tuple[ArcPath, ...]) -> Laid:
    """Longer ways are driven past their marks in proportion."""
    if laid.marks is None:
        return attrs.evolve(laid, ways=ways)
    longer = np.array([new.length / max(old.length, 1e-9) for old, new in zip(laid.ways, ways)])
    return attrs.evolve(laid, ways=ways, marks=laid.marks * longer[:, None])


def blocked_by_site(fleet: Fleet, settings: Settings, k: int, speed: float) -> list[shapely.Geometry]:
    """Where the middle of a robot may not be, joined where there is no way between two areas."""
    rules = settings.site_rules
    wide = half_width(fleet.robots[k]) + rules.keep_out_clearance + float(margin(fleet, settings, speed)[k])
    union = shapely.union_all([area.polygon.buffer(wide) for area in rules.keep_outs])
    return list(shapely.get_parts(union))


def half_width(robot: Robot) -> float:
    """How far a robot reaches to the side of its way, and some more, metres."""
    footprint = robot.footprint
    wide = footprint.footprint_width / 2 + abs(footprint.footprint_offset_y)
    return wide + _SLEWED * footprint.footprint_length + _SPARE


def bend_of(robot: Robot, max_curvature: float) -> float:
    """Largest curvature of a detour, 1/m, in a manoeuvre that asks for no tighter bends than one, 1/m."""
    return _BENDS * min(robot.limits.max_curvature, max_curvature)


def round_areas(
    way: ArcPath, blocked: list[shapely.Geometry], side: Optional[float], bend: float, fixed: bool
) -> ArcPath:
    """A way past everything that is in it; as it is where nothing is, or where it is partly driven backwards.

    Args:
        blocked: where it may not lead. side: 1 left, -1 right, None the nearer one. bend: largest curvature, 1/m.
        fixed: whether it ends where it ends.
    """
    if any(length < 0.0 for _, length in way.segments) or way.length < _STEP:
        return way
    straight, longest = way, _LONGEST * way.length + 2 * _WIDEST
    for _ in range(_ROUNDS):
        curve = way.sample(np.linspace(0.0, way.length, min(max(3, int(np.ceil(way.length / _STEP)) + 1), _PLACES)))
        line = shapely.LineString(curve[:, :2])
        met = [area for area in blocked if line.intersects(area)]
        if not met:
            break
        first = min(met, key=lambda area: line.project(shapely.Point(line.intersection(area).coords[0]))
                    if line.intersection(area).geom_type == "LineString" else 0.0)
        offsets = [_offsets(curve, first, each, bend, fixed) for each in (_BOTH if side is None else (side,))]
        off = min(offsets, key=lambda values: float(np.abs(values).max()))
        if np.abs(off).max() < 1e-3:
            break
        way = _shifted(curve, off, fixed)
        if way.length > longest:
            return straight  # it winds about and finds no way: the plan of the straight one says what is missing
    return way


def _offsets(curve: np.ndarray, area: shapely.Geometry, side: float, bend: float, fixed: bool) -> np.ndarray:
    """How far to one side each place of a way has to be moved so that it lies outside of an area, shape (K,)."""
    normals = np.stack([-np.sin(curve[:, 2]), np.cos(curve[:, 2])], axis=1) * side
    passed = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(curve[:, :2], axis=0), axis=1))])
    furthest = _furthest(curve, passed, side)
    lines = shapely.linestrings(np.stack([curve[:, :2], curve[:, :2] + furthest[:, None] * normals], axis=1))
    spans = [_spans(cut, here, normal) for cut, here, normal in zip(
        shapely.intersection(lines, area), curve[:, :2], normals)]
    off = np.zeros(len(curve))
    for _ in range(2 * _ROUNDS):
        before = off
        off = np.array([_past(value, span) for value, span in zip(off, spans)])
        off = np.minimum(_eased(off, passed, bend, fixed), furthest)
        if np.abs(off - before).max() < 1e-3:
            break
    return side * off


def _furthest(curve: np.ndarray, passed: np.ndarray, side: float) -> np.ndarray:
    """How far one may go to a side without crossing over what lies on the inside of a bend, shape (K,), metres."""
    turning = side * np.gradient(curve[:, 2], passed)
    return np.where(turning > _FOLD / _WIDEST, _FOLD / np.maximum(turning, 1e-9), _WIDEST)


def _spans(cut: shapely.Geometry, here: np.ndarray, normal: np.ndarray) -> list[tuple[float, float]]:
    """From where to where along a normal an area lies."""
    found = []
    for part in shapely.get_parts(cut):
        along = (shapely.get_coordinates(part) - here) @ normal
        if len(along):
            found.append((float(along.min()), float(along.max())))
    return sorted(found)


def _past(value: float, spans: list[tuple[float, float]]) -> float:
    for low, high in spans:
        if low - 1e-6 <= value < high:
            value = high
    return value


def _eased(off: np.ndarray, passed: np.ndarray, bend: float, fixed: bool) -> np.ndarray:
    """No less anywhere, and eased in and out: a raised cosine of height a over length l bends by a pi^2 / (2 l^2)."""
    length = np.pi * np.sqrt(np.maximum(off, 1e-6) / (2 * bend))
    before, after = np.minimum(length, passed), np.minimum(length, passed[-1] - passed) if fixed else length
    apart = passed[:, None] - passed[None, :]
    tail = np.maximum(np.where(apart < 0.0, before[None, :], after[None, :]), 1e-6)
    part = np.clip(np.abs(apart) / tail, 0.0, 1.0)
    return np.asarray((off[None, :] * (1.0 + np.cos(np.pi * part)) / 2).max(axis=1))


def _shifted(curve: np.ndarray, off: np.ndarray, fixed: bool) -> ArcPath:
    places = curve[:, :2] + off[:, None] * np.stack([-np.sin(curve[:, 2]), np.cos(curve[:, 2])], axis=1)
    along = np.gradient(places, axis=0)
    turned = np.arctan2(along[:, 1], along[:, 0]) - curve[:, 2]
    headings = curve[:, 2] + np.arctan2(np.sin(turned), np.cos(turned))
    headings[0] = curve[0, 2]
    if fixed:
        headings[-1] = curve[-1, 2]
    return through(curve[0], np.concatenate([places, headings[:, None]], axis=1))
