# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The outcome of a sweep as tables, sentences and one JSON object."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping
from typing import Any, Optional

import attrs

from ..record.metrics import plain
from ..trial.sweep.axes import in_words
from ..trial.sweep.choice import Setting
from ..trial.sweep.measures import MAIN, MEASURES
from ..trial.sweep.outcome import Outcome
from .speaking import CAUTION, table, write, write_heading, write_table

_MOST_BROKEN = 6


def as_json(found: Outcome, files: Mapping[str, str]) -> dict[str, Any]:
    """The JSON object of ``sweep --json``."""
    return dict(plain({
        "sweep": found.sweep.name, "manoeuvres": list(found.sweep.manoeuvres), "objective": dict(found.sweep.objective),
        "rehearsals": len(found.rows), **_counts(found), "settings": len(found.settings),
        "within_rules": sum(setting.keeps for setting in found.settings),
        "best": _setting(found.best), "as_shipped": _setting(found.shipped),
        "front": [_setting(found.settings[number]) for number in found.front],
        "sensitivity": [attrs.asdict(effect) for effect in found.effects], "files": dict(files),
    }))


def _counts(found: Outcome) -> dict[str, int]:
    statuses = Counter(row["status"] for row in found.rows)
    return {status: statuses[status] for status in ("done", "refused", "failed")}


def _setting(setting: Optional[Setting]) -> Optional[dict[str, Any]]:
    if setting is None:
        return None
    return {
        "setting": setting.number, "values": dict(setting.labels), "objective": setting.objective,
        "standard_error": setting.doubt, "mean": dict(setting.mean), "worst": dict(setting.worst),
        "broken": list(setting.broken),
    }


def write_outcome(found: Outcome, files: Mapping[str, str]) -> None:
    """Everything that matters of a sweep, for people."""
    counts = _counts(found)
    manoeuvres = " and ".join(found.sweep.manoeuvres)
    write(f"{found.sweep.name}: {len(found.rows)} rehearsals of {manoeuvres}, {counts['done']} carried out, "
          f"{counts['refused']} refused, {counts['failed']} failed; {sum(s.keeps for s in found.settings)} of "
          f"{len(found.settings)} settings keep every rule.\n")
    if found.best is not None:
        write_heading("Best within the rules, and the trade-off front")
        _write_settings(found)
        terms = " + ".join(_term(name, weight) for name, weight in found.sweep.objective.items() if weight)
        write(f"Objective: {terms}, mean over the rehearsals; less is better.\n")
    _write_broken(found)
    if found.sweep.axes:
        _write_effects(found)
    for what, file in files.items():
        write(f"{what}: {file}")
    write()
    write(CAUTION)


def _write_settings(found: Outcome) -> None:
    keys = [axis.key for axis in found.sweep.axes]
    columns = (f"{MEASURES[name].words} {MEASURES[name].unit}" for name in MAIN)
    shown = table("setting", "", *keys, "objective", *columns)
    special = [setting for setting in (found.best, found.shipped) if setting is not None]
    rest = [found.settings[number] for number in found.front]
    for setting in dict.fromkeys((*special, *sorted(rest, key=lambda setting: setting.objective))):
        marks = [word for word, is_it in (("best", setting is found.best), ("as shipped", setting is found.shipped),
                                          ("on the front", setting.number in found.front)) if is_it]
        doubt = "" if math.isnan(setting.doubt) else f" +- {setting.doubt:.2g}"
        shown.add_row(
            str(setting.number), ", ".join(marks), *(in_words(setting.labels.get(key)) for key in keys),
            f"{setting.objective:.4g}{doubt}", *(f"{setting.mean[name]:.4g}" for name in MAIN),
        )
    write_table(shown)


def _term(name: str, weight: float) -> str:
    sign = "-" if MEASURES[name].larger_is_better else ""
    return f"{sign}{weight:g} x {name}"


def _write_broken(found: Outcome) -> None:
    broken = Counter(words for setting in found.settings for words in setting.broken)
    if not broken:
        return
    write_heading("Settings that do not keep the rules")
    for words, count in broken.most_common(_MOST_BROKEN):
        write(f"- {count} of {len(found.settings)}: {words}")
    if len(broken) > _MOST_BROKEN:
        write(f"- and {len(broken) - _MOST_BROKEN} more reasons, in the table")
    write()


def _write_effects(found: Outcome) -> None:
    write_heading("Which parameters matter")
    shown = table("parameter", "measure", "rank correlation", "95% interval", "explains", "")
    for effect in found.effects:
        ordered = math.isfinite(effect.correlation)
        shown.add_row(
            effect.parameter, MEASURES[effect.measure].words, f"{effect.correlation:+.2f}" if ordered else "-",
            f"{effect.low:+.2f} to {effect.high:+.2f}" if ordered else "-",
            f"{100 * effect.explained:.0f}%" if math.isfinite(effect.explained) else "-", effect.verdict,
        )
    write_table(shown)
