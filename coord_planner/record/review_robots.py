# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Which topics of a recording belong to which robot: guessed by pattern, told, and correctable."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence

import attrs
import numpy as np

from ..errors import SettingsError
from .bag_content import POSE_KINDS, Content, Poses

TRUTH = "simulated_state"  # where a simulator of ours tells the true motion of the turning point
_TRANSFORM = "tf:"
_OFTEN = 0.25  # part of the most frequent source's messages below which a source is too rare to be preferred
# Words of which the name of a pose topic is made, and which therefore name no robot; among them the usual short name
# of a method, adaptive Monte Carlo localisation.
_POSE_WORDS = re.compile(
    r"(odom|pose|state|truth|filtered|fused|locali[sz]|amcl|tf|position|base|footprint|link|local|global)"
)


@attrs.frozen
class RobotTopics:
    """Where one robot's data come from. Topics are "" where there are none.

    Attributes:
        poses: its poses, as read. source: topic of the poses, or ``tf:FRAME``.
        others: further sources of poses that were not taken.
    """

    name: str
    poses: Poses
    source: str
    others: tuple[str, ...] = ()
    commands: str = ""
    curvature: str = ""
    plan: str = ""


def assign(content: Content, names: Sequence[str] = (), given: Mapping[str, str] | None = None) -> list[RobotTopics]:
    """The robots of a recording, by name.

    Args:
        names: of a parameter file; others are then left out. given: source by robot, instead of guessing; only these
            robots are then looked at.

    Raises:
        SettingsError: a given source is not in the recording, or none of the names is.
    """
    sources = _sources(content)
    chosen = _given(sources, given) if given else _guess(sources, names)
    if names and not chosen and sources:
        raise SettingsError("none of its robots is in the recording", key="robots.names",
                            allowed=f"robots whose poses are there, or --robot NAME=TOPIC; there are {_some(sources)}")
    named: dict[str, list[str]] = {}
    for source in sources:
        named.setdefault(_named(source, sources, names)[0], []).append(source)
    by_robot = {name: _with_topics(content, name, sources[source], source, named.get(name, []))
                for name, source in chosen.items()}
    return [by_robot[name] for name in (names or sorted(by_robot, key=_natural)) if name in by_robot]


def _natural(name: str) -> list[tuple[int, str]]:
    """So that robot_10 comes after robot_9."""
    return [(int(part), "") if part.isdigit() else (-1, part) for part in re.split(r"(\d+)", name)]


def _some(names: Iterable[str]) -> str:
    listed = sorted(names)
    return ", ".join(listed[:12]) + (f" and {len(listed) - 12} more" if len(listed) > 12 else "")


def _sources(content: Content) -> dict[str, Poses]:
    """Everything that could be the pose of a robot, by topic or ``tf:FRAME``."""
    found = {name: poses for name, poses in content.poses.items() if len(poses.table)}
    frames = content.transforms
    leaves = set(frames) - {poses.frame for poses in frames.values()}
    bases = [frame for frame in frames if frame.rsplit("/", 1)[-1] in ("base_link", "base_footprint")]
    for frame in bases or sorted(leaves):
        if not any(_beneath(frame, other, frames) for other in bases if other != frame):
            found[_TRANSFORM + frame] = _resolved(frame, frames)
    return found


def _beneath(frame: str, other: str, frames: Mapping[str, Poses]) -> bool:
    """Whether a frame hangs below another one, so that it is a further frame of the same robot."""
    seen = set()
    while frame in frames and frame not in seen:
        seen.add(frame)
        frame = frames[frame].frame
        if frame == other:
            return True
    return False


def _resolved(frame: str, frames: Mapping[str, Poses]) -> Poses:
    """The poses of a frame in the root of its tree, at the stamps of the link that moves most often."""
    chain: list[Poses] = []
    at = frame
    while at in frames and frames[at] not in chain:
        chain.append(frames[at])
        at = frames[at].frame
    busiest = max(chain, key=lambda link: len(link.table)).table.array()
    x, y, heading = np.zeros(len(busiest)), np.zeros(len(busiest)), np.zeros(len(busiest))
    for link in chain:
        dx, dy, turn = _at(link.table.array(), busiest[:, 1])
        x, y = dx + np.cos(turn) * x - np.sin(turn) * y, dy + np.sin(turn) * x + np.cos(turn) * y
        heading = turn + heading
    made = Poses(_TRANSFORM + frame, chain[0].kind, at, frame)
    for row in zip(busiest[:, 0], busiest[:, 1], x, y, heading):
        made.table.add(*(float(value) for value in row), np.nan, np.nan)
    return made


def _at(rows: np.ndarray, stamps: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A transform at stamps, between those that were sent; one that was sent once always holds."""
    known = rows[np.isfinite(rows[:, 4])]
    if not len(known):
        return (np.full(len(stamps), np.nan),) * 3
    if not np.isfinite(known[:, 1]).all():  # the last word of what has no stamps
        x, y, heading = (np.full(len(stamps), value) for value in known[-1, 2:5])
        return x, y, heading
    known = known[np.argsort(known[:, 1], kind="stable")]
    columns = known[:, 2], known[:, 3], np.unwrap(known[:, 4])
    x, y, heading = (np.interp(stamps, known[:, 1], column) for column in columns)
    return x, y, heading


def _given(sources: Mapping[str, Poses], given: Mapping[str, str]) -> dict[str, str]:
    for name, source in given.items():
        if source not in sources:
            raise SettingsError(f"no poses come from {source!r}", key=f"--robot {name}", allowed=_some(sources))
    return dict(given)


def _guess(sources: Mapping[str, Poses], names: Sequence[str]) -> dict[str, str]:
    """Source by robot, of the patterns that fit.

    Best is one in a common frame that is nobody's own odometry's, for the most robots, often enough, of the best kind.
    """
    patterns: dict[str, dict[str, str]] = {}
    for source in sources:
        name, pattern = _named(source, sources, names)
        if not names or name in names:
            patterns.setdefault(pattern, {})[name] = source
    chosen: dict[str, str] = {}
    for pattern in sorted(patterns, key=lambda p: _rank(p, patterns[p], sources), reverse=True):
        for name, source in patterns[pattern].items():
            chosen.setdefault(name, source)
    return chosen


def _named(source: str, sources: Mapping[str, Poses], names: Sequence[str]) -> tuple[str, str]:
    """The robot that a source is named after, and the pattern that it follows."""
    prefix = _TRANSFORM if source.startswith(_TRANSFORM) else "/"
    parts = source.removeprefix(prefix).strip("/").split("/")
    for place, part in enumerate(parts):
        if part in names:
            return part, _pattern(prefix, parts, place)
    places = [n for n in range(len(parts)) if n < len(parts) - 1 or not _POSE_WORDS.search(parts[n])]
    if not places:
        return _inside(parts[-1], prefix)
    alike = Counter(_pattern(prefix, other.removeprefix(prefix).strip("/").split("/"), place)
                    for other in sources if other.startswith(prefix)
                    for place in places if place < len(other.removeprefix(prefix).strip("/").split("/")))
    place = max(places, key=lambda n: (alike[_pattern(prefix, parts, n)], -n))
    return parts[place], _pattern(prefix, parts, place)


def _pattern(prefix: str, parts: Sequence[str], place: int) -> str:
    return prefix + "/".join("{name}" if n == place else part for n, part in enumerate(parts))


def _inside(part: str, prefix: str) -> tuple[str, str]:
    """A name within the only part of a topic, such as mower_1 in mower_1_odom; ``robot`` when there is none."""
    words = [word for word in part.split("_") if word]
    own = [word for word in words if not _POSE_WORDS.search(word)]
    if not own:
        return "robot", prefix + part
    return "_".join(own), prefix + part.replace("_".join(own), "{name}")


def _rank(pattern: str, robots: Mapping[str, str], sources: Mapping[str, Poses]) -> tuple[int, ...]:
    frames = {sources[source].frame for source in robots.values()}
    kinds = [POSE_KINDS.index(sources[source].kind) if sources[source].kind in POSE_KINDS else len(POSE_KINDS)
             for source in robots.values()]
    comparable = len(robots) == 1 or (len(frames) == 1 and not any("odom" in frame for frame in frames))
    often = max(len(poses.table) for poses in sources.values())
    counts = [len(sources[source].table) for source in robots.values()]
    return (comparable, len(robots), TRUTH in pattern, min(counts) >= _OFTEN * often, -max(kinds), sum(counts))


def _with_topics(content: Content, name: str, poses: Poses, source: str, named: Sequence[str]) -> RobotTopics:
    """The topics of a robot; ``named``: all sources of poses that carry its name."""
    def of(topics: Iterable[str], *wanted: str) -> str:
        own = [topic for topic in topics if name in re.split(r"[/:]", topic) or topic.startswith(f"/{name}_")]
        ranked = [topic for word in wanted for topic in own if word in topic.rsplit("/", 1)[-1]] + (
            own if "" in wanted else [])
        return next(iter(ranked), "")

    single = name == "robot"
    commands = [topic for topic, found in content.commands.items() if len(found.table)]
    plans = [topic for topic, found in content.plans.items() if found]
    return RobotTopics(
        name, poses, source, tuple(sorted(other for other in named if other != source)),
        commands[0] if single and len(commands) == 1 else of(commands, "cmd_vel", "command", "cmd", ""),
        of(content.numbers, "curvature"),
        plans[0] if single and len(plans) == 1 else of(plans, "planned_path", "local_plan", "plan", "path"),
    )
