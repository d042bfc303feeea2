# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""From what a parameter file asks for to the task that it means for the poses at hand."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Optional

import attrs
import numpy as np

from ...errors import RefusedError
from ..dubins import ArcPath
from ..fleet import Fleet
from ..settings import Settings
from . import equal_radius, form, in_succession, row_end, straight, to_ends, turn_away, wheel
from .checks import check_end_speed, check_ends, check_hazard, check_speed, check_start
from .course import as_given
from .detour import choices
from .driving import drive_along
from .kinds import EqualRadius, Form, InSuccession, Manoeuvre, RowEnd, Sequence, Straight, ToEnds, TurnAway, Wheel
from .pacing import paced
from .scene import Laid, Scene
from .sequence import parts_of
from .task import Task, lay_out
from .ways import preceded, straightened, ways_to_ends

_LAY: dict[type, Callable[[str, Any, Scene], Laid]] = {
    EqualRadius: equal_radius.lay, ToEnds: to_ends.lay, Wheel: wheel.lay, InSuccession: in_succession.lay,
    RowEnd: row_end.lay, Form: form.lay, Straight: straight.lay, TurnAway: turn_away.lay,
}


def work_out(
    name: str, manoeuvre: Manoeuvre, fleet: Fleet, settings: Settings, poses: np.ndarray, speed_now: float,
    neighbours: np.ndarray, bends: Optional[np.ndarray] = None, hazard: Optional[tuple[float, float]] = None,
) -> Task:
    """The task that a manoeuvre means from the poses at hand.

    Args:
        poses: shape (N, 3), headings unwrapped. speed_now: of the fleet, m/s.
        neighbours: hops from robot to robot in the neighbour graph, shape (N, N), inf where there is no way.
        bends: curvatures that the robots drive at, shape (N,), 1/m; none when left out.
        hazard: a point that everybody keeps away from; None when none is known.

    Returns:
        of a sequence the task of its first part; the others are worked out as well, from where those before end.

    Raises:
        RefusedError: it cannot be kept, with the figures and what to do.
    """
    if isinstance(manoeuvre, Sequence):
        return _first_of(name, manoeuvre, Scene(
            fleet, settings, poses, speed_now, neighbours, np.zeros(len(fleet)) if bends is None else bends,
            hazard,
        ))
    if not isinstance(manoeuvre, Wheel):  # which works out a speed itself
        check_speed(manoeuvre.speed, manoeuvre.end_speed, fleet, settings)
    check_start(fleet, settings, poses)
    check_hazard(fleet, settings, poses, hazard)
    bent = np.zeros(len(fleet)) if bends is None else bends
    scene = Scene(fleet, settings, poses, speed_now, neighbours, bent, hazard)
    laid = _lay(name, manoeuvre, scene)
    speed = manoeuvre.speed if laid.speed is None else laid.speed
    check_ends(fleet, settings, laid.ends, speed)
    check_end_speed(fleet, settings, laid.ends, manoeuvre.end_speed)

    def task(laid: Laid) -> Task:
        return lay_out(
            name, fleet, settings, laid, speed=speed, end_speed=manoeuvre.end_speed, speed_now=speed_now,
            coupling=manoeuvre.coupling, alignment=manoeuvre.alignment,
        )

    return _on_the_site(laid, scene, speed, task)


def _first_of(name: str, sequence: Sequence, scene: Scene) -> Task:
    """The first part, when all can be laid out; after a part in which somebody only copies nothing more is known."""
    first: Optional[Task] = None
    parts = parts_of(name, sequence)
    for i, (part, wanted) in enumerate(parts):
        try:
            task = work_out(
                part, wanted, scene.fleet, scene.settings, scene.poses, scene.speed_now, scene.neighbours, scene.bends,
                scene.hazard,
            )
        except RefusedError as refused:
            raise RefusedError(f"{name}, part {i + 1} of {len(parts)}: {refused.reason}", refused.remedy) from refused
        first = first or task
        if np.isnan(task.ends).any():
            break
        past = wanted.end_speed * (task.duration - task.arrival)
        heading = task.ends[:, 2]
        ends = task.ends + past * np.column_stack([np.cos(heading), np.sin(heading), 0.0 * heading])
        scene = attrs.evolve(scene, poses=ends, speed_now=wanted.end_speed, bends=np.zeros(len(ends)))
    assert first is not None
    return first


def _on_the_site(laid: Laid, scene: Scene, speed: float, task: Callable[[Laid], Task]) -> Task:
    """A task round the site's keep-outs and within its speed caps, with others to try in turn where it is not kept."""
    found: Optional[Task] = None
    all_choices = [choice for each in (laid, *laid.otherwise) for choice in choices(each, scene, speed)]
    for choice in reversed(all_choices):
        planned = paced(task(choice), scene.fleet, scene.settings)
        found = attrs.evolve(planned, otherwise=found, hazard=scene.hazard)
    assert found is not None
    return found


def _lay(name: str, manoeuvre: Manoeuvre, scene: Scene) -> Laid:
    lay = _LAY[type(manoeuvre)]
    if isinstance(manoeuvre, (EqualRadius, ToEnds, Wheel)):  # which know themselves what to do about bends
        return lay(name, manoeuvre, scene)
    after, first = straightened(scene)
    return preceded(lay(name, manoeuvre, after), first)


def go_on(
    task: Task, fleet: Fleet, settings: Settings, poses: np.ndarray, neighbours: np.ndarray,
    left: tuple[Optional[ArcPath], ...], since: float = 0.0, hazard: Optional[tuple[float, float]] = None,
) -> Task:
    """The rest of a task for a fleet that stands still part of the way; windings of the ends are kept.

    Args:
        left: what is left of each robot's way; None for one that stands off it and needs a new one. (A new one
            for everybody would send a robot that stands a finger's breadth past its end round a full circle.)
        since: second of the old task at which it was left: who was still waiting then waits for the rest.
        hazard: a point that everybody keeps away from; None when none is known.
    """
    check_hazard(fleet, settings, poses, hazard)
    ways, ends = tuple(way for way in left if way is not None), task.ends
    if len(ways) < len(left):
        def seconds(k: int, way: ArcPath) -> float:
            return drive_along(fleet.robots[k], settings, way, task.speed).duration

        reverse = seconds if task.reversing.any() else None
        anew, wound = ways_to_ends(fleet, poses, task.ends, neighbours, keep_winding=True, seconds=reverse)
        ways = tuple(new if old is None else old for old, new in zip(left, anew))
        ends = np.where(np.array([way is None for way in left])[:, None], wound, ends)
    laid = Laid(**{**as_given(task), "ends": ends, "ways": ways}, marks=task.marks_left(since))
    if task.waits is not None:
        laid = attrs.evolve(laid, waits=np.maximum(task.waits - float(task.profile_time(np.array(since))), 0.0))

    def rest(laid: Laid) -> Task:
        return lay_out(
            task.name, fleet, settings, laid, speed=task.speed, end_speed=task.end_speed, speed_now=0.0,
            coupling=task.coupling if task.own_coupling else None,
            alignment=task.alignment if task.own_alignment else None,
        )

    return _on_the_site(laid, Scene(fleet, settings, poses, 0.0, neighbours, hazard=hazard), task.speed, rest)
