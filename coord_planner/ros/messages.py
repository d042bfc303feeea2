# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Messages as they come in: which are believed, which are ignored, and how that is counted.

Nothing here imports ROS: a message is anything with the fields of its definition (geometry_msgs, nav_msgs,
std_msgs, from memory), so that every check is tested without a middleware.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any, Optional

import attrs

from ..core.graph import NeighbourGraph
from ..core.messages import PoseSample
from ..core.settings import Poses
from ..errors import CoordPlannerError, SettingsError

LONGEST_TEXT = 100_000  # characters of JSON that are read at all
_LONGEST_WORDS = 400  # characters of what is told of an ignored message, whatever stood in it
_NEIGHBOURS_VERSION, _HEARTBEAT_VERSION = 1, 1
_LONGEST_NAME = 200


class IgnoredError(CoordPlannerError):
    """A message that is not used.

    Attributes:
        why: a few fixed words, the same for every message with this fault: what is counted.
        text: the figures and what to do about it. figure: the one that counts, where there is one.
    """

    def __init__(self, why: str, text: str, figure: float = math.nan) -> None:
        self.figure = figure
        self.why, self.text = why, text if len(text) <= _LONGEST_WORDS else f"{text[:_LONGEST_WORDS]}..."
        super().__init__(f"{why}: {self.text}")


@attrs.frozen
class Request:
    """What was asked for through ``~/request``; ``next``: after the manoeuvre under way."""

    id: str
    manoeuvre: str
    overrides: Mapping[str, float] = attrs.field(factory=dict)
    next: bool = False


@attrs.frozen
class Beat:
    """A heartbeat: which planner drives which robots.

    Attributes:
        fleet: name of the fleet. run: of this start of the planner; no two are the same. node: its full name.
        commands: full names of the topics that it sends commands on; None where the message does not say.
    """

    fleet: str
    run: str
    node: str = ""
    commands: Optional[frozenset[str]] = None

    def meets(self, other: Beat) -> bool:
        """Whether both command a robot of the same fleet."""
        if self.commands is None or other.commands is None:
            return self.fleet == other.fleet
        return bool(self.commands & other.commands)

    def __str__(self) -> str:
        return f"{self.node or 'another planner'} (fleet {self.fleet}, run {self.run})"


@attrs.frozen
class Ignored:
    """The last message of a source that was not used: when, on the caller's clock, and why (see IgnoredError)."""

    when: float
    why: str
    text: str
    figure: float


@attrs.define
class Tally:
    """What came from one source: how many messages were used, how many ignored and why the last one was."""

    used: int = 0
    ignored: dict[str, int] = attrs.field(factory=dict)
    last: Optional[Ignored] = None

    def ignore(self, error: IgnoredError, now: float, quiet: float) -> bool:
        """Count an ignored message; True when it is news (first of its kind, or after ``quiet`` seconds of none)."""
        news = error.why not in self.ignored or not self.recent(now, quiet)
        self.ignored[error.why] = self.ignored.get(error.why, 0) + 1
        self.last = Ignored(now, error.why, str(error), error.figure)
        return news

    def recent(self, now: float, quiet: float) -> bool:
        """Whether the last ignored message is at most so many seconds old."""
        return self.last is not None and now - self.last.when <= quiet

    @property
    def total_ignored(self) -> int:
        return sum(self.ignored.values())


@attrs.define
class Tallies:
    """Tallies by source: a robot's name, or the name of a topic."""

    quiet: float = 5.0  # seconds without a bad message after which the next one is news
    by_source: dict[str, Tally] = attrs.field(factory=dict)

    def of(self, source: str) -> Tally:
        """The tally of a source, made when it is first asked for."""
        return self.by_source.setdefault(source, Tally())

    def use(self, source: str) -> None:
        """Count a message that was used."""
        self.of(source).used += 1

    def ignore(self, source: str, error: IgnoredError, now: float) -> bool:
        """Count one that was not; True when that is worth telling at once."""
        return self.of(source).ignore(error, now, self.quiet)

    def begin_anew(self) -> None:
        """Times heard of so far mean nothing any more; the counts stay."""
        for tally in self.by_source.values():
            tally.last = None

    def troubled(self, source: str, now: float) -> bool:
        """Whether the last ignored message is recent."""
        return self.of(source).recent(now, self.quiet)


def seconds(stamp: Any) -> float:
    """A builtin_interfaces/Time in seconds."""
    return float(stamp.sec) + 1e-9 * float(stamp.nanosec)


def heading(quaternion: Any) -> float:
    """Direction of the x axis seen from above, radians, anticlockwise.

    Raises:
        IgnoredError: not finite, or not a rotation (its length is not 1).
    """
    x, y, z, w = (float(getattr(quaternion, field)) for field in "xyzw")
    length = math.sqrt(x * x + y * y + z * z + w * w)
    if not math.isfinite(length):
        raise IgnoredError("not a number", f"the orientation is ({x:g}, {y:g}, {z:g}, {w:g}); mend what sends it")
    if abs(length - 1.0) > 0.05:
        raise IgnoredError("not a rotation",
                           f"the orientation's length is {length:.3g}, it must be 1; mend what sends it")
    return math.atan2(2.0 * (w * z + x * y), w * w + x * x - y * y - z * z)


def pose_sample(message: Any, source: str, *, frame: str, now: float, poses: Poses) -> PoseSample:
    """The pose in a message of a robot.

    Args:
        message: PoseStamped (source ``pose``), PoseWithCovarianceStamped or Odometry (any other source).
        frame: the fleet's frame. now: seconds on the clock of the stamps. poses: which stamps are used.

    Raises:
        IgnoredError: wrong frame, not a number, not a rotation, too old, or from the future.
    """
    given = message.header.frame_id
    if given != frame:
        raise IgnoredError("wrong frame",
                           f"the pose is in {_short(given)}, the fleet's frame is {frame!r}; "
                           f"{_frame_remedy(source, frame)}")
    stamp = checked_stamp(seconds(message.header.stamp), now, poses)
    pose = message.pose if source == "pose" else message.pose.pose
    x, y = float(pose.position.x), float(pose.position.y)
    if not (math.isfinite(x) and math.isfinite(y)):
        raise IgnoredError("not a number", f"the position is ({x:g}, {y:g}); mend what sends it")
    return PoseSample(stamp, x, y, heading(pose.orientation))


def hazard_point(message: Any, *, frame: str, now: float, expires: float) -> tuple[float, float]:
    """The point of a PointStamped on ``hazard``.

    Args:
        frame: the fleet's frame. now: seconds on the clock of the stamps. expires: age from which it is not used.

    Raises:
        IgnoredError: wrong frame, not a number, or too old.
    """
    given = message.header.frame_id
    if given != frame:
        raise IgnoredError("wrong frame", f"the hazard is in {_short(given)}, the fleet's frame is {frame!r}; "
                                          f"see that it is sent in {frame!r}")
    x, y = float(message.point.x), float(message.point.y)
    if not (math.isfinite(x) and math.isfinite(y)):
        raise IgnoredError("not a number", f"the point is ({x:g}, {y:g}); mend what sends it")
    age = now - seconds(message.header.stamp)
    if age > expires:
        raise IgnoredError("too old", f"stamped {age:.1f} s ago, hazard.expires is {expires:g} s; {_CLOCK_REMEDY}")
    return x, y


def checked_stamp(stamp: float, now: float, poses: Poses) -> float:
    """The stamp itself, if a pose with it may be used now.

    Raises:
        IgnoredError: older than ``poses.max_age`` or newer than ``poses.max_future``.
    """
    age = now - stamp
    if age > poses.max_age:
        raise IgnoredError("too old", f"stamped {age:.3f} s ago, poses.max_age is {poses.max_age:g} s; {_CLOCK_REMEDY}")
    if -age > poses.max_future:
        raise IgnoredError("from the future",
                           f"stamped {-age:.3f} s ahead, poses.max_future is {poses.max_future:g} s; {_CLOCK_REMEDY}",
                           -age)
    return stamp


_CLOCK_REMEDY = "synchronise the clocks, and see that use_sim_time is the same everywhere"


def _frame_remedy(source: str, frame: str) -> str:
    if source == "odometry":
        return (f"robots' own odometry frames cannot be compared: give a pose that is localised in {frame!r}"
                " (pose_source pose or pose_with_covariance, or tf where tf2_ros is installed)")
    return f"send it in {frame!r}, or set fleet.frame to the frame that all robots share"


def check_order(stamp: float, last: Optional[float]) -> None:
    """Refuse a pose that is older than the last one that was used; stamps in seconds.

    Raises:
        IgnoredError: it was overtaken.
    """
    if last is not None and stamp < last:
        raise IgnoredError("overtaken", f"stamped {last - stamp:.3f} s before the pose in use; "
                                        "see whether two nodes send it")


def parse_neighbours(text: str, names: tuple[str, ...], newest_stamp: float) -> tuple[NeighbourGraph, float]:
    """The neighbour graph in a ``neighbours`` message, and its stamp in seconds.

    Args:
        text: JSON ``{"version": 1, "stamp": s, "edges": [["mower_1", "mower_2", 1.0], ...]}``; weights may be left out.
        names: the fleet. newest_stamp: stamp of the graph in force, -inf when it came from the parameter file.

    Raises:
        IgnoredError: not such a text, a robot that is not in the fleet, or older than the one in force.
    """
    content = _json_object(text, {"version", "stamp", "edges"})
    if content.get("version") != _NEIGHBOURS_VERSION or isinstance(content["version"], bool):
        raise IgnoredError("unknown version",
                           f"version is {_short(content.get('version'))}, it must be {_NEIGHBOURS_VERSION}")
    stamp: Any = content.get("stamp")
    if not _is_number(stamp):
        raise IgnoredError("malformed", f"stamp is {_short(stamp)}, it must be seconds")
    edges = content.get("edges")
    if not isinstance(edges, list):
        raise IgnoredError("malformed", f"edges is {_short(edges)}, it must be a list")
    if stamp < newest_stamp:
        raise IgnoredError("overtaken", f"its stamp is {newest_stamp - stamp:.3f} s before the one in force")
    try:
        return NeighbourGraph(names, tuple(_edge(edge) for edge in edges)), float(stamp)
    except SettingsError as error:
        unknown = any(name not in names for edge in edges for name in edge[:2])
        raise IgnoredError("unknown robot" if unknown else "malformed", str(error)) from None


def _edge(edge: Any) -> tuple[str, str, float]:
    good = isinstance(edge, list) and len(edge) in (2, 3) and all(isinstance(name, str) for name in edge[:2])
    if not good or not all(_is_number(weight) for weight in edge[2:]):
        raise IgnoredError("malformed", f"edge {_short(edge)} must be [robot, robot] or [robot, robot, weight]")
    return edge[0], edge[1], float(edge[2]) if len(edge) == 3 else 1.0


def neighbours_text(graph: NeighbourGraph, stamp: float) -> str:
    """The message for a graph, as :func:`parse_neighbours` reads it."""
    edges = [list(edge) for edge in graph.edges]
    return json.dumps({"version": _NEIGHBOURS_VERSION, "stamp": stamp, "edges": edges})


def parse_request(text: str) -> Request:
    """What a ``~/request`` message asks for.

    Args:
        text: JSON ``{"id": .., "manoeuvre": name, "overrides": {key: number}, "when": "now" or "next"}``; the last
            two may be left out. Next: after the manoeuvre under way, in the place of what a sequence has next.

    Raises:
        IgnoredError: not such a text.
    """
    content = _json_object(text, {"id", "manoeuvre", "overrides", "when"})
    given = content.get("id")
    if isinstance(given, bool) or not isinstance(given, (str, int)) or given == "":
        raise IgnoredError("malformed", f"id is {_short(given)}, it must be a text or a whole number")
    name = content.get("manoeuvre")
    if not isinstance(name, str):
        raise IgnoredError("malformed", f"manoeuvre is {_short(name)}, it must be a name")
    overrides = content.get("overrides", {})
    if not isinstance(overrides, dict) or not all(_is_number(value) for value in overrides.values()):
        raise IgnoredError("malformed", f"overrides is {_short(overrides)}, it must hold a number for each key")
    when = content.get("when", "now")
    if when not in ("now", "next"):
        raise IgnoredError("malformed", f"when is {_short(when)}, it must be now or next")
    return Request(str(given), name, {key: float(value) for key, value in overrides.items()}, when == "next")


def heartbeat_text(beat: Beat) -> str:
    """The message for a heartbeat, as :func:`parse_heartbeat` reads it."""
    content = {"version": _HEARTBEAT_VERSION, "fleet": beat.fleet, "run": beat.run, "node": beat.node}
    if beat.commands is not None:
        content["commands"] = sorted(beat.commands)
    return json.dumps(content)


def parse_heartbeat(text: str) -> Beat:
    """The heartbeat in a ``~/heartbeat`` message.

    Args:
        text: JSON ``{"version": 1, "fleet": .., "run": .., "node": .., "commands": [topic, ...]}``; the last two may
            be left out.

    Raises:
        IgnoredError: not such a text.
    """
    content = _json_object(text, {"version", "fleet", "run", "node", "commands"})
    if content.get("version") != _HEARTBEAT_VERSION or isinstance(content["version"], bool):
        raise IgnoredError("unknown version",
                           f"version is {_short(content.get('version'))}, it must be {_HEARTBEAT_VERSION}")
    fleet, run, node = content.get("fleet"), content.get("run"), content.get("node", "")
    if not all(isinstance(word, str) and len(word) <= _LONGEST_NAME for word in (fleet, run, node)) or not run:
        raise IgnoredError("malformed", f"fleet, run and node must be names of at most {_LONGEST_NAME} characters")
    commands = content.get("commands")
    if commands is None:
        return Beat(str(fleet), str(run), str(node))
    if not isinstance(commands, list) or not all(isinstance(topic, str) for topic in commands):
        raise IgnoredError("malformed", f"commands is {_short(commands)}, it must be a list of topics")
    return Beat(str(fleet), str(run), str(node), frozenset(commands))


def _json_object(text: str, keys: set[str]) -> dict[str, Any]:
    if len(text) > LONGEST_TEXT:
        raise IgnoredError("malformed", f"{len(text)} characters, at most {LONGEST_TEXT} are read")
    try:
        content = json.loads(text, parse_constant=_no_constant)
    except (ValueError, RecursionError) as error:
        raise IgnoredError("malformed", f"not JSON ({error}): {_short(text)}") from None
    if not isinstance(content, dict):
        raise IgnoredError("malformed", f"{_short(text)} must be an object with {', '.join(sorted(keys))}")
    unknown = sorted(set(content) - keys)
    if unknown:
        raise IgnoredError("malformed", f"unknown key {_short(unknown[0])}; known: {', '.join(sorted(keys))}")
    return content


def _no_constant(word: str) -> float:
    raise ValueError(f"{word} is not a number")


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)


def _short(value: Any, longest: int = 80) -> str:
    shown = repr(value[:longest] if isinstance(value, (str, list)) else value)
    return shown if len(shown) <= longest else shown[: longest - 3] + "..."
