# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Stops, gaps, how late poses and commands came, and how well robots drove what was planned."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import shapely

from .review_fleet import FleetRecord, Reviewed
from .review_turns import turn_rates

_STANDING = 0.02  # m/s and rad/s
_STOP = 1.0  # seconds of standing that make a stop
_GAP_FACTOR, _SHORTEST_GAP = 5.0, 0.5  # as for poses: so many usual spacings, and so many seconds
_LEADS = (0.5, 1.0, 2.0)  # seconds ahead at which plans are compared with what was driven


def stops(record: FleetRecord) -> list[dict[str, Any]]:
    """Stretches of at least a second in which a robot stood between two drives; ``robot`` None: all of them."""
    run = record.run
    still = (np.abs(np.nan_to_num(turn_rates(record))) <= _STANDING) & (np.abs(np.nan_to_num(run.speeds)) <= _STANDING)
    standing = still & np.isfinite(run.speeds)
    whole = _stretches(run.times, np.logical_and.reduce(standing))
    found: list[dict[str, Any]] = [{"robot": None, "from_s": begin, "to_s": end} for begin, end in whole]
    for row, name in enumerate(run.fleet.names):
        for begin, end in _stretches(run.times, standing[row]):
            if not any(first <= begin + _STOP and end - _STOP <= last for first, last in whole):
                found.append({"robot": name, "from_s": begin, "to_s": end})
    return sorted(found, key=lambda stop: float(stop["from_s"]))


def _stretches(times: np.ndarray, standing: np.ndarray) -> list[tuple[float, float]]:
    """Standing between two drives: not before the first, nor after the last."""
    moving = np.flatnonzero(~standing)
    if not len(moving):
        return []
    found = []
    for before, after in zip(moving[:-1], moving[1:]):
        if after - before > 1 and times[after - 1] - times[before + 1] >= _STOP:
            found.append((float(times[before + 1]), float(times[after - 1])))
    return found


def gaps(record: FleetRecord) -> list[dict[str, Any]]:
    """Stretches in which poses or commands of a robot were missing, and poses that end before the recording does."""
    found = []
    last = max(float(robot.motion.times[-1]) for robot in record.robots)
    for robot in record.robots:
        for begin, end in robot.motion.gaps:
            found.append(_gap(robot, robot.topics.source, "poses", begin, end))
        ended = float(robot.motion.times[-1])
        if last - ended > max(_GAP_FACTOR * robot.motion.spacing, _SHORTEST_GAP):
            found.append(_gap(robot, robot.topics.source, "poses", ended, last))
        found += [_gap(robot, robot.topics.commands, "commands", begin, end)
                  for begin, end in _command_gaps(robot)]
    return sorted(found, key=lambda gap: float(gap["from_s"]))


def _gap(robot: Reviewed, topic: str, what: str, begin: float, end: float) -> dict[str, Any]:
    return {"robot": robot.name, "topic": topic, "what": what, "from_s": begin, "to_s": end}


def _command_gaps(robot: Reviewed) -> list[tuple[float, float]]:
    """Pauses in a robot's commands while it moves."""
    times = robot.commands[:, 0]
    if len(times) < 3:
        return []
    spacing = np.diff(times)
    long = np.flatnonzero(spacing > max(_GAP_FACTOR * float(np.median(spacing)), _SHORTEST_GAP))
    speeds = np.abs(np.interp(times[long] + spacing[long] / 2, robot.motion.times, robot.motion.speeds))
    return [(float(times[n]), float(times[n + 1])) for n, speed in zip(long, speeds) if speed > _STANDING]


def lateness(record: FleetRecord) -> dict[str, dict[str, Any]]:
    """By robot, for poses and commands: how long after their stamps they were received, and how far apart they came.

    None where stamps are missing or of another clock. Late by the recorder's clock: where machines' clocks differ, the
    difference is in it.
    """
    return {
        robot.name: {
            "poses": _late(robot.late) | _spacing(robot.motion.times),
            "commands": _late(robot.commands_late) | _spacing(robot.commands[:, 0]),
        } for robot in record.robots
    }


def _late(late: np.ndarray) -> dict[str, float]:
    known = late[np.isfinite(late)]
    figures = np.percentile(known, [50, 95, 100]) if len(known) else np.full(3, math.nan)
    return dict(zip(("late_median_s", "late_p95_s", "late_max_s"), (float(value) for value in figures)))


def _spacing(times: np.ndarray) -> dict[str, float]:
    between = np.diff(times)
    figures = np.percentile(between, [50, 95, 100]) if len(between) else np.full(3, math.nan)
    return dict(zip(("every_median_s", "every_p95_s", "every_max_s"), (float(value) for value in figures)))


def planned_against_driven(record: FleetRecord) -> dict[str, Any] | None:
    """By robot: how far it was from where its plans had it half a second, one and two seconds later, and beside them.

    ``error_m`` are root mean squares; ``beside_max_m`` is the largest distance of a driven point from a plan's path
    within the plan's first two seconds. None where no plans were recorded.
    """
    figures = {robot.name: _against(robot) for robot in record.robots if robot.plans}
    return figures or None


def _farthest(places: np.ndarray, path: np.ndarray) -> float:
    """Largest distance of places from a path, metres."""
    if np.ptp(path, axis=0).max() < 1e-6:  # standing: a line without length is none
        return float(np.hypot(*(places - path[0]).T).max())
    return float(shapely.distance(shapely.points(places), shapely.linestrings(path)).max())


def _against(robot: Reviewed) -> dict[str, Any]:
    times, places = robot.motion.times, robot.motion.poses[:, :2]
    errors: dict[float, list[float]] = {lead: [] for lead in _LEADS}
    beside = [0.0]
    for plan in robot.plans:
        made, rows = plan.received, plan.rows
        due, begin, end = rows[:, 0], made, made + _LEADS[-1]
        if np.isfinite(due).all() and np.ptp(due) > 0.0:
            begin, end = max(begin, float(due[0])), min(end, float(due[-1]))
            for lead in _LEADS:
                when = made + lead
                if due[0] <= when <= due[-1] and times[0] <= when <= times[-1]:
                    planned = [np.interp(when, due, rows[:, column]) for column in (1, 2)]
                    driven = [np.interp(when, times, places[:, column]) for column in (0, 1)]
                    errors[lead].append(math.dist(planned, driven))
        ahead = places[(times >= begin) & (times <= end)]
        if len(ahead) and len(rows) > 1 and np.isfinite(rows[:, 1:3]).all():
            beside.append(_farthest(ahead, rows[:, 1:3]))
    return {
        "plans": len(robot.plans),
        "error_m": {f"{lead:g}": math.sqrt(float(np.mean(np.square(found)))) if found else math.nan
                    for lead, found in errors.items()},
        "beside_max_m": max(beside),
    }
