# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who sets out when at the end of the rows, so that ways that cross are passed one after the other."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Optional

import attrs
import numpy as np
import shapely

from ...errors import RefusedError
from .. import outline
from ..dubins import ArcPath
from ..watch import margin
from .driving import drive_along, room_to_wait
from .rows import Rows
from .scene import Scene

_STEP = 0.25  # seconds between poses that are compared
_WAITS = 1.0  # seconds between the times of setting out that are tried
_LONGEST = 120.0  # seconds of waiting
_SPARES = (0.15, 0.05, 0.4)  # metres of clearance beyond what must be kept, for what smoothing the ways changes
_MOST = 4  # arrangements that are handed on

Turns = Sequence[tuple[ArcPath, float]]


@attrs.frozen(eq=False)
class Placed:
    """One robot's part.

    Attributes:
        robot: its position. way, speed: that it drives at, m/s. wait: seconds until it sets out, or for which it
            stands before it turns. begins: seconds until the first of its poses.
        poses: on its way, every _STEP, shape (K, 3).
    """

    robot: int
    way: ArcPath
    speed: float
    wait: float
    begins: float
    poses: np.ndarray

    def at(self, steps: np.ndarray) -> np.ndarray:
        """Poses at whole steps since the beginning, shape (K, 3)."""
        since = steps - int(round(self.begins / _STEP))
        return np.asarray(self.poses[np.clip(since, 0, len(self.poses) - 1)])

    @property
    def until(self) -> int:
        """Steps until it has arrived."""
        return int(round(self.begins / _STEP)) + len(self.poses)


def arranged(
    name: str, scene: Scene, rows: Rows, turns: Sequence[Turns]
) -> list[tuple[Placed, ...]]:
    """Arrangements in which all pass clear, the quickest first.

    Robots are placed one after the other, each as early as those placed before it allow (prioritised planning:
    Erdmann & Lozano-Perez, Algorithmica 2 (1987) 477-521), in several orders.

    Raises:
        RefusedError: in no order do they pass, with the pair and what is missing.
    """
    count = len(scene.fleet)
    ranks = np.argsort(-rows.now)
    orders = {tuple(map(int, order)) for order in (ranks, ranks[::-1], np.argsort(rows.then), np.argsort(rows.shifts))}
    basic = [[_setting_out(scene, k, way, speed) for way, speed in turns[k]] for k in range(count)]
    found: list[tuple[Placed, ...]] = []
    worst: Optional[tuple[float, int, int]] = None
    for spare in _SPARES:
        for order in sorted(orders):
            placed, blocked = _place(scene, basic, order, spare)
            if blocked is None:
                found.append(tuple(sorted(placed, key=lambda each: each.robot)))
            elif worst is None or blocked[0] > worst[0]:
                worst = blocked
    if not found:
        assert worst is not None
        raise _cannot_pass(name, scene, worst)
    distinct: dict[tuple[tuple[float, str], ...], tuple[Placed, ...]] = {}
    for each in found:
        distinct.setdefault(tuple((part.wait, part.way.word) for part in each), each)
    quickest = sorted(distinct.values(), key=lambda each: max(part.until for part in each))
    return quickest[:_MOST]


def _setting_out(scene: Scene, k: int, way: ArcPath, speed: float, wait: float = 0.0) -> Placed:
    """A robot on its way; one that comes along moving waits where its row ends."""
    drive = drive_along(scene.fleet.robots[k], scene.settings, way, speed, wait=wait, first=scene.speed_now)
    steps = int(np.ceil(drive.duration / _STEP)) + 1
    return Placed(k, way, speed, wait, 0.0, way.sample(drive.distance(_STEP * np.arange(steps))))


def _later(scene: Scene, placed: Placed, wait: float) -> Optional[Placed]:
    """The same with a wait; None where there is no room to stop for it."""
    if wait == 0.0 or scene.speed_now == 0.0:
        return attrs.evolve(placed, wait=wait, begins=wait)
    if not room_to_wait(scene.fleet.robots[placed.robot], placed.way, scene.speed_now):
        return None
    return _setting_out(scene, placed.robot, placed.way, placed.speed, wait)


def _place(
    scene: Scene, basic: Sequence[Sequence[Placed]], order: Sequence[int], spare: float
) -> tuple[list[Placed], Optional[tuple[float, int, int]]]:
    """Everyone as early as may be; else the largest clearance that was found for the first who cannot pass."""
    placed: list[Placed] = []
    kept = scene.settings.site_rules.min_clearance + 2 * float(margin(scene.fleet, scene.settings, 1.0).max()) + spare
    waits = np.arange(0.0, _LONGEST, _WAITS)
    for k in order:
        best = (-np.inf, k, k)
        for wait in waits:
            later = [_later(scene, each, float(wait)) for each in basic[k]]
            tried = [(*_gap(scene, each, placed), each) for each in later if each is not None]
            if not tried:
                return placed, best
            clear = [each for gap, _, each in tried if gap >= kept]
            if clear:
                placed.append(clear[0])  # the quickest
                break
            gap, other, _ = max(tried, key=lambda one: one[0])
            best = max(best, (gap - kept, k, other))
            if placed and wait > _STEP * max(each.until for each in placed):
                return placed, best
        else:
            return placed, best
    return placed, None


def _gap(scene: Scene, newcomer: Placed, placed: Sequence[Placed]) -> tuple[float, int]:
    """Smallest clearance of a robot to those already placed, and to whom."""
    if not placed:
        return np.inf, -1
    corners = scene.fleet.corners()
    steps = np.arange(max(each.until for each in (newcomer, *placed)))
    here = outline.outlines(corners[newcomer.robot][None], newcomer.at(steps)[None])[0]
    gaps = [
        (float(shapely.distance(here, outline.outlines(corners[other.robot][None], other.at(steps)[None])[0]).min()),
         other.robot)
        for other in placed
    ]
    return min(gaps)


def _cannot_pass(name: str, scene: Scene, worst: tuple[float, int, int]) -> RefusedError:
    short, k, j = worst
    names = scene.fleet.names
    return RefusedError(
        f"{name}: {names[k]} cannot pass {names[j]} in the headland, whoever waits: {-short:.2f} m of clearance are "
        f"missing to the site's smallest of {scene.settings.site_rules.min_clearance:g} m and the planner's margin"
        + ("" if scene.speed_now == 0.0 else "; who comes along moving can wait only as long as it is in its row"),
        "widen the row spacing, skip rows, choose another order of rows or let them end further inside",
    )
