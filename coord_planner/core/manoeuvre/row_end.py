# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Everyone turns back into its next row, inside the headland."""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np

from ...errors import RefusedError
from ..dubins import ArcPath
from ..fence import Fencing, Piece
from ..fleet import Fleet
from ..watch import margin
from .checks import check_ends
from .driving import COMFORT
from .kinds import RowEnd
from .row_order import Placed, arranged
from .rows import Rows, rows_of
from .scene import Laid, Scene
from .turning_back import TurnBack, turns_back

# Radii tried for a turn, as multiples of the machine's smallest; the rest of its curvature is left for corrections.
_RADII = (1.15, 1.3, 1.5, 2.0, 3.0)
_SPARE = 0.03  # metres of depth that a turn as it is laid out leaves, for what smoothing it changes
_CHANGE = 3.0  # seconds that a change of gear takes, for comparing turns
_SAME_SHAPE = 0.1  # metres or 1/m by which pieces of two ways may differ
_BEYOND = 2.0  # metres further back than anybody drives that the edges of rows are known
_FURTHER = 0.25  # metres by which a turn begins further out when it would swing over an edge
_FINE = 0.1  # metres between poses that are held against the edges
_MOST_TURNS = 3  # for each robot, the quickest


def lay(name: str, wanted: RowEnd, scene: Scene) -> Laid:
    """A turn for each robot that fits into the headland, and when each sets out so that they pass each other clear.

    Raises:
        RefusedError: a robot stands beside its row, turns in no way within the depth, or they cannot pass.
    """
    rows = rows_of(name, wanted, scene.fleet, scene.poses)
    strip = (((float(rows.out[0]), float(rows.out[1])), float(rows.out @ rows.origin) + wanted.depth),)
    ends = rows.ends(wanted.inside)
    ends[:, 2] = rows.heading + math.pi
    check_ends(scene.fleet, scene.settings, ends, wanted.speed)
    width = wanted.row_width or wanted.row_spacing
    edges = rows.edges(width, _furthest_back(wanted, scene, rows))
    _check_in_row(name, wanted, scene, width, edges)
    turns = [_turns(name, wanted, scene, rows, edges, k) for k in range(len(scene.fleet))]
    laid = [_laid(wanted, scene, rows, each) for each in arranged(name, scene, rows, turns)]
    laid = [attrs.evolve(each, strip=strip, pieces=edges) for each in laid]
    return attrs.evolve(laid[0], otherwise=tuple(laid[1:]))


def _furthest_back(wanted: RowEnd, scene: Scene, rows: Rows) -> float:
    longest = max(robot.footprint.footprint_length for robot in scene.fleet.robots)
    return float(max(wanted.inside, -rows.along.min())) + 2 * longest + _BEYOND


def _kept(wanted: RowEnd, scene: Scene, k: int) -> float:
    """Metres that a turn as it is laid out keeps to the edges of headland and rows."""
    return float(margin(scene.fleet, scene.settings, wanted.speed)[k]) + _SPARE


def _check_in_row(name: str, wanted: RowEnd, scene: Scene, width: float, edges: tuple[Piece, ...]) -> None:
    for k, each in enumerate(scene.fleet.robots):
        needed = each.footprint.footprint_width + 2 * _kept(wanted, scene, k)
        if needed > width:
            raise RefusedError(
                f"{name}: {each.name} needs a row {needed:.2f} m wide, {needed - width:.2f} m more than there are",
                "correct row_width, or leave it out",
            )
    spare, robot, _ = Fencing(edges).least(scene.fleet, scene.poses[:, None])
    if spare < 0.0:
        raise RefusedError(
            f"{name}: {scene.fleet.names[robot]} reaches {-spare:.2f} m over the edge of its row",
            "drive it into its row, or correct row_width, end_x and end_y",
        )


def _laid(wanted: RowEnd, scene: Scene, rows: Rows, placed: tuple[Placed, ...]) -> Laid:
    ends = rows.ends(wanted.inside)
    ends[:, 2] = [each.way.end[2] for each in placed]
    alike = all(_alike(placed[0], each) for each in placed)
    return Laid(ends, tuple(each.way for each in placed), waits=np.array([each.wait for each in placed]),
                speeds=np.array([each.speed for each in placed]), alike=alike, note=_note(scene.fleet, placed, alike))


def _note(fleet: Fleet, placed: tuple[Placed, ...], alike: bool) -> str:
    """Who sets out later, and that nobody copies anybody where turns differ: by intent they do so then."""
    waiting = [f"{fleet.names[each.robot]} sets out after {each.wait:.0f} s" for each in placed if each.wait > 0.0]
    return ", ".join(waiting + ([] if alike else ["the turns differ, so nobody copies anybody"]))


def _alike(one: Placed, other: Placed) -> bool:
    """Whether two robots turn on ways of one shape at one time."""
    shapes = np.array(one.way.segments), np.array(other.way.segments)
    return bool(
        one.wait == other.wait and shapes[0].shape == shapes[1].shape and np.allclose(*shapes, atol=_SAME_SHAPE)
    )


def _turns(
    name: str, wanted: RowEnd, scene: Scene, rows: Rows, edges: tuple[Piece, ...], k: int
) -> list[tuple[ArcPath, float]]:
    """Ways of one robot that stay within the headland, the quickest first, each with the speed that it allows.

    A turn begins where the row ends, or where the robot is beyond that; further out where it would swing over an edge.
    """
    robot = scene.fleet.robots[k]
    shift, earliest = rows.shifts[k], max(float(rows.along[k]), 0.0)
    furthest = earliest + 2 * robot.footprint.footprint_length
    corners = robot.footprint.corners() * np.array([1.0, 1.0 if rows.side * shift > 0.0 else -1.0])
    kept = _kept(wanted, scene, k)
    beside = Fencing(edges)
    found: list[tuple[float, ArcPath, float, int]] = []
    needed: dict[bool, tuple[float, str]] = {}
    for multiple in _RADII:
        radius = multiple / robot.limits.max_curvature
        speed = _speed(scene, k, wanted.speed, radius)
        rate = COMFORT * robot.limits.max_curvature_rate / speed
        for turn in turns_back(abs(shift), radius, rate, reverse=True):
            begins = _begins(turn, rows, k, beside, scene.fleet, kept, (earliest, furthest))
            if begins is None:
                continue
            depth = begins + turn.depth(corners) + kept
            changing = turn.changes > 0
            if changing not in needed or depth < needed[changing][0]:
                needed[changing] = (depth, turn.kind)
            if depth <= wanted.depth and (not changing or robot.limits.min_speed < 0.0):
                way = _way(rows, k, turn, begins, wanted.inside)
                found.append((way.length / speed + _CHANGE * turn.changes, way, speed, turn.changes))
    if not found:
        raise _too_shallow(name, wanted, scene.fleet, k, abs(shift), needed)
    loops = [each for each in found if each[3] == 0]
    best = sorted(loops or found, key=lambda each: each[0])[:_MOST_TURNS]
    return [(way, speed) for _, way, speed, _ in best]


def _begins(
    turn: TurnBack, rows: Rows, k: int, beside: Fencing, fleet: Fleet, kept: float, between: tuple[float, float]
) -> Optional[float]:
    """How far out of its row a robot begins a turn that stays clear of the edges; None where it never does.

    Args:
        kept: metres to the edges at the least. between: where it may begin, metres.
    """
    alone = Fleet((fleet.robots[k],))
    for begins in np.arange(between[0], between[1] + _FURTHER, _FURTHER):
        way = _way(rows, k, turn, float(begins), 0.0)
        poses = way.sample(np.arange(max(begins - rows.along[k] - _FURTHER, 0.0), way.length + _FINE, _FINE))
        if beside.least(alone, poses[None])[0] >= kept:
            return float(begins)
    return None


def _speed(scene: Scene, k: int, asked: float, radius: float) -> float:
    """What the asked speed comes to on a bend."""
    limits, rules = scene.fleet.robots[k].limits, scene.settings.site_rules
    lateral = min(limits.max_lateral_acceleration, rules.max_lateral_acceleration)
    bend = min(COMFORT * limits.max_turn_rate * radius, math.sqrt(COMFORT * lateral * radius))
    return min(asked, limits.max_speed, rules.max_speed, bend)


def _way(rows: Rows, k: int, turn: TurnBack, begins: float, inside: float) -> ArcPath:
    """Straight out of the row, the turn, straight into the next row."""
    shift, along = rows.shifts[k], rows.along[k]
    left = 1.0 if rows.side * shift > 0.0 else -1.0
    bends = tuple((left * curvature, length) for curvature, length in turn.segments)
    segments = ((0.0, begins - along), *bends, (0.0, begins + turn.ahead + inside))
    return ArcPath(
        rows.start(k), turn.kind, tuple(segment for segment in segments if abs(segment[1]) > 1e-9)
    )


def _too_shallow(
    name: str, wanted: RowEnd, fleet: Fleet, k: int, shift: float, needed: dict[bool, tuple[float, str]]
) -> RefusedError:
    robot = fleet.robots[k]
    if False not in needed:
        return RefusedError(
            f"{name}: {robot.name} swings over the edge of a row on every turn into a row {shift:g} m away",
            "turn into a row further away, or correct row_width",
        )
    depth, kind = needed[False]
    words = (
        f"{name}: {robot.name} needs {depth:.2f} m of headland to turn into a row {shift:g} m away ({kind}), "
        f"{depth - wanted.depth:.2f} m more than the {wanted.depth:g} m that there are"
    )
    back = needed.get(True)
    if back is not None and robot.limits.min_speed < 0.0:
        words += f"; with changes of gear {back[0]:.2f} m ({back[1]}), {back[0] - wanted.depth:.2f} m more"
    elif back is not None and back[0] <= wanted.depth:
        words += f"; with changes of gear {back[0]:.2f} m would do, and its min_speed does not let it reverse"
    return RefusedError(words, "turn into a row further away, give more depth, or a machine that turns more tightly")
