# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The group slows in step before one of it comes into an area with a speed cap, and speeds up again behind it."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ..caps import planned_caps
from ..fleet import Fleet, weakest
from ..settings import Settings
from .driving import COMFORT
from .task import Task

_STEP = 0.05  # seconds
_STANDING = 1e-3  # m/s
_SLOWEST = 0.01  # part of its speed


def paced(task: Task, fleet: Fleet, settings: Settings) -> Task:
    """The task with its time stretched where a cap is lower than what is asked."""
    if not settings.site_rules.speed_caps:
        return task
    moments = np.linspace(0.0, task.arrival, max(2, math.ceil(task.arrival / _STEP)))
    poses, speeds, _ = task.guess(moments)
    capped = planned_caps(fleet, settings, poses, task.speed)
    capped = np.concatenate([capped[:, :1], capped], axis=1)
    part = (capped / np.maximum(np.abs(speeds), _STANDING)).min(axis=0)
    if (part >= 1.0).all():
        return task
    asked = np.abs(speeds).max(axis=0)
    along = np.concatenate([[0.0], np.cumsum(np.diff(moments) * (asked[1:] + asked[:-1]) / 2)])
    comfort = [COMFORT * weakest(fleet.limit(name)) for name in ("max_acceleration", "max_braking")]
    speed = _reachable(along, asked * np.minimum(part, 1.0), *comfort)
    rate = np.where(asked > _STANDING, speed / np.maximum(asked, _STANDING), 1.0)
    mean = np.maximum((rate[1:] + rate[:-1]) / 2, _SLOWEST)
    passed = np.concatenate([[0.0], np.cumsum(np.diff(moments) / mean)])
    step = settings.horizon.interval
    arrival = step * math.ceil(passed[-1] / step - 1e-9)
    times = passed * arrival / passed[-1]
    pacing = (tuple(times.tolist()), tuple(task.profile_time(moments).tolist()))
    return attrs.evolve(task, arrival=arrival, duration=arrival + task.duration - task.arrival, pacing=pacing)


def _reachable(along: np.ndarray, speed: np.ndarray, acceleration: float, braking: float) -> np.ndarray:
    """The fastest that is nowhere above a speed over a distance and changes no faster than it may: v dv = a ds."""
    squared, way = speed**2, np.diff(along)
    for i in range(len(way) - 1, -1, -1):
        squared[i] = min(squared[i], squared[i + 1] + 2 * braking * way[i])
    for i in range(len(way)):
        squared[i + 1] = min(squared[i + 1], squared[i] + 2 * acceleration * way[i])
    return np.sqrt(squared)
