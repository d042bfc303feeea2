# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is going wrong, in plain words, with what the fleet does about it and the deferral to the site's rules."""

from __future__ import annotations

from collections.abc import Sequence
from enum import Enum

import attrs

from .messages import Caution, Level
from .settings import Settings
from .silence import Entering, Nearing


class Response(str, Enum):
    """What the fleet does."""

    GO_ON = "goes on"
    SLOW = "slows in step"
    TURN_AWAY = "turns away together"
    STOP = "stops, in step or apart, and is held until a person resumes"


@attrs.frozen
class Row:
    """One row of the table of rules."""

    code: str
    level: Level
    response: Response
    when: str


# Everything that is warned of, and what the fleet then does. The README shows this table; a test compares them.
TABLE = (
    Row(
        "pose invalid", Level.WARN, Response.GO_ON,
        "a pose holds something that is not a number; the last good one counts",
    ),
    Row(
        "pose old", Level.WARN, Response.GO_ON,
        "a pose is late; the robot is predicted and its footprint grows meanwhile",
    ),
    Row("pose old", Level.STALE, Response.STOP, "no pose for longer than poses.max_age"),
    Row("pose jumped", Level.ERROR, Response.STOP, "a pose lies further than poses.max_jump from where it must be"),
    Row(
        "pose frozen", Level.WARN, Response.GO_ON,
        "a pose repeats exactly while the robot is to drive; it counts as if none came",
    ),
    Row("pose unsteady", Level.WARN, Response.GO_ON, "poses scatter far more than the file says"),
    Row("clock offset", Level.WARN, Response.GO_ON, "stamps lie in the future; such poses are not used"),
    Row("clock jumped", Level.ERROR, Response.STOP, "the planner's own clock jumped"),
    Row(
        "graph changed", Level.WARN, Response.GO_ON,
        "an edge appeared or went; the rest of the manoeuvre is made anew",
    ),
    Row("graph split", Level.WARN, Response.GO_ON, "the graph falls apart and coupling.may_split allows it"),
    Row("graph split", Level.ERROR, Response.STOP, "the graph falls apart"),
    Row(
        "graph about to split", Level.WARN, Response.GO_ON,
        "the graph holds together by less than neighbours.warn_below",
    ),
    Row(
        "next part refused", Level.WARN, Response.GO_ON,
        "the next part of a sequence cannot be made; the fleet is held at the end of this one",
    ),
    Row(
        "predicted clearance short", Level.WARN, Response.GO_ON,
        "the plan cannot keep the smallest clearance everywhere",
    ),
    Row(
        "clearance breached", Level.ERROR, Response.STOP,
        "two robots, or a robot and a keep-out area, are nearer than the site allows",
    ),
    Row("keep-out ahead", Level.WARN, Response.GO_ON, "the plan cannot keep a robot out of an area everywhere"),
    Row(
        "keep-out ahead", Level.ERROR, Response.STOP,
        "driving on would make the stopping distance longer than the way to a keep-out area",
    ),
    Row(
        "free way short", Level.ERROR, Response.STOP,
        "driving on would make the stopping distance longer than the free way",
    ),
    Row(
        "limit reached for long", Level.WARN, Response.GO_ON,
        "a robot is at a limit and has nothing left for corrections",
    ),
    Row("robot not following", Level.WARN, Response.SLOW, "a robot falls behind; the others wait for it"),
    Row("robot not following", Level.ERROR, Response.STOP, "a robot is further behind than progress.max_lag"),
    Row(
        "robot astray", Level.WARN, Response.GO_ON,
        "a robot is faster than told, turns or slips aside, or moves when told to stand; its way to stop is watched",
    ),
    Row("robot not ready", Level.ERROR, Response.STOP, "a robot says that it must not be driven"),
    Row("robot silent", Level.STALE, Response.STOP, "a robot no longer says that it is ready"),
    Row("plan unfinished", Level.WARN, Response.GO_ON, "a plan was not finished in time; it keeps what it must"),
    Row("plan late", Level.WARN, Response.GO_ON, "a plan came too late or unusable; the last one is driven on"),
    Row("plan failed", Level.WARN, Response.GO_ON, "a tick gave no plan; the last one is driven on"),
    Row(
        "common curvature", Level.WARN, Response.GO_ON,
        "the last plan is too old or no longer keeps clear; everybody drives one curvature",
    ),
    Row(
        "plan failed", Level.ERROR, Response.STOP, "no new plan, and neither the last nor one curvature can be driven"
    ),
    Row("hazard known", Level.WARN, Response.GO_ON, "a hazard is known that nobody on the way comes near"),
    Row("hazard seen", Level.WARN, Response.TURN_AWAY, "a hazard is seen, and turning away from it is armed"),
    Row("hazard seen", Level.ERROR, Response.STOP, "a hazard is seen, or lies near the way, and nothing is armed"),
    Row(
        "silence unsafe", Level.WARN, Response.GO_ON,
        "robots that time out separately would come too near to each other or to a keep-out area",
    ),
    Row("other planner heard", Level.ERROR, Response.STOP, "another planner drives this fleet"),
    Row(
        "robot not joined", Level.WARN, Response.GO_ON,
        "a robot cannot join the running manoeuvre; it joins when the fleet is idle",
    ),
    Row("change refused", Level.ERROR, Response.STOP, "the rest of the manoeuvre cannot be kept under new settings"),
)


def response(caution: Caution) -> Response:
    """What the fleet does about a warning."""
    return _row(caution.code, caution.level).response


def _row(code: str, level: Level) -> Row:
    return next(row for row in TABLE if row.code == code and row.level is level)


def pose_invalid(settings: Settings, name: str) -> Caution:
    return _caution(settings, "pose invalid", name, Level.WARN, "its newest pose holds something that is not a number")


def pose_old(settings: Settings, name: str, age: float) -> Caution:
    allowed = settings.poses.max_age
    figures = f"last pose {age:.2f} s old, {allowed:g} s allowed" if age < 1e6 else "no pose yet"
    return _caution(settings, "pose old", name, Level.STALE if age > allowed else Level.WARN, figures)


def pose_jumped(settings: Settings, name: str) -> Caution:
    figures = f"its pose jumped by more than {settings.poses.max_jump:g} m"
    return _caution(settings, "pose jumped", name, Level.ERROR, figures)


def pose_frozen(settings: Settings, name: str, driven: float) -> Caution:
    figures = f"its pose repeats exactly although it must have driven {driven:.2f} m; it counts as if none came"
    return _caution(settings, "pose frozen", name, Level.WARN, figures)


def pose_unsteady(settings: Settings, name: str, times: float) -> Caution:
    figures = f"its poses scatter {times:.1f} times as much as poses.noise_xy and poses.noise_heading_deg say"
    return _caution(settings, "pose unsteady", name, Level.WARN, figures)


def clock_offset(settings: Settings, name: str, ahead: float) -> Caution:
    figures = f"its stamps lie {ahead:.2f} s in the future, {settings.poses.max_future:g} s allowed"
    return _caution(settings, "clock offset", name, Level.WARN, figures)


def clock_jumped(settings: Settings, by: float) -> Caution:
    return _caution(settings, "clock jumped", "", Level.ERROR, f"the planner's clock jumped by {by:.2f} s")


def graph_changed(settings: Settings, edges: int) -> Caution:
    return _caution(settings, "graph changed", "", Level.WARN, f"the neighbour graph has {edges} edges now")


def graph_split(settings: Settings, parts: Sequence[Sequence[str]]) -> Caution:
    words = " | ".join(" ".join(part) for part in parts)
    level = Level.WARN if settings.coupling.may_split else Level.ERROR
    return _caution(settings, "graph split", "", level, f"the neighbour graph falls into {len(parts)} parts: {words}")


def graph_thin(settings: Settings, holding: float) -> Caution:
    figures = f"second-smallest eigenvalue {holding:.3g}, {settings.neighbours.warn_below:g} is warned of"
    return _caution(settings, "graph about to split", "", Level.WARN, figures)


def next_refused(settings: Settings, part: str, reason: str) -> Caution:
    return _caution(settings, "next part refused", "", Level.WARN, f"{part} cannot follow: {reason}")


def clearance_short(settings: Settings, pair: Sequence[str], clearance: float) -> Caution:
    figures = f"predicted clearance {clearance:.2f} m, {settings.site_rules.min_clearance:g} m is the site's smallest"
    return _caution(settings, "predicted clearance short", " and ".join(pair), Level.WARN, figures)


def clearance_breached(settings: Settings, pair: Sequence[str], clearance: float) -> Caution:
    figures = f"clearance {clearance:.2f} m now, {settings.site_rules.min_clearance:g} m is the site's smallest"
    return _caution(settings, "clearance breached", " and ".join(pair), Level.ERROR, figures)


def keep_out_breached(settings: Settings, name: str, area: str, missing: float) -> Caution:
    return _caution(settings, "clearance breached", name, Level.ERROR, f"{missing:.2f} m too near to {area} now")


def keep_out_ahead(settings: Settings, name: str, area: str, missing: float) -> Caution:
    return _caution(settings, "keep-out ahead", name, Level.WARN, f"its plan comes {missing:.2f} m too near to {area}")


def keep_out_unavoidable(settings: Settings, name: str, area: str, missing: float) -> Caution:
    figures = f"a stop begun a tick later would end {missing:.2f} m too near to {area}"
    return _caution(settings, "keep-out ahead", name, Level.ERROR, figures)


def free_way_short(settings: Settings, pair: Sequence[str], clearance: float) -> Caution:
    figures = (
        f"a stop begun a tick later would leave {clearance:.2f} m, {settings.site_rules.min_clearance:g} m is the "
        "site's smallest"
    )
    return _caution(settings, "free way short", " and ".join(pair), Level.ERROR, figures)


def limit_reached(settings: Settings, name: str, limit: str, seconds: float) -> Caution:
    return _caution(settings, "limit reached for long", name, Level.WARN, f"at its {limit} for {seconds:.1f} s")


def not_following(settings: Settings, name: str, lag: float) -> Caution:
    most = settings.progress.max_lag
    figures = f"{lag:.2f} m behind its plan, {most:g} m at most"
    return _caution(settings, "robot not following", name, Level.ERROR if lag > most else Level.WARN, figures)


def too_slow(settings: Settings, name: str, factor: float) -> Caution:
    figures = f"reaches {100 * factor:.0f} % of its commanded speed"
    return _caution(settings, "robot not following", name, Level.WARN, figures)


def too_fast(settings: Settings, name: str, factor: float) -> Caution:
    return _caution(settings, "robot astray", name, Level.WARN, f"makes {100 * factor:.0f} % of its commanded speed")


def astray(settings: Settings, name: str, deviations: float) -> Caution:
    figures = (
        f"turns, slips aside, or moves on otherwise than it is told, by {deviations:.1f} times the scatter of poses "
        "and always one way"
    )
    return _caution(settings, "robot astray", name, Level.WARN, figures)


def not_ready(settings: Settings, name: str) -> Caution:
    return _caution(settings, "robot not ready", name, Level.ERROR, "not ready to be driven")


def silent(settings: Settings, name: str) -> Caution:
    return _caution(settings, "robot silent", name, Level.STALE, "no longer says that it is ready")


def other_planner(settings: Settings, who: str) -> Caution:
    return _caution(settings, "other planner heard", "", Level.ERROR, f"{who} drives this fleet too")


def plan_unfinished(settings: Settings, took: float) -> Caution:
    figures = f"a plan was not finished after {1e3 * took:.0f} ms; it keeps limits and clearance, and is driven"
    return _caution(settings, "plan unfinished", "", Level.WARN, figures)


def plan_late(settings: Settings, took: float) -> Caution:
    figures = f"a plan took {1e3 * took:.0f} ms, {1e3 * settings.horizon.budget:.0f} ms allowed, and cannot be driven"
    return _caution(settings, "plan late", "", Level.WARN, figures)


def plan_failed(settings: Settings, reason: str) -> Caution:
    return _caution(settings, "plan failed", "", Level.WARN, reason)


def common_curvature(settings: Settings, seconds: float) -> Caution:
    figures = f"no new plan for {seconds:.1f} s, and the last one cannot be driven on; everybody drives one curvature"
    return _caution(settings, "common curvature", "", Level.WARN, figures)


def plans_missing(settings: Settings, seconds: float) -> Caution:
    keep = settings.horizon.keep
    figures = (
        f"no new plan for {seconds:.1f} s, and neither the last one (for {keep:g} s at most) nor one curvature for all "
        "can be driven"
    )
    return _caution(settings, "plan failed", "", Level.ERROR, figures)


def silence_unsafe(settings: Settings, silence: Nearing) -> Caution:
    figures = (
        f"should the planner fall silent {silence.instant:.1f} s into the manoeuvre they come within "
        f"{silence.clearance:.2f} m before both stand, {settings.site_rules.min_clearance:g} m is the site's smallest "
        "(shorter command time-outs, less speed or more spacing would help)"
    )
    return _caution(settings, "silence unsafe", " and ".join(silence.pair), Level.WARN, figures)


def silence_unsafe_near(settings: Settings, silence: Entering) -> Caution:
    figures = (
        f"should the planner fall silent {silence.instant:.1f} s into the manoeuvre it comes {-silence.spare:.2f} m "
        f"too near to {silence.area} before it stands (a shorter command time-out, less speed or more room would help)"
    )
    return _caution(settings, "silence unsafe", silence.robot, Level.WARN, figures)


def not_joined(settings: Settings, name: str, reason: str) -> Caution:
    return _caution(settings, "robot not joined", name, Level.WARN, f"it joins when the fleet is idle: {reason}")


def hazard_known(settings: Settings, point: Sequence[float]) -> Caution:
    figures = f"a hazard at ({point[0]:.1f}, {point[1]:.1f}), {settings.hazard.clearance:g} m are kept from it"
    return _caution(settings, "hazard known", "", Level.WARN, figures)


def hazard_seen(settings: Settings, who: str, point: Sequence[float], distance: float, armed: bool) -> Caution:
    figures = f"a hazard at ({point[0]:.1f}, {point[1]:.1f}), {distance:.1f} m away"
    return _caution(settings, "hazard seen", who, Level.WARN if armed else Level.ERROR, figures)


def change_refused(settings: Settings, reason: str) -> Caution:
    return _caution(settings, "change refused", "", Level.ERROR, reason)


def _caution(settings: Settings, code: str, subject: str, level: Level, figures: str) -> Caution:
    """A warning; every one defers to the site's rules, since the planner is not what protects people."""
    about, deference = f"{subject}: " if subject else "", "and the machines' own protection come first"
    doing = _row(code, level).response.value
    text = f"{about}{figures}; the fleet {doing}; {settings.site_rules.reference} {deference}"
    return Caution(code, subject, level, text)
