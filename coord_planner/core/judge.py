# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Judges each tick: what is going wrong, and whether the fleet must stop because of it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Optional

import attrs
import numpy as np

from . import neighbours, rules, stopping
from .fence import Piece
from .fleet import Fleet
from .graph import NeighbourGraph
from .messages import Caution, Snapshot
from .observer import Estimate
from .plan import SHORT, closest_along
from .problem import CURVATURE_COMMAND, POSE, SPEED_COMMAND
from .pursuit import Pursuit
from .settings import Settings
from .silence import Silence

_HOLD = 1.0  # seconds for which a warning stays after it was last raised, so that none flickers
_AGING = 0.5  # part of poses.max_age from which a pose is called old
_SLOW_FACTOR = 0.7  # part of its commanded speed below which a robot is called slow
_DRIVING = 0.15  # m/s of commanded speed from which that can be told
_AT_LIMIT = 0.995  # part of a limit that counts as reached
_LONG = 3.0  # seconds
_TROUBLE = 0.9  # speed factor below which stopping distances are looked at
_GAP = 2.0  # seconds between snapshots that are a jump of the clock
_SCATTER = 3.0  # times the expected scatter of poses
_ASTRAY = 1.5  # standard deviations; fault-free rehearsals stay below 1.1


@attrs.frozen(eq=False)
class View:
    """What is judged. ``at`` is the first moment at which a stop could take effect, seconds.

    Robots in ``outside`` are obstacles only, and the graph is that of the others; ``waiting`` tells why some cannot
    join.
    """

    snapshot: Snapshot
    estimate: Estimate
    fleet: Fleet
    graph: NeighbourGraph
    settings: Settings
    pursuit: Pursuit
    at: float
    period: float
    refused_change: str
    silence: Optional[Silence]
    hazards: tuple[Piece, ...] = ()
    outside: frozenset[str] = frozenset()
    waiting: Mapping[str, str] = attrs.field(factory=dict)


class Judge:
    """Remembers for how long things have been so; otherwise everything is in the view."""

    def __init__(self) -> None:
        self._last_time: Optional[float] = None
        self._at_limit: dict[tuple[str, str], float] = {}
        self._graph: Optional[NeighbourGraph] = None
        self._kept: dict[tuple[str, str], tuple[Caution, float]] = {}

    def look(self, view: View) -> list[Caution]:
        """Everything that is wrong at this moment, in motion."""
        found = [*self._inputs(view), *self._clock(view), *self._neighbours(view), *_readiness(view)]
        found += [*_following(view), *self._limits(view), *_plans(view), *_spacing(view), *_fenced(view)]
        found = [caution for caution in found if caution.subject not in view.outside]
        return found + [rules.not_joined(view.settings, name, reason) for name, reason in view.waiting.items()]

    def look_on(self, view: View) -> list[Caution]:
        """What is wrong while the fleet stops or is held: what comes in is told all the same, and who does not stop."""
        return [
            *self._inputs(view), *self._clock(view), *self._neighbours(view), *_readiness(view), *_astray(view)
        ]

    def hold(self, now: float, found: list[Caution]) -> tuple[Caution, ...]:
        """What is shown: what is raised now, and what was a moment ago."""
        for caution in found:
            self._kept[(caution.code, caution.subject)] = (caution, now)
        self._kept = {key: kept for key, kept in self._kept.items() if now - _HOLD <= kept[1] <= now}
        return tuple(caution for caution, _ in self._kept.values())

    def _inputs(self, view: View) -> list[Caution]:
        settings, poses, now = view.settings, view.snapshot.poses, view.snapshot.time
        found = [rules.pose_jumped(settings, name) for name in view.estimate.jumped]
        estimate = view.estimate
        for name, age, scatter, repeats in zip(view.fleet.names, estimate.age, estimate.scatter, estimate.repeats):
            newest = poses.get(name)
            if newest is not None and not np.isfinite([newest.stamp, newest.x, newest.y, newest.heading]).all():
                found.append(rules.pose_invalid(settings, name))
            elif newest is not None and newest.stamp - now > settings.poses.max_future:
                found.append(rules.clock_offset(settings, name, newest.stamp - now))
            if age > _AGING * settings.poses.max_age:
                found.append(rules.pose_old(settings, name, float(age)))
            if repeats > 0.0:
                found.append(rules.pose_frozen(settings, name, float(repeats)))
            if scatter > _SCATTER:
                found.append(rules.pose_unsteady(settings, name, float(scatter)))
        return found

    def _clock(self, view: View) -> list[Caution]:
        now, last = view.snapshot.time, self._last_time
        self._last_time = now
        if last is not None and not 0.0 <= now - last <= _GAP:
            return [rules.clock_jumped(view.settings, now - last)]
        return []

    def _neighbours(self, view: View) -> list[Caution]:
        found = []
        if self._graph is not None and self._graph.edges != view.graph.edges:
            found.append(rules.graph_changed(view.settings, len(view.graph.edges)))
        self._graph = view.graph
        if len(view.graph.names) > 1 and not view.graph.connected:
            found.append(rules.graph_split(view.settings, view.graph.components()))
        elif len(view.fleet) > 1 and view.settings.neighbours.warn_below > 0.0:
            rows = [view.fleet.index(name) for name in view.graph.names]
            holding = neighbours.holding(view.settings.neighbours, view.graph, view.estimate.states[rows, :2])
            if holding < view.settings.neighbours.warn_below:
                found.append(rules.graph_thin(view.settings, holding))
        return found

    def _limits(self, view: View) -> list[Caution]:
        """Robots that have been at a limit of their steering or turning for long."""
        now = view.snapshot.time
        speed = np.abs(view.estimate.states[:, SPEED_COMMAND])
        bend = np.abs(view.estimate.states[:, CURVATURE_COMMAND])
        used = {
            "max_curvature": bend / view.fleet.limit("max_curvature"),
            "max_turn_rate": speed * bend / view.fleet.limit("max_turn_rate"),
            "max_lateral_acceleration": speed**2 * bend / view.fleet.limit("max_lateral_acceleration"),
        }
        found = []
        for limit, parts in used.items():
            for name, part in zip(view.fleet.names, parts):
                since = self._at_limit.setdefault((name, limit), now) if part > _AT_LIMIT else now
                if part <= _AT_LIMIT:
                    self._at_limit.pop((name, limit), None)
                elif now - since > _LONG:
                    found.append(rules.limit_reached(view.settings, name, limit, now - since))
        return found


def _readiness(view: View) -> list[Caution]:
    settings, snapshot = view.settings, view.snapshot
    found = [rules.not_ready(settings, name) for name in view.fleet.names if name in snapshot.not_ready]
    found += [rules.silent(settings, name) for name in view.fleet.names if name in snapshot.silent]
    if snapshot.other_planner:
        found.append(rules.other_planner(settings, snapshot.other_planner))
    return found


def _following(view: View) -> list[Caution]:
    progress = view.settings.progress
    found = _astray(view)
    lags, estimate = view.pursuit.progress.lag, view.estimate
    told = np.abs(estimate.states[:, SPEED_COMMAND]) > _DRIVING
    slow = told & ((estimate.speed_factor < _SLOW_FACTOR) | estimate.held_up)
    for k, name in enumerate(view.fleet.names):
        if lags[k] > progress.dead_band + progress.full_lag / 2:
            found.append(rules.not_following(view.settings, name, float(lags[k])))
        elif slow[k]:
            found.append(rules.too_slow(view.settings, name, float(estimate.speed_factor[k])))
    return found


def _astray(view: View) -> list[Caution]:
    """Robots that do something else than they are told, also in a stop and when they are to stand."""
    estimate, found = view.estimate, list[Caution]()
    told = np.abs(estimate.states[:, SPEED_COMMAND]) > _DRIVING
    for k, name in enumerate(view.fleet.names):
        if told[k] and estimate.runs_on[k]:
            found.append(rules.too_fast(view.settings, name, float(estimate.speed_factor[k])))
        elif estimate.astray[k] > _ASTRAY:
            found.append(rules.astray(view.settings, name, float(estimate.astray[k])))
    return found


def _plans(view: View) -> list[Caution]:
    found = []
    if view.refused_change:
        found.append(rules.change_refused(view.settings, view.refused_change))
    if view.silence is not None:
        unsafe = view.silence.unsafe(view.settings.site_rules.min_clearance)
        if unsafe.nearing is not None:
            found.append(rules.silence_unsafe(view.settings, unsafe.nearing))
        if unsafe.entering is not None:
            found.append(rules.silence_unsafe_near(view.settings, unsafe.entering))
    return found


def _spacing(view: View) -> list[Caution]:
    """Clearance now, and whether a stop would still keep it when it is begun a tick later."""
    settings, fleet, estimate = view.settings, view.fleet, view.estimate
    poses = estimate.states[:, None, POSE]
    if len(fleet) < 2 or not np.isfinite(poses).all():
        return []
    allowed = settings.site_rules.min_clearance
    gap, pair = closest_along(fleet, poses, estimate.growth)
    # The estimate itself is uncertain: only what is clearly short is called a breach.
    if gap < allowed - 2.0 * settings.poses.noise_xy:
        return [rules.clearance_breached(settings, _names(fleet, pair), gap)]
    if not _troubled(view):
        return []
    now = view.snapshot.time
    later = stopping.choose(view.pursuit.schedule, view.at + view.period, fleet, estimate, now)
    if later.clearance >= allowed:
        return []
    at_once = stopping.choose(view.pursuit.schedule, view.at, fleet, estimate, now)
    if at_once.clearance <= later.clearance + SHORT:
        return []  # stopping gains nothing: the plan itself leads away
    return [rules.free_way_short(settings, _names(fleet, later.pair), later.clearance)]


def _fenced(view: View) -> list[Caution]:
    """Keep-outs: whether somebody is too near now, and whether a stop begun a tick later would still keep him off."""
    settings, fleet, estimate = view.settings, view.fleet, view.estimate
    fencing = view.pursuit.reference.fencing.beside(view.hazards)
    poses = estimate.states[:, None, POSE]
    if not (fencing.pieces or fencing.lines) or not np.isfinite(poses).all():
        return []
    spare, robot, name = fencing.least(fleet, poses, estimate.growth)
    if spare < -2.0 * settings.poses.noise_xy:
        return [rules.keep_out_breached(settings, fleet.names[robot], name, -spare)]
    if not _troubled(view) and not view.hazards:
        return []
    now = view.snapshot.time
    later = stopping.choose(view.pursuit.schedule, view.at + view.period, fleet, estimate, now, fencing)
    spare, robot, name = later.spare
    if spare >= 0.0:
        return []
    at_once = stopping.choose(view.pursuit.schedule, view.at, fleet, estimate, now, fencing)
    if at_once.spare[0] <= spare + SHORT:
        return []
    return [rules.keep_out_unavoidable(settings, fleet.names[robot], name, -spare)]


def _troubled(view: View) -> bool:
    """Whether some robot does not do as planned; while all do, planned configurations are kept by a stop in step."""
    estimate, progress = view.estimate, view.settings.progress
    late = view.pursuit.progress.lag.max() > progress.dead_band or estimate.speed_factor.min() < _TROUBLE
    astray = estimate.runs_on.any() or estimate.astray.max() > _ASTRAY
    return bool(late or astray or estimate.growth.max() > SHORT)


def _names(fleet: Fleet, pair: tuple[int, int]) -> tuple[str, str]:
    return fleet.names[pair[0]], fleet.names[pair[1]]
