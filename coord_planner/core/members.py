# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who is part of a running manoeuvre: tasks and references for robots that leave it or join it on the way.

Arrays only grow while a manoeuvre runs. A robot that leaves keeps its row, comes to a stand and stays there as an
obstacle; one that joins gets the last row and stands until a reference that drives it takes over.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from typing import Any, Optional

import attrs
import numpy as np

from ..errors import RefusedError
from . import manoeuvre, reference, se2
from .dubins import ArcPath
from .fleet import Fleet
from .graph import NeighbourGraph
from .manoeuvre import End, Manoeuvre, Task, ToEnds
from .manoeuvre.task import COMFORT
from .manoeuvre.ways import as_start, ways_to_ends
from .problem import CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND
from .reference import Reference
from .settings import Settings
from .watch import choose_pairs

_STANDING = 5e-3  # m/s
_FINE = 0.05  # seconds between poses that stand for a way
_PER_ROBOT = ("ways", "drives")  # fields of a task that hold one thing a robot without being arrays


def grown(carried: Fleet, wanted: Fleet, new: Collection[str]) -> Fleet:
    """Everyone carried so far, as they are wanted now, and last those who are new."""
    return Fleet((*renewed(carried, wanted).robots, *(wanted.robots[wanted.index(name)] for name in new)))


def renewed(carried: Fleet, wanted: Fleet) -> Fleet:
    """Everyone carried, with the limits that are wanted now; who is no longer wanted keeps the old ones."""
    return Fleet(tuple(
        wanted.robots[wanted.index(robot.name)] if robot.name in wanted.names else robot for robot in carried.robots
    ))


def among(graph: NeighbourGraph, names: tuple[str, ...], driving: Collection[str]) -> NeighbourGraph:
    """A graph over all robots whose edges join only those who are driven: nobody copies the others."""
    return NeighbourGraph(names, graph.relative_to(tuple(name for name in names if name in driving)).edges)


def padded(task: Task, leaders: Mapping[int, int], count: int, poses: np.ndarray) -> Task:
    """A task for more robots: whoever is not in ``leaders`` stands.

    Args:
        leaders: position of each robot among ``count`` -> its position in the task.
        poses: where the ``count`` robots are, shape (count, 3).
    """
    before, otherwise = task.stands, task.otherwise
    if otherwise is not None:
        otherwise = padded(otherwise, leaders, count, poses)
    task = _picked(task, [leaders.get(k, 0) for k in range(count)])
    new = [k for k in range(count) if k not in leaders]
    ends, ways = task.ends.copy(), list(task.ways)
    ends[new] = np.nan
    for k in new:
        ways[k] = _nowhere(poses[k])
    stands = {*new, *(k for k, row in leaders.items() if row in before)}
    return attrs.evolve(task, ends=ends, ways=tuple(ways), stands=tuple(sorted(stands)), otherwise=otherwise)


def extended(made: Reference, fleet: Fleet, settings: Settings, poses: np.ndarray) -> Reference:
    """A reference with rows for robots that came last since it was made; they stand.

    Args:
        poses: of the whole fleet, shape (N, 3).
    """
    plan, known = made.plan, len(made.plan.states)
    if known == len(fleet):
        return made
    more = len(fleet) - known
    still = np.zeros((more, len(plan.times), plan.states.shape[2]))
    still[:, :, POSE] = poses[known:, None]
    plan = attrs.evolve(
        plan, fleet=fleet, states=np.concatenate([plan.states, still]), missed=_more(plan.missed, more),
        rates=_more(plan.rates, more),
    )
    near = choose_pairs(fleet, settings, plan.poses)
    pairs = np.unique(np.concatenate([made.pairs, near[near.max(axis=1) >= known]]), axis=0)
    task = padded(made.task, {k: k for k in range(known)}, len(fleet), poses)
    return attrs.evolve(
        made, task=task, plan=plan, pairs=pairs, graph=NeighbourGraph(fleet.names, made.graph.edges)
    )


def reassigned(
    task: Task, fleet: Fleet, graph: NeighbourGraph, driving: Collection[str], wanted: Optional[Manoeuvre],
    poses: np.ndarray,
) -> Task:
    """The same manoeuvre for other members: who leaves comes to a stand, who joins copies or goes to its own end.

    Args:
        graph: neighbours among those who are driven. driving: their names.
        wanted: what the manoeuvre was worked out from, where it is still known. poses: shape (N, 3).

    Raises:
        RefusedError: nobody who stays has an end, or who joins has neither an end nor anybody to copy.
    """
    stands = tuple(k for k, name in enumerate(fleet.names) if name not in driving)
    joining = [k for k in task.stands if k not in stands]
    if stands == task.stands:
        return task
    led = bool(np.isfinite(task.ends[:, 2]).any())
    hops, own = graph.hops(), wanted.ends() if isinstance(wanted, ToEnds) else {}
    drivers = [k for k in range(len(fleet)) if k not in stands and k not in joining]
    leaders = {k: drivers[int(np.argmin(hops[k, drivers]))] if drivers else -1 for k in joining}
    rows = [leaders.get(k, k) for k in range(len(fleet))]
    task = attrs.evolve(_picked(task, rows), stands=stands, otherwise=None)
    ends, ways = task.ends.copy(), list(task.ways)
    ends[[*stands, *joining]] = np.nan
    for k in joining:
        name = fleet.names[k]
        if name in own:
            ends[k], ways[k] = _own_way(own[name], fleet, k, poses, hops)
        elif leaders[k] < 0 or not np.isfinite(hops[k, leaders[k]]) or task.coupling == 0.0:
            raise RefusedError(f"{task.name}: {name} has no end and nobody to copy", "let it join when all rest")
    if led and np.isnan(ends[:, 2]).all():
        raise RefusedError(
            f"{task.name}: nobody who stays has an end", "abandon it and begin one with an end for who is left"
        )
    return attrs.evolve(task, ends=ends, ways=tuple(ways))


def seeded(old: Reference, task: Task, fleet: Fleet, start: float) -> Reference:
    """The running reference with another guess from ``start`` on for those whom the new task treats otherwise.

    The states at ``start`` stay what they are: from there who leaves brakes along its way, and who joins speeds up,
    to its own end or as its neighbour turns.
    """
    leaving, joining = set(task.stands) - set(old.task.stands), set(old.task.stands) - set(task.stands)
    if not leaving and not joining:
        return old
    times = old.plan.times
    if np.abs(times - start).min() > 1e-9:
        times = np.union1d(times, [start])
    states = old.plan.sample(times)
    after = np.flatnonzero(times > start + 1e-9)
    moments = np.append(start, np.linspace(start, old.end, max(2, int((old.end - start) / _FINE)))[1:])
    curves, now = old.states(moments), old.state(start)
    for k in leaving:
        speed = abs(float(now[k, SPEED_COMMAND]))
        speeds = np.maximum(speed - COMFORT * float(fleet.limit("max_braking")[k]) * (moments - start), 0.0)
        states[k, after] = _driven(curves[k], moments, speeds * np.sign(now[k, SPEED_COMMAND]), times[after])
    for k in joining:
        limits, left = fleet.robots[k].limits, task.arrival - moments
        speeds = np.minimum(COMFORT * limits.max_acceleration * (moments - start), float(task.asked[k]))
        speeds = np.minimum(speeds, task.end_speed + COMFORT * limits.max_braking * np.maximum(left, 0.0))
        states[k, after] = _driven(_way_to_join(task, curves, now, k), moments, speeds, times[after])
    return attrs.evolve(old, plan=attrs.evolve(old.plan, times=times, states=states))


def rest(
    task: Task, fleet: Fleet, graph: NeighbourGraph, settings: Settings, old: Reference, start: float,
    driving: Collection[str], wanted: Optional[Manoeuvre],
) -> Reference:
    """The rest of a running manoeuvre for those who are driven from ``start`` on.

    Raises:
        RefusedError: it cannot be kept, or cannot go on without who leaves, or with who joins.
    """
    task = reassigned(task, fleet, graph, driving, wanted, old.state(start)[:, POSE])
    return reference.make_rest(task, fleet, graph, settings, seeded(old, task, fleet, start), start)


def resumed(
    old: Reference, since: float, fleet: Fleet, graph: NeighbourGraph, settings: Settings, states: np.ndarray,
    driving: Collection[str], wanted: Optional[Manoeuvre], hazard: Optional[tuple[float, float]] = None,
) -> Reference:
    """What is left for a fleet that was stopped on its way at second ``since``, for those who are now driven.

    Args:
        states: where everybody stands, shape (N, 7).

    Raises:
        RefusedError: as for the rest.
    """
    poses = states[:, POSE]
    task = reassigned(old.task, fleet, graph, driving, wanted, poses)
    left = list(reference.ways_left(old, poses, since))
    for k in set(old.task.stands) - set(task.stands):
        left[k] = task.ways[k] if np.isfinite(task.ends[k, 2]) else None
    for k in task.stands:
        left[k] = _nowhere(poses[k])
    remaining = manoeuvre.go_on(task, fleet, settings, poses, graph.hops(), tuple(left), since, hazard)
    return reference.make_again(_standing_too(remaining, task.stands), fleet, graph, settings, states)


def replaced(
    name: str, wanted: Manoeuvre, fleet: Fleet, graph: NeighbourGraph, settings: Settings, states: np.ndarray,
    driving: Collection[str], hazard: Optional[tuple[float, float]] = None,
) -> Reference:
    """Another manoeuvre for those who are driven, from states in motion, shape (N, 7); the others stand.

    Raises:
        RefusedError: it cannot be kept.
    """
    rows = [k for k, each in enumerate(fleet.names) if each in driving]
    if not rows:
        raise RefusedError(f"{name}: nobody is driven who could go on", "begin it when the fleet is idle")
    _check_forward(name, fleet, states, rows)
    own = Fleet(tuple(fleet.robots[k] for k in rows))
    task = manoeuvre.work_out(
        name, wanted, own, settings, states[rows, POSE], float(states[rows, SPEED_COMMAND].max()),
        graph.relative_to(own.names).hops(), states[rows, CURVATURE_COMMAND],
        hazard,
    )
    task = padded(task, {k: i for i, k in enumerate(rows)}, len(fleet), states[:, POSE])
    return reference.make(task, fleet, graph, settings, states)


def _standing_too(task: Task, stands: tuple[int, ...]) -> Task:
    """A task, and those that are tried otherwise, in which some robots stand."""
    otherwise = None if task.otherwise is None else _standing_too(task.otherwise, stands)
    return attrs.evolve(task, stands=stands, otherwise=otherwise)


def _check_forward(name: str, fleet: Fleet, states: np.ndarray, rows: list[int]) -> None:
    """A manoeuvre that replaces another begins with everyone driving forward or standing."""
    backward = [fleet.names[k] for k in rows if states[k, SPEED_COMMAND] < -_STANDING]
    if backward:
        raise RefusedError(
            f"{name}: {', '.join(backward)} will be driving backward when it would take over",
            "ask again when all drive forward, or halt the fleet first",
        )


def _picked(task: Task, rows: list[int]) -> Task:
    """A task whose robots are those of another at ``rows``."""
    changes: dict[str, Any] = {}
    for field in attrs.fields(Task):
        value = getattr(task, field.name)
        if isinstance(value, np.ndarray):
            changes[field.name] = value[rows]
        elif field.name in _PER_ROBOT:
            changes[field.name] = tuple(value[row] for row in rows)
    return attrs.evolve(task, **changes)


def _own_way(
    end: End, fleet: Fleet, k: int, poses: np.ndarray, hops: np.ndarray
) -> tuple[np.ndarray, ArcPath]:
    ends = np.full((len(fleet), 3), np.nan)
    ends[k] = [np.nan if end.x is None else end.x, np.nan if end.y is None else end.y, end.heading]
    ways, wound = ways_to_ends(fleet, poses, ends, hops)
    return wound[k], ways[k]


def _way_to_join(task: Task, curves: np.ndarray, now: np.ndarray, k: int) -> np.ndarray:
    """States along the way of one that joins, shape (K, 7), from where it stands: to its end, or as its leader's."""
    if np.isfinite(task.ends[k, 2]):
        way = task.ways[k]
        states = np.zeros((max(2, int(way.length / _FINE)), curves.shape[2]))
        states[:, POSE] = way.sample(np.linspace(0.0, way.length, len(states)))
        return states
    leader = next((j for j in range(len(curves)) if j != k and task.ways[j] is task.ways[k]), k)
    states = curves[leader].copy()
    relative = se2.compose(tuple(now[k, POSE]), se2.inverse(tuple(now[leader, POSE])))
    states[:, POSE] = np.stack(se2.compose(relative, tuple(curves[leader][:, POSE].T)), axis=1)
    return states


def _driven(curve: np.ndarray, moments: np.ndarray, speeds: np.ndarray, times: np.ndarray) -> np.ndarray:
    """States along a curve of states, shape (K, 7), driven at other speeds; at some times, shape (len(times), 7)."""
    passed = np.append(0.0, np.cumsum(np.hypot(*np.diff(curve[:, :2], axis=0).T)))
    middle = (np.abs(speeds[1:]) + np.abs(speeds[:-1])) / 2
    driven = np.interp(times, moments, np.append(0.0, np.cumsum(middle * np.diff(moments))))
    states = np.stack([np.interp(driven, passed, column) for column in curve.T], axis=1)
    states[:, [SPEED, SPEED_COMMAND]] = np.interp(times, moments, speeds)[:, None]
    return states


def _nowhere(pose: np.ndarray) -> ArcPath:
    return ArcPath(as_start(pose), "stands", ((0.0, 0.0),))


def _more(rows: np.ndarray, count: int) -> np.ndarray:
    return np.concatenate([rows, np.zeros((count, *rows.shape[1:]))])
