"""From what a parameter file asks for to the task that it means for the poses at hand."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Optional

import attrs
import numpy as np

from ..dubins import ArcPath
from ..fleet import Fleet
from ..settings import Settings
from . import equal_radius, row_end, to_ends
from .checks import check_ends, check_speed, check_start
from .kinds import EqualRadius, Manoeuvre, RowEnd, ToEnds
from .scene import Laid, Scene
from .task import Task, lay_out
from .ways import ways_to_ends

_LAY: dict[type, Callable[[str, Any, Scene], Laid]] = {
    EqualRadius: equal_radius.lay, ToEnds: to_ends.lay, RowEnd: row_end.lay,
}


def work_out(
    name: str, manoeuvre: Manoeuvre, fleet: Fleet, settings: Settings, poses: np.ndarray, speed_now: float,
    neighbours: np.ndarray,
) -> Task:
    """The task that a manoeuvre means from the poses at hand.

    Args:
        poses: shape (N, 3), headings unwrapped. speed_now: of the fleet, m/s.
        neighbours: hops from robot to robot in the neighbour graph, shape (N, N), inf where there is no way.

    Raises:
        RefusedError: it cannot be kept, with the figures and what to do.
    """
    check_speed(manoeuvre.speed, manoeuvre.end_speed, fleet, settings)
    check_start(fleet, settings, poses)
    laid = _LAY[type(manoeuvre)](name, manoeuvre, Scene(fleet, settings, poses, speed_now, neighbours))
    check_ends(fleet, settings, laid.ends, manoeuvre.speed)
    first, *others = (_task(name, manoeuvre, fleet, settings, speed_now, each) for each in (laid, *laid.otherwise))
    return attrs.evolve(first, otherwise=tuple(others))


def _task(
    name: str, manoeuvre: Manoeuvre, fleet: Fleet, settings: Settings, speed_now: float, laid: Laid
) -> Task:
    return lay_out(
        name, fleet, settings, laid.ends, laid.ways, speed=manoeuvre.speed, end_speed=manoeuvre.end_speed,
        speed_now=speed_now, duration=laid.duration, coupling=manoeuvre.coupling, alignment=manoeuvre.alignment,
        max_curvature=laid.max_curvature, strip=laid.strip, drives=laid.drives, alike=laid.alike,
    )


def go_on(
    task: Task, fleet: Fleet, settings: Settings, poses: np.ndarray, neighbours: np.ndarray,
    left: tuple[Optional[ArcPath], ...],
) -> Task:
    """The rest of a task for a fleet that stands still part of the way; windings of the ends are kept.

    Args:
        left: what is left of each robot's way; None for one that stands off it and needs a new one. (A new one
            for everybody would send a robot that stands a finger's breadth past its end round a full circle.)
    """
    ways, ends = tuple(way for way in left if way is not None), task.ends
    if len(ways) < len(left):
        anew, wound = ways_to_ends(fleet, poses, task.ends, neighbours, keep_winding=True, reverse=bool(task.reversing.any()))
        ways = tuple(new if old is None else old for old, new in zip(left, anew))
        ends = np.where(np.array([way is None for way in left])[:, None], wound, ends)
    return lay_out(
        task.name, fleet, settings, ends, ways, speed=task.speed, end_speed=task.end_speed, speed_now=0.0,
        duration=0.0, coupling=task.coupling, alignment=task.alignment, max_curvature=task.max_curvature,
        strip=task.strip, alike=task.alike,
    )
