# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""From where they stand into a line abreast, a file or an echelon: who takes which place, on which way, and who waits.

Places are assigned so that the sum of the squares of the ways is least (scipy's linear_sum_assignment); that of
straight ways never cross. Ways of machines that only drive forward may still meet: then those are laid one after
the other, each with the least waiting and bending that keeps it clear of those before it (prioritised planning:
Erdmann & Lozano-Perez, Algorithmica 2 (1987) 477-521, from memory), and who finds none is laid earlier in the next
round.
"""

from __future__ import annotations

import itertools
import math
from typing import Optional

import attrs
import numpy as np
from scipy.optimize import linear_sum_assignment

from ...errors import RefusedError
from .. import outline
from ..dubins import ArcPath, paths, shortest
from ..watch import margin
from .kinds import Form
from .scene import Laid, Scene
from .ways import as_start

_RADII = (3.0, 2.0, 1.5, 1.15)  # of ways that are tried, as multiples of the machine's smallest
_DETOUR = 1.6  # times the shortest, plus _LOOSE: longer ways are not tried
_LOOSE = 2.0  # metres
_AHEAD = 24  # steps ahead in which the nearest fit place of a formation is looked for
_TRIED = 6  # of the best of them
_WAITS = 13  # starts that are tried, from at once to when all that are laid have arrived
_STUCK = 2  # rounds in which the same robot finds none, after which the order is given up
_EASE = 1.5  # metres of the fleet in which one who has waited comes up to speed
_SAMPLE = 0.25  # metres of the fleet between moments at which ways are held against each other


@attrs.frozen(eq=False)
class _Drive:
    """A robot's way and how far it is on it when the fleet has driven so many metres."""

    way: ArcPath
    wait: float

    @property
    def until(self) -> float:
        return self.wait + self.way.length + (_EASE / 2 if self.wait else 0.0)

    def along(self, passed: np.ndarray) -> np.ndarray:
        """It waits, eases up to the fleet's speed, and drives on."""
        since = np.maximum(passed - self.wait, 0.0)
        eased = np.where(since < _EASE, since**2 / (2 * _EASE), since - _EASE / 2) if self.wait else since
        return np.asarray(np.minimum(eased, self.way.length))


def lay(name: str, wanted: Form, scene: Scene) -> Laid:
    """Places, who takes which, ways and waits; RefusedError with the figures where they would meet all the same."""
    heading = _heading(wanted, scene)
    places = _places(wanted, len(scene.fleet), heading)
    refused: Optional[RefusedError] = None
    for middle in _middles(wanted, scene, places, heading):
        try:
            drives = _clear_drives(name, scene, _assigned(scene, places + [*middle, 0.0]))
            return _laid(scene, drives)
        except RefusedError as error:
            refused = refused or error
    assert refused is not None
    raise refused


def _heading(wanted: Form, scene: Scene) -> float:
    if wanted.heading_deg is not None:
        return math.radians(wanted.heading_deg)
    return float(np.angle(np.exp(1j * scene.poses[:, 2]).sum()))


def _places(wanted: Form, count: int, heading: float) -> np.ndarray:
    """Places about their middle, shape (N, 3)."""
    slant = {"line": 0.0, "file": math.pi / 2, "echelon": math.radians(wanted.slant_deg)}[wanted.shape]
    direction = heading - math.pi / 2 - slant  # from the first to the next: to the right, and back
    along = wanted.spacing * (np.arange(count) - (count - 1) / 2)
    return np.column_stack([along * math.cos(direction), along * math.sin(direction), np.full(count, heading)])


def _middles(wanted: Form, scene: Scene, places: np.ndarray, heading: float) -> list[np.ndarray]:
    """Where the middle may come to lie: as given, or ahead of where the fleet stands, the shortest ways first."""
    if wanted.x is not None and wanted.y is not None:
        return [np.array([wanted.x, wanted.y])]
    centre = scene.poses[:, :2].mean(axis=0)
    forward = np.array([math.cos(heading), math.sin(heading)])
    step = max(wanted.spacing, 1.0) / 2
    tried = [centre + i * step * forward for i in range(_AHEAD)]
    longest = [max(way.length for way in _assigned(scene, places + [*middle, 0.0])) for middle in tried]
    return [tried[i] for i in np.argsort(longest, kind="stable")[:_TRIED]]


def _assigned(scene: Scene, places: np.ndarray) -> list[ArcPath]:
    """For each robot the shortest comfortable way to its place."""
    ways = [
        [shortest(as_start(pose), as_start(place), _RADII[1] / robot.limits.max_curvature) for place in places]
        for robot, pose in zip(scene.fleet.robots, scene.poses)
    ]
    robots, taken = linear_sum_assignment([[way.length**2 for way in each] for each in ways])
    return [ways[k][i] for k, i in zip(robots, taken)]


def _clear_drives(name: str, scene: Scene, ways: list[ArcPath]) -> list[_Drive]:
    """A drive for each robot that keeps clear of the others, moving and standing."""
    at_once = [_Drive(way, 0.0) for way in ways]
    if _nearest(scene, dict(enumerate(at_once)))[0] >= 0.0:
        return at_once
    for order in _orders(ways):
        laid = _in_order(scene, ways, order)
        if laid is not None:
            return laid
    short, (first, second) = _nearest(scene, dict(enumerate(at_once)))
    names = scene.fleet.names
    raise RefusedError(
        f"{name}: on their ways {names[first]} and {names[second]} would come nearer than allowed by {-short:.2f} m, "
        "and neither waiting nor bending out keeps them apart", "widen the spacing, or choose another place or heading",
    )


def _orders(ways: list[ArcPath]) -> list[list[int]]:
    """In which the ways are laid, to be tried in turn: the longest first or last, the furthest ahead first or last."""
    ahead = [np.cos(way.end[2]) * way.end[0] + np.sin(way.end[2]) * way.end[1] for way in ways]
    robots = range(len(ways))
    keys = ([-way.length for way in ways], [way.length for way in ways], [-each for each in ahead], ahead)
    return [sorted(robots, key=lambda k: float(key[k])) for key in keys]


def _in_order(scene: Scene, ways: list[ArcPath], order: list[int]) -> Optional[list[_Drive]]:
    """One after the other; who finds no clear drive is laid first in the next round."""
    order, stuck = list(order), [0] * len(ways)
    while max(stuck) <= _STUCK:
        laid: dict[int, _Drive] = {}
        for k in order:
            drive = _clear_of(scene, k, ways[k], laid)
            if drive is None:
                break
            laid[k] = drive
        if len(laid) == len(ways):
            return [laid[k] for k in range(len(ways))]
        stuck[k] += 1
        order.remove(k)
        order.insert(0, k)
    return None


def _clear_of(scene: Scene, k: int, way: ArcPath, laid: dict[int, _Drive]) -> Optional[_Drive]:
    """The drive of least delay that keeps clear of those that are laid, moving and standing."""
    span = max((drive.until for drive in laid.values()), default=way.length) + way.length
    waits = np.linspace(0.0, span, _WAITS)
    tried = [_Drive(each, float(wait)) for each in _variants(scene, k, way) for wait in waits]
    for drive in sorted(tried, key=lambda drive: drive.until):
        if _nearest(scene, {**laid, k: drive}, only=k)[0] >= 0.0:
            return drive
    return None


def _variants(scene: Scene, k: int, way: ArcPath) -> list[ArcPath]:
    """Ways to the same place, the given one first: other radii and other orders of arcs."""
    smallest = 1.0 / scene.fleet.robots[k].limits.max_curvature
    found = [way]
    for multiple in _RADII:
        found += paths(way.start, way.end, multiple * smallest)
    return [each for each in found if each.length <= _DETOUR * way.length + _LOOSE]


def _nearest(scene: Scene, drives: dict[int, _Drive], only: Optional[int] = None) -> tuple[float, tuple[int, int]]:
    """By how much the nearest pair is clear of what has to be kept (below 0: short of it), and the pair.

    Where two stand nearer than that at first or are to end so, no more is asked of them on the way.
    """
    fleet, settings = scene.fleet, scene.settings
    pairs = [pair for pair in itertools.combinations(sorted(drives), 2) if only is None or only in pair]
    if not pairs:
        return math.inf, (-1, -1)
    until = max(drive.until for drive in drives.values())
    passed = np.linspace(0.0, until, max(3, int(until / _SAMPLE)))
    where = {k: i for i, k in enumerate(drives)}
    poses = np.stack([drive.way.sample(drive.along(passed)) for drive in drives.values()])
    polygons = outline.outlines(fleet.corners()[list(drives)], poses)
    gaps = outline.clearances(polygons, np.array([[where[k], where[j]] for k, j in pairs]))
    kept = settings.site_rules.min_clearance + 2 * float(margin(fleet, settings, 0.0).max())
    free = gaps.min(axis=1) - np.minimum(kept, np.minimum(gaps[:, 0], gaps[:, -1]) - 1e-6)
    worst = int(np.argmin(free))
    return float(free[worst]), pairs[worst]


def _laid(scene: Scene, drives: list[_Drive]) -> Laid:
    until = max(drive.until for drive in drives)
    passed = np.linspace(0.0, until, max(3, int(until / _SAMPLE)))
    marks = np.stack([drive.along(passed) for drive in drives])
    for row, drive in zip(marks, drives):
        row[-1] = drive.way.length
    waiting = [
        f"{name} waits until the others have driven {drive.wait:.1f} m"
        for name, drive in zip(scene.fleet.names, drives) if drive.wait > 0.0
    ]
    ends = np.array([[*drive.way.end[:2], drive.way.start[2] + drive.way.turning] for drive in drives])
    return Laid(ends, tuple(drive.way for drive in drives), marks=marks, note=", ".join(waiting))
