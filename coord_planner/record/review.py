# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What happened in a recording: the figures that ``coord-planner review`` prints and its page shows.

Every time is in seconds since the first message of the recording.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Optional

import attrs

from .. import config
from . import bag_content, review_delays, review_limits
from .metrics import plain
from .nearness import Nearness, nearness
from .review_fleet import FleetRecord, fleet_record
from .review_turns import Turn, as_values, find_turns


@attrs.frozen
class Review:
    """A recording with its turns and figures.

    Attributes:
        record: the fleet in it. near: its clearances. turns: found in it. figures: everything, as plain JSON values.
    """

    record: FleetRecord
    near: Nearness
    turns: tuple[Turn, ...]
    figures: dict[str, Any]

    @property
    def damaged(self) -> bool:
        """Whether something that was recorded could not be read."""
        return bool(self.figures["losses"])


def review(
    path: str | Path, configuration: Optional[config.Configuration] = None, *, from_s: Optional[float] = None,
    to_s: Optional[float] = None, robots: Mapping[str, str] | None = None,
    progress: Callable[[float], None] = lambda _part: None,
) -> Review:
    """Review a recording, or a window of it in seconds since its first message.

    Args:
        configuration: footprints and rules; those in the bag, if it has any, when left out.
        robots: source of the poses by robot (a topic, or ``tf:FRAME``), instead of guessing.
        progress: called now and then with the part of the recording that is read.

    Raises:
        SettingsError: there is no recording, or no robot in it that can be followed.
    """
    content = bag_content.read(path, from_s, to_s, progress)
    record = fleet_record(content, configuration, robots)
    near = nearness(record.run)
    turns = tuple(find_turns(record, near))
    return Review(record, near, turns, _figures(record, near, turns, whole=from_s is None and to_s is None))


def _figures(record: FleetRecord, near: Nearness, turns: tuple[Turn, ...], whole: bool) -> dict[str, Any]:
    content, run, names = record.content, record.run, record.run.fleet.names
    smallest = int(near.clearance.argmin()) if len(near.clearance) else 0
    pair = [names[k] for k in near.pair[smallest]] if len(near.pair) and near.pair[smallest][0] >= 0 else None
    rules = record.configuration
    figures = {
        "recording": str(content.recording.path), "duration_s": content.duration,
        "messages_read": content.read, "messages_expected": content.recording.expected if whole else None,
        "losses": losses(content, whole), "notes": [*record.notes, *_no_footprints(record)],
        "robots": {robot.name: _robot(record, row) for row, robot in enumerate(record.robots)},
        "edges": [list(edge) for edge in run.edges],
        "parameters": None if rules is None else rules.file,
        "clearance_between": "reported points" if rules is None else "footprints",
        "min_clearance_m": near.smallest, "min_clearance_pair": pair,
        "min_clearance_s": float(run.times[smallest]) if pair else None,
        "min_clearance_allowed_m": run.min_clearance, "contacts": None if rules is None else near.contacts,
        "turns": [as_values(turn, names) for turn in turns],
        "limits": review_limits.limits(record), "commands_outside_limits": review_limits.commands_outside(record),
        "stops": review_delays.stops(record), "gaps": review_delays.gaps(record),
        "lateness": review_delays.lateness(record),
        "planned_against_driven": review_delays.planned_against_driven(record),
        "warnings": [
            {"code": caution.code, "robot": caution.subject, "level": caution.level, "first_s": first, "last_s": last,
             "text": caution.text} for first, last, caution in run.cautions
        ],
        "events": [{"at_s": when, "text": text} for when, text in run.events],
        "topics": {name: {"type": kind, "messages": count} for name, (kind, count) in sorted(content.topics.items())},
    }
    return {key: plain(value) for key, value in figures.items()}


def _robot(record: FleetRecord, row: int) -> dict[str, Any]:
    """Where a robot's data come from, and how its motion was worked out."""
    robot, moved = record.robots[row], record.robots[row].motion
    return {
        "poses_from": robot.topics.source, "type": robot.topics.poses.kind, "frame": robot.topics.poses.frame,
        "not_taken": list(robot.topics.others), "commands_from": robot.topics.commands or None,
        "plans_from": robot.topics.plan or None, "poses": len(moved.times), "spacing_s": moved.spacing,
        "irregular": moved.irregular, "headings_from": moved.headings_from, "rates_from": moved.rates_from,
        "smoothing_s": moved.window, "rate_sd_rad_per_s": moved.rate_sd, "position_sd_m": moved.position_sd,
        "pose_jumps_s": list(moved.jumps), "stale_poses": moved.stale, "stray_poses": moved.strays,
        "motion": motion_in_words(record, row),
    }


def motion_in_words(record: FleetRecord, row: int) -> str:
    """How speed, turn rate and curvature of a robot were worked out."""
    moved = record.robots[row].motion
    sampled = f"poses every {moved.spacing:.3g} s"
    if moved.irregular > 1.5:
        sampled += f", irregularly (long pauses are {moved.irregular:.1f} times the short ones)"
    if moved.rates_from == "twist":
        return f"{sampled}; speed and turn rate as the odometry tells them, which agrees with its poses"
    reasons = {"that repeat the one before while it drives on": moved.stale, "far off their neighbours": moved.strays}
    left_out = [f"{count} {reason}" for reason, count in reasons.items() if count]
    if left_out:
        sampled += f"; left out: {' and '.join(left_out)}"
    way = "the shape of the way, forward driving taken for granted" if moved.headings_from == "path" else "poses"
    return (f"{sampled}; speed and turn rate from {way}: parabolas over {moved.window:.2g} s, "
            f"turn rate good to {moved.rate_sd:.2g} rad/s")


def losses(content: bag_content.Content, whole: bool) -> list[str]:
    """What was recorded and could not be read, in words."""
    found = list(content.recording.losses)
    expected = content.recording.expected
    if whole and expected is not None and expected != content.read:
        what = "are missing" if content.read < expected else "are more than it says"
        found.append(f"{abs(expected - content.read)} of {expected} messages {what}")
    found += [f"{count} messages on {topic} could not be unpacked" for topic, count in content.unpackable.items()]
    found += [f"{content.topics[topic][1]} messages on {topic} are of the type {kind}, which neither the recording nor "
              "ROS 2 defines" for topic, kind in content.unknown.items()]
    if not content.read and not found:
        found.append("the recording holds no message")
    return found


def _no_footprints(record: FleetRecord) -> list[str]:
    if record.configuration is not None:
        return []
    return ["no footprints and rules are known: clearances are distances between the reported points, and nothing is "
            "held against a limit; give the parameter file with --params"]
