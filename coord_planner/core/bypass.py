# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Guesses that lead round robots that the manoeuvre is not for: who left it on the way stands somewhere."""

from __future__ import annotations

from typing import Optional

import numpy as np
import shapely

from . import outline
from .dubins import ArcPath, through
from .fleet import Fleet
from .manoeuvre import Task
from .manoeuvre.detour import SIDES, bend_of, blocked_by_site, half_width, round_areas
from .problem import CURVATURE, CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND
from .settings import Settings
from .watch import margin

_PLACES = 200  # of a way that are looked at
_STILL = 1e-3  # metres that who stands may seem to drive
_GRAZED = 0.1  # metres by which a guess, which is led along the edge of what it passes, may reach over it


def in_the_way(task: Task, fleet: Fleet, settings: Settings, states: np.ndarray) -> bool:
    """Whether somebody who stands is in anybody's way, for guessed states of shape (N, K, 7)."""
    return any(
        way.length > 0.0 and _line(way).intersects(_blocked(task, fleet, settings, states, k))
        for k, way in _ways(task, states).items()
    )


def guesses(task: Task, fleet: Fleet, settings: Settings, states: np.ndarray) -> list[np.ndarray]:
    """Guessed states, shape (N, K, 7), bent round everybody who stands: by the nearer side, all left, all right.

    None where nobody stands in anybody's way, nor where there is no room to pass.

    Args:
        states: the guess as it is, in which those who stand come to a stand.
    """
    ways = _ways(task, states)
    standing = {k: _blocked(task, fleet, settings, states, k) for k in ways}
    found: list[dict[int, ArcPath]] = []
    for side in SIDES:
        bent = {k: _bent(task, fleet, settings, standing[k], k, way, side) for k, way in ways.items()}
        other = {k: way for k, way in bent.items() if way is not None and way is not ways[k]}
        if other and None not in bent.values() and other not in found:
            found.append(other)
    return [_driven(states, ways, each) for each in found]


def _bent(
    task: Task, fleet: Fleet, settings: Settings, standing: shapely.Geometry, k: int, way: ArcPath,
    side: Optional[float],
) -> Optional[ArcPath]:
    """Robot k's way round those who stand and the site's keep-outs; None where it leads into one of them."""
    if not _line(way).intersects(standing):
        return way
    blocked = shapely.union_all([standing, *blocked_by_site(fleet, settings, k, task.speed)])
    end, bend = bool(np.isfinite(task.ends[k, 0])), bend_of(fleet.robots[k], task.max_curvature)
    bent = round_areas(way, list(shapely.get_parts(blocked)), side, bend, end)
    return None if _line(bent).intersects(shapely.buffer(blocked, -_GRAZED)) else bent


def _line(way: ArcPath) -> shapely.LineString:
    return shapely.LineString(way.sample(np.linspace(0.0, way.length, _PLACES))[:, :2])


def _ways(task: Task, states: np.ndarray) -> dict[int, ArcPath]:
    """The guessed way of each robot that is driven and drives forward, by its position; none where nobody stands."""
    if not task.stands:
        return {}
    return {
        k: through(states[k, 0, POSE], states[k, :, POSE])
        for k in range(len(states)) if k not in task.stands and states[k, :, SPEED].min() > -_STILL
    }


def _blocked(task: Task, fleet: Fleet, settings: Settings, states: np.ndarray, k: int) -> shapely.Geometry:
    """Where the middle of robot k may not be, for the sake of those who stand."""
    rows, kept = list(task.stands), margin(fleet, settings, task.speed)
    shapes = outline.outlines(fleet.corners()[rows], states[rows, -1, POSE])
    wide = half_width(fleet.robots[k]) + settings.site_rules.min_clearance + kept[k]
    return shapely.union_all([shapely.buffer(shape, wide + float(kept[j])) for j, shape in zip(rows, shapes)])


def _driven(states: np.ndarray, ways: dict[int, ArcPath], bent: dict[int, ArcPath]) -> np.ndarray:
    """The guess with other ways for some, each driven in the same time."""
    guess = states.copy()
    for k, way in bent.items():
        chords = np.linalg.norm(np.diff(states[k, :, :2], axis=0), axis=1)
        longer = way.length / ways[k].length
        passed = np.append(0.0, np.cumsum(chords)) * way.length / max(float(chords.sum()), 1e-9)
        guess[k, 1:, POSE] = way.sample(passed)[1:]
        guess[k, 1:, [CURVATURE, CURVATURE_COMMAND]] = way.curvature(passed)[1:]
        guess[k, 1:, [SPEED, SPEED_COMMAND]] *= longer
    return guess
