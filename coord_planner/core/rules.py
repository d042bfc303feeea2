"""What is going wrong, in plain words, with what the fleet does about it and the deferral to the site's rules."""

from __future__ import annotations

from collections.abc import Sequence

from .messages import Caution, Level
from .settings import Settings
from .silence import Silence


def caution(settings: Settings, code: str, subject: str, level: Level, figures: str, doing: str) -> Caution:
    """A warning; every one defers to the site's rules, since the planner is not what protects people."""
    about = f"{subject}: " if subject else ""
    text = f"{about}{figures}; {doing}. {settings.site_rules.reference} and the machines' own protection come first"
    return Caution(code, subject, level, text)


def pose_old(settings: Settings, name: str, age: float, doing: str) -> Caution:
    allowed = settings.poses.max_age
    figures = f"last pose {age:.2f} s old, {allowed:g} s allowed" if age < 1e6 else "no pose yet"
    return caution(settings, "pose old", name, Level.STALE, figures, doing)


def pose_jumped(settings: Settings, name: str) -> Caution:
    figures = f"pose jumped by more than {settings.poses.max_jump:g} m"
    return caution(settings, "pose jumped", name, Level.ERROR, figures, "the fleet stops in step")


def not_ready(settings: Settings, name: str) -> Caution:
    return caution(settings, "robot not ready", name, Level.ERROR, "not ready to be driven", "the fleet stops")


def silent(settings: Settings, name: str) -> Caution:
    return caution(settings, "robot silent", name, Level.STALE, "no longer says that it is ready", "the fleet stops")


def other_planner(settings: Settings, who: str) -> Caution:
    return caution(settings, "other planner heard", "", Level.ERROR, f"{who} drives this fleet too", "the fleet stops")


def not_following(settings: Settings, name: str, lag: float, doing: str, level: Level) -> Caution:
    figures = f"{lag:.2f} m behind its plan, {settings.progress.max_lag:g} m at most"
    return caution(settings, "robot not following", name, level, figures, doing)


def clearance_short(settings: Settings, pair: Sequence[str], clearance: float, doing: str) -> Caution:
    figures = f"predicted clearance {clearance:.2f} m, {settings.site_rules.min_clearance:g} m is the site's smallest"
    return caution(settings, "predicted clearance short", " and ".join(pair), Level.WARN, figures, doing)


def clearance_breached(settings: Settings, pair: Sequence[str], clearance: float, doing: str) -> Caution:
    figures = f"clearance {clearance:.2f} m now, {settings.site_rules.min_clearance:g} m is the site's smallest"
    return caution(settings, "clearance breached", " and ".join(pair), Level.ERROR, figures, doing)


def plan_late(settings: Settings, took: float) -> Caution:
    figures = f"a plan took {1e3 * took:.0f} ms and was not finished, {1e3 * settings.horizon.budget:.0f} ms allowed"
    return caution(settings, "plan late", "", Level.WARN, figures, "the last plan is driven on")


def plan_failed(settings: Settings, reason: str, doing: str) -> Caution:
    return caution(settings, "plan failed", "", Level.ERROR, reason, doing)


def silence_unsafe(settings: Settings, silence: Silence) -> Caution:
    figures = (
        f"should the planner fall silent {silence.instant:.1f} s into the manoeuvre they come within "
        f"{silence.clearance:.2f} m before both stand, {settings.site_rules.min_clearance:g} m is the site's smallest"
    )
    doing = "the fleet goes on; shorter command time-outs, less speed or more spacing would help"
    return caution(settings, "silence unsafe", " and ".join(silence.pair), Level.WARN, figures, doing)


def change_refused(settings: Settings, reason: str) -> Caution:
    return caution(settings, "change refused", "", Level.ERROR, reason, "the fleet stops in step")
