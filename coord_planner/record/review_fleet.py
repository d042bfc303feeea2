# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A recording as a Run: every robot on common times, with what the planner said when it was recorded."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any, Optional

import attrs
import numpy as np
from scipy.interpolate import CubicHermiteSpline

from .. import config
from ..core.fleet import Fleet, Footprint, Robot
from ..core.graph import NeighbourGraph
from ..core.settings import SiteRules
from ..errors import SettingsError
from ..trial.run import Run, RunFrame
from . import review_warnings
from .bag_clock import Clock
from .bag_content import Content, Plan
from .bag_write import PARAMETERS_KEY
from .review_motion import Motion, curvature, motion
from .review_robots import TRUTH, RobotTopics, assign

_ALIKE = 0.9  # part of the stamps that robots must share for no pose to be interpolated
_FINEST = 0.02  # seconds between common times
_POINT = Footprint(1e-6, 1e-6)  # of a robot whose footprint nobody told


@attrs.frozen
class RecordedPlan:
    """A plan of one robot on the common time, seconds.

    Attributes:
        received, stamp: when it came, and what it is stamped with (alike for all robots of a plan).
        rows: due (NaN where not told), x, y, heading; shape (K, 4).
    """

    received: float
    stamp: float
    rows: np.ndarray


@attrs.frozen
class Reviewed:
    """One robot of a recording.

    Attributes:
        topics: where its data come from. motion: how it moved. late: receipt minus stamp of its poses, seconds, (S,).
        commands: times (s), speeds and curvatures of what was commanded, shape (C, 3). commands_late: seconds, (C,).
        plans: in the order in which they came.
    """

    name: str
    topics: RobotTopics
    motion: Motion
    late: np.ndarray
    commands: np.ndarray
    commands_late: np.ndarray
    plans: tuple[RecordedPlan, ...]


@attrs.frozen
class FleetRecord:
    """A recording, as a fleet.

    Attributes:
        content: what was read. clock: its time. configuration: footprints, limits and rules, where they are known.
        robots: those that could be followed, in the order of ``run.fleet``. run: all of them on common times.
        notes: what a reader should know about the data, in words.
    """

    content: Content
    clock: Clock
    configuration: Optional[config.Configuration]
    robots: tuple[Reviewed, ...]
    run: Run
    notes: tuple[str, ...]


def fleet_record(
    content: Content, configuration: Optional[config.Configuration], given: Mapping[str, str] | None = None
) -> FleetRecord:
    """Bring everything in a recording together.

    Args:
        configuration: of a parameter file; the bag's own parameters when left out, if it has any.
        given: source of the poses by robot, instead of guessing.

    Raises:
        SettingsError: a robot or source was named that is not in the recording, or none can be followed.
    """
    notes: list[str] = []
    if configuration is None:
        configuration = _own_parameters(content, notes)
    assigned = assign(content, configuration.fleet.names if configuration else (), given)
    clock = _clock(content, assigned)
    made = {topics.name: _reviewed(content, clock, topics, configuration) for topics in assigned}
    robots = [robot for robot in made.values() if robot is not None]
    lost = [name for name, robot in made.items() if robot is None]
    if lost:
        notes.append(f"{', '.join(lost)}: fewer than three usable poses, left out")
    if not robots:
        raise SettingsError(
            "no robot can be followed in this recording", file=str(content.recording.path),
            allowed="odometry (nav_msgs/Odometry), poses (geometry_msgs/PoseStamped or PoseWithCovarianceStamped) or "
            f"transforms of at least one robot; it holds {_held(content)}",
        )
    run = _run(content, clock, configuration, robots)
    notes += [*clock.notes, *_frames_notes(robots)]
    return FleetRecord(content, clock, configuration, tuple(robots), run, tuple(dict.fromkeys(notes)))


def _own_parameters(content: Content, notes: list[str]) -> Optional[config.Configuration]:
    text = content.recording.custom.get(PARAMETERS_KEY)
    if text is None:
        return None
    try:
        return config.from_parameters(json.loads(text), "the parameters in the bag")
    except (ValueError, SettingsError) as error:
        notes.append(f"the parameters in the bag cannot be used: {error}")
        return None


def _held(content: Content) -> str:
    held = [f"{topic} ({kind})" for topic, (kind, _) in sorted(content.topics.items())]
    return (", ".join(held[:8]) + (f" and {len(held) - 8} more topics" if len(held) > 8 else "")) or "no topic at all"


def _clock(content: Content, assigned: Sequence[RobotTopics]) -> Clock:
    streams = {topics.source: topics.poses.table.array()[:, :2] for topics in assigned}
    for topics in assigned:
        if topics.commands:
            streams[topics.commands] = content.commands[topics.commands].table.array()[:, :2]
    if len(content.clock):
        streams["/clock"] = content.clock.array()
    return Clock(streams)


def _reviewed(content: Content, clock: Clock, topics: RobotTopics, configuration: Optional[config.Configuration]
              ) -> Optional[Reviewed]:
    table = topics.poses.table.array()
    placed = clock.place(topics.source, table[:, :2])
    connection = configuration.connections.get(topics.name) if configuration else None
    if connection is not None and TRUTH not in topics.source:
        ahead = connection.pose_offset_x
        table[:, 2] -= ahead * np.cos(np.nan_to_num(table[:, 4]))
        table[:, 3] -= ahead * np.sin(np.nan_to_num(table[:, 4]))
    moved = motion(placed, table)
    if moved is None:
        return None
    commands, late = _commands(content, clock, topics, connection)
    plans = tuple(_plan(clock, plan) for plan in content.plans.get(topics.plan, ()))
    return Reviewed(topics.name, topics, moved, placed.late, commands, late, plans)


def _plan(clock: Clock, plan: Plan) -> RecordedPlan:
    """A plan on the common time. Plans are made for the future: their stamps are moved as those of now are."""
    now = clock.received(np.array([plan.received]))
    received = float(now.times[0])
    shift = float(clock.shifts[now.stretch[0]]) if len(clock.shifts) else 0.0
    rows = plan.rows + np.array([shift, 0.0, 0.0, 0.0])
    return RecordedPlan(received, plan.stamp + shift if math.isfinite(plan.stamp) else received, rows)


def _commands(content: Content, clock: Clock, topics: RobotTopics, connection: Optional[config.Connection]
              ) -> tuple[np.ndarray, np.ndarray]:
    if not topics.commands:
        return np.zeros((0, 3)), np.zeros(0)
    rows = content.commands[topics.commands].table.array()
    stamped = np.isfinite(rows[:, 1]).any()
    placed = clock.place(topics.commands, rows[:, :2]) if stamped else clock.received(rows[:, 0])
    speeds, turn_rates, steering = rows[:, 2], rows[:, 3], rows[:, 4]
    moving = np.abs(speeds) > 1e-9
    curvatures = np.where(moving, turn_rates / np.where(moving, speeds, 1.0), np.nan)
    if connection is not None and connection.wheelbase > 0.0:
        curvatures = np.where(np.isfinite(steering), np.tan(steering) / connection.wheelbase, curvatures)
    told = content.numbers[topics.curvature].table.array() if topics.curvature else np.zeros((0, 2))
    if len(told):
        before = np.searchsorted(told[:, 0], rows[:, 0] + 1e-4, side="right") - 1
        curvatures = np.where(moving | (before < 0), curvatures, told[np.clip(before, 0, None), 1])
    order = np.argsort(placed.times, kind="stable")
    return np.column_stack([placed.times, speeds, curvatures])[order], placed.late[order]


def _run(content: Content, clock: Clock, configuration: Optional[config.Configuration], robots: Sequence[Reviewed]
         ) -> Run:
    names = tuple(robot.name for robot in robots)
    known = {robot.name: robot for robot in configuration.fleet.robots} if configuration else {}
    fleet = Fleet(tuple(known.get(name) or Robot(name, footprint=_POINT) for name in names))
    times, poses, speeds, rates = common(robots)
    said = review_warnings.Said(content, clock, names)
    command_times, commanded = _shared_commands(robots)
    moving = np.flatnonzero((np.abs(np.nan_to_num(speeds)) > 0.02).any(axis=0))
    began, ended = (float(times[moving[0]]), float(times[moving[-1]])) if len(moving) else (math.nan, math.nan)
    return Run(
        fleet=fleet, edges=_edges(content, configuration, names), edge_changes=_edge_changes(content, clock, names),
        manoeuvre=said.manoeuvre or "recording", times=times,
        poses=poses, speeds=speeds, curvatures=np.stack([curvature(*pair) for pair in zip(speeds, rates)]),
        command_times=command_times, commanded=commanded, end_poses=said.ends,
        min_clearance=configuration.settings.site_rules.min_clearance if configuration else math.nan,
        state=said.state, completed=said.completed, began=began, ended=ended, cautions=said.cautions,
        tick_ms=np.zeros(0), wall_time=0.0, frames=_frames(robots, said), events=said.events, facts={},
        site_rules=configuration.settings.site_rules if configuration else SiteRules(),
    )


def _edges(content: Content, configuration: Optional[config.Configuration], names: tuple[str, ...]
           ) -> tuple[tuple[str, str, float], ...]:
    """The first graph that was recorded; else that of the parameters."""
    told: list[Any] = [list(edge) for edge in configuration.edges] if configuration else []
    for _, edges in content.neighbours[:1]:
        told = edges
    return _sound(told, names)


def _edge_changes(content: Content, clock: Clock, names: tuple[str, ...]
                  ) -> tuple[tuple[float, tuple[tuple[str, str, float], ...]], ...]:
    """Graphs that were recorded after the first one, on the common time."""
    times = clock.received(np.array([received for received, _ in content.neighbours])).times[1:]
    return tuple((float(time), _sound(edges, names)) for time, (_, edges) in zip(times, content.neighbours[1:]))


def _sound(told: list[Any], names: tuple[str, ...]) -> tuple[tuple[str, str, float], ...]:
    """The edges between robots that are known; none where what was recorded is no graph."""
    try:
        kept = tuple((str(edge[0]), str(edge[1]), float(edge[2]) if len(edge) > 2 else 1.0) for edge in told
                     if edge[0] in names and edge[1] in names)
        return NeighbourGraph(names, kept).edges
    except (SettingsError, TypeError, ValueError, LookupError):
        return ()


def common(robots: Sequence[Reviewed]) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Common times (S,), poses (N, S, 3), speeds and turn rates (N, S); NaN where a robot was not heard of.

    Where the robots share most of their stamps these are the times, and what was recorded then stays as it is; else
    they are as far apart as the most frequent poses. Between poses positions are interpolated by cubics that keep the
    velocities, everything else straight; a moment of NaN stands where nobody was heard of.
    """
    times = _common_times(robots)
    each = [_resampled(robot.motion, times) for robot in robots]
    return times, np.stack([e[:, :3] for e in each]), np.stack([e[:, 3] for e in each]), np.stack(
        [e[:, 4] for e in each])


def _common_times(robots: Sequence[Reviewed]) -> np.ndarray:
    stamps = [np.round(robot.motion.times, 6) for robot in robots]
    step = max(min(robot.motion.spacing for robot in robots), _FINEST)
    heard = _heard(robots, step)
    shared = stamps[0]
    for others in stamps[1:]:
        shared = np.intersect1d(shared, others)
    if len(shared) >= _ALIKE * max(len(one) for one in stamps):
        times = np.unique(np.concatenate(stamps))
    else:
        times = np.concatenate([first + step * np.arange(int((last - first) / step) + 1) for first, last in heard])
    silent = [last + step for _, last in heard[:-1]]
    return np.unique(np.concatenate([times, silent]))


def _heard(robots: Sequence[Reviewed], step: float) -> list[tuple[float, float]]:
    """Stretches of time in which at least one robot was heard of, further apart than two steps."""
    parts = []
    for robot in robots:
        cuts = np.flatnonzero(np.diff(robot.motion.part)) + 1
        parts += [(float(own[0]), float(own[-1])) for own in np.split(robot.motion.times, cuts)]
    merged: list[tuple[float, float]] = []
    for first, last in sorted(parts):
        if merged and first <= merged[-1][1] + 2 * step:
            merged[-1] = merged[-1][0], max(merged[-1][1], last)
        else:
            merged.append((first, last))
    return merged


def _resampled(motion: Motion, times: np.ndarray) -> np.ndarray:
    """x, y, heading, speed and turn rate at times, shape (S, 5); NaN outside the parts."""
    out = np.full((len(times), 5), np.nan)
    for number in range(int(motion.part[-1]) + 1):
        rows = motion.part == number
        own = motion.times[rows]
        inside = (times >= own[0] - 1e-6) & (times <= own[-1] + 1e-6)
        if not inside.any():
            continue
        at = np.clip(times[inside], own[0], own[-1])
        if len(own) > 1:
            out[inside, :2] = CubicHermiteSpline(own, motion.poses[rows, :2], motion.velocity[rows])(at)
        else:
            out[inside, :2] = motion.poses[rows, :2]
        for column, values in ((2, motion.poses[rows, 2]), (3, motion.speeds[rows]), (4, motion.rates[rows])):
            out[inside, column] = np.interp(at, own, values)
    return out


def _shared_commands(robots: Sequence[Reviewed]) -> tuple[np.ndarray, np.ndarray]:
    """Commands that every robot got at the same time, (C,) and (N, C, 2); none where they are not sent together."""
    stamps = [np.round(robot.commands[:, 0], 6) for robot in robots]
    shared = stamps[0]
    for others in stamps[1:]:
        shared = np.intersect1d(shared, others)
    if not len(shared) or len(shared) < _ALIKE * max(len(one) for one in stamps):
        return np.zeros(0), np.zeros((len(robots), 0, 2))
    rows = np.stack([robot.commands[np.searchsorted(one, shared), 1:] for robot, one in zip(robots, stamps)])
    return shared, rows


def _frames(robots: Sequence[Reviewed], said: review_warnings.Said) -> tuple[RunFrame, ...]:
    """Plans that all robots have at a time, for the page."""
    tables = [{round(plan.stamp, 3): plan.rows for plan in robot.plans} for robot in robots]
    shared = sorted(set.intersection(*(set(table) for table in tables)))
    frames = []
    for when in shared:
        rows = [table[when] for table in tables]
        if len({len(one) for one in rows}) == 1:
            frames.append(RunFrame(when, said.rate(when), np.stack([one[:, 1:] for one in rows]), rows[0][:, 0]))
    return tuple(frames)


def _frames_notes(robots: Sequence[Reviewed]) -> list[str]:
    frames = {robot.topics.poses.frame for robot in robots}
    notes = []
    if len(frames) > 1:
        notes.append(f"the robots' poses are in different frames ({', '.join(sorted(frames))}): distances between them "
                     "mean nothing")
    elif len(robots) > 1 and any("odom" in frame for frame in frames):
        notes.append(f"the poses are in the frame {frames.pop()!r}, which usually is each robot's own: distances "
                     "between robots mean something only if they share it")
    return notes
