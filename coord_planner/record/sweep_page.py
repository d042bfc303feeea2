# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The page of a sweep: one HTML file that needs no network, made to be looked at, clicked through and handed on."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import attrs

from ..trial.sweep.axes import Ranged, in_words
from ..trial.sweep.choice import Setting
from ..trial.sweep.measures import MAIN, MEASURES
from ..trial.sweep.outcome import Outcome
from .metrics import plain
from .page import assembled

_MOST_POSES = 40_000  # of all tracks together; more rehearsals are drawn with fewer poses each
_FEWEST_POSES = 9


def write_sweep_page(found: Outcome, path: str | Path, best_text: str = "") -> None:
    """Write the page; folders that are missing are made.

    Args:
        best_text: the parameter file with the best settings; "" where there is none.

    Raises:
        OSError: the file cannot be written.
    """
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_text(sweep_page(found, best_text), encoding="utf-8")


def sweep_page(found: Outcome, best_text: str = "") -> str:
    """The page as text: template, style, script, the charting library and the sweep's data, all in one."""
    title = f"{found.sweep.name}: sweep of {' and '.join(found.sweep.manoeuvres)}"
    return assembled("sweep_page.html", "sweep_page.js", title, sweep_data(found, best_text), "sweep_page.css")


def sweep_data(found: Outcome, best_text: str = "") -> dict[str, Any]:
    """All that the page shows, as plain JSON values. Tracks are robot by sample; angles in them are radians."""
    sweep = found.sweep
    used = {key: track for key, track in found.tracks.items() if track["times"]}
    poses = max(_FEWEST_POSES, _MOST_POSES // max(1, len(used)) // max(1, len(sweep.base.driven)))
    order = {key: n for n, key in enumerate(used)}
    counted = [name for name, weight in sweep.objective.items() if weight]
    return dict(plain({
        "name": sweep.name, "site": sweep.base.fleet_name,
        "manoeuvres": [name.replace("_", " ") for name in sweep.manoeuvres],
        "invented": sweep.base.invented, "robots": list(sweep.base.driven.names),
        "reference": sweep.base.settings.site_rules.reference, "seeds": list(sweep.seeds),
        "faults": [f"{fault.kind.replace('_', ' ')}: {fault.robot or ' - '.join(fault.edge)} {fault.from_s:g} to "
                   f"{fault.to_s:g} s".replace(":  ", ": ") for fault in sweep.faults],
        "fixed": {key: in_words(value) for key, value in sweep.fixed.items()},
        "objective": dict(sweep.objective), "within": dict(sweep.within), "counted": counted, "main": list(MAIN),
        "measures": {name: attrs.asdict(measure) for name, measure in MEASURES.items()},
        "axes": [{"key": axis.key, "ordered": axis.ordered, "logarithmic": _logarithmic(axis)} for axis in sweep.axes],
        "settings": [_setting(setting) for setting in found.settings],
        "rows": [_row(row, order) for row in found.rows],
        "tracks": [_thinned(track, poses) for track in used.values()],
        "best": None if found.best is None else found.best.number,
        "shipped": None if found.shipped is None else found.shipped.number, "front": list(found.front),
        "effects": [attrs.asdict(effect) for effect in found.effects], "best_text": best_text,
    }))


def _logarithmic(axis: Any) -> bool:
    """Whether a chart should have the parameter on a logarithmic scale."""
    if isinstance(axis, Ranged):
        return axis.logarithmic
    values = axis.values if axis.ordered else ()
    return len(values) > 2 and min(values) > 0 and max(values) / min(values) > 20


def _setting(setting: Setting) -> dict[str, Any]:
    return {
        "labels": dict(setting.labels), "keeps": setting.keeps, "broken": list(setting.broken),
        "objective": setting.objective, "doubt": setting.doubt, "mean": dict(setting.mean),
        "worst": dict(setting.worst), "rows": [row["point"] for row in setting.rows],
    }


def _row(row: Any, order: dict[str, int]) -> dict[str, Any]:
    kept = ("point", "setting", "manoeuvre", "seed", "status", "reason", "state", "contacts", "limit_violations",
            "warnings", "site_min_clearance_m", *MEASURES)
    return {key: row.get(key) for key in kept} | {"track": order.get(row["key"])}


def _thinned(track: Any, poses: int) -> dict[str, Any]:
    """Fewer samples, evenly spread; the first, the last and the one with the smallest clearance stay."""
    count = len(track["times"])
    if count <= poses:
        return dict(track)
    kept = {round(n * (count - 1) / (poses - 1)) for n in range(poses)}
    known = [n for n in range(count) if track["clearance"][n] is not None]
    kept |= {min(known, key=lambda n: track["clearance"][n])} if known else set()
    chosen = sorted(kept)

    def of(values: Any) -> list[Any]:
        return [values[n] for n in chosen]

    rows = {key: [of(series) for series in track[key]] for key in ("x", "y", "heading")}
    return {**track, **rows, "times": of(track["times"]), "clearance": of(track["clearance"])}
