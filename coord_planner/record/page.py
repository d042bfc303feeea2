# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The page of a run: one HTML file that needs no network, made to be looked at and handed on."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Sequence
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
import shapely
from plotly.offline import get_plotlyjs

from ..core import outline
from ..core.settings import SiteRules
from ..trial.run import Run, RunFrame
from .metrics import plain, summary
from .nearness import Nearness, nearness

_MOST_SAMPLES = 1500  # a page's charts are some 600 pixels wide
_MOST_FRAMES = 300
_MOST_POINTS = 40  # of each planned path
_MARKER = re.compile(r"\{\{(\w+)\}\}")


def write_page(run: Run, path: str | Path) -> None:
    """Write the page; folders that are missing are made.

    Raises:
        OSError: the file cannot be written.
    """
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_text(page(run), encoding="utf-8")


def page(run: Run) -> str:
    """The page as text: template, style, script, the charting library and the run's data, all in one."""
    title = f"{_in_words(run.manoeuvre)}: {len(run.fleet)} robots"
    return assembled("page.html", "page.js", title, data(run))


def assembled(template: str, script: str, title: str, values: dict[str, Any], style: str = "") -> str:
    """A page of its parts: everything that it needs is in it, and it asks for nothing outside itself.

    Args:
        template: what stands between head and foot. script: what is done with it, beside what all pages share.
        style: file with styles of this page alone; "" for none.
    """
    content = _part(template).replace("{{transport}}", _part("transport.html"))
    parts = {
        "title": _escaped(title), "style": _part("page.css") + (_part(style) if style else ""), "content": content,
        "library": get_plotlyjs(),
        "data": _as_json(values), "script": _part("stage.js") + _part(script),
    }
    return _MARKER.sub(lambda found: parts[found.group(1)], _part("frame.html"))


def data(run: Run) -> dict[str, Any]:
    """All that the page of a run shows; times are seconds since the beginning of the motion."""
    near = nearness(run)
    origin = run.began if math.isfinite(run.began) else float(run.times[0]) if len(run.times) else 0.0
    shown = scene(run, near, _kept_samples(len(run.times), near.clearance), origin)
    return shown | {"facts": plain(run.facts), "summary": summary(run, near)}


def _indexed(run: Run, edges: Sequence[tuple[str, str, float]]) -> list[list[Any]]:
    return [[run.fleet.index(a), run.fleet.index(b), plain(weight)] for a, b, weight in edges]


def scene(run: Run, near: Nearness, kept: np.ndarray, origin: float) -> dict[str, Any]:
    """What happened, as plain JSON values: what every page shows from above and over time.

    Arrays with two levels are robot by sample; angles are radians, lengths metres.

    Args:
        kept: samples that are shown. origin: run time that counts as 0, seconds.
    """
    return {
        "manoeuvre": _in_words(run.manoeuvre),
        "names": list(run.fleet.names),
        "corners": _rounded(run.fleet.corners(), 4),
        "edges": _indexed(run, run.edges),
        "edge_changes": [[plain(when - origin), _indexed(run, edges)] for when, edges in run.edge_changes],
        "times": _rounded(run.times[kept] - origin, 3),
        "x": _rounded(run.poses[:, kept, 0], 3),
        "y": _rounded(run.poses[:, kept, 1], 3),
        "heading": _rounded(run.poses[:, kept, 2], 4),
        "speed": _rounded(run.speeds[:, kept], 3),
        "curvature": _rounded(run.curvatures[:, kept], 4),
        "ends": _rounded(run.end_poses, 4),
        "nearest": _nearest(run, near, kept),
        "minimum": plain(run.min_clearance),
        "areas": _areas(run.site_rules),
        "plans": _plans(run.frames, origin),
        "cautions": [
            {"first": plain(first - origin), "last": plain(last - origin), "code": caution.code,
             "subject": caution.subject, "level": int(caution.level), "text": caution.text}
            for first, last, caution in run.cautions
        ],
        "events": [{"time": plain(time - origin), "text": text} for time, text in run.events],
    }


def _areas(rules: SiteRules) -> list[dict[str, Any]]:
    """Keep-outs and areas with a speed cap: outlines, closed, and what they are called."""
    named = [("out", area, area.name) for area in rules.keep_outs]
    named += [("slow", cap.area, f"{cap.area.name}, at most {cap.max_speed:g} m/s") for cap in rules.speed_caps]
    found = []
    for kind, area, words in named:
        x, y = _rounded(np.array([*area.corners, area.corners[0]]).T, 3)
        found.append({"kind": kind, "words": words, "x": x, "y": y})
    return found


def _nearest(run: Run, near: Nearness, kept: np.ndarray) -> dict[str, Any]:
    """The pair that is nearest at each kept sample, how near, and where: ends of the shortest line, (S, 4)."""
    clearance, pairs, poses = near.clearance[kept], near.pair[kept], run.poses[:, kept]
    lines = np.full((len(kept), 4), math.nan)
    there = np.flatnonzero(np.isfinite(clearance))
    if len(there):
        polygons = [outline.outlines(run.fleet.corners()[pairs[there, side]], poses[pairs[there, side], there])
                    for side in (0, 1)]
        lines[there] = shapely.get_coordinates(shapely.shortest_line(*polygons)).reshape(-1, 4)
    return {"clearance": _rounded(clearance, 4), "pair": pairs.tolist(), "line": _rounded(lines, 3)}


def _plans(frames: tuple[RunFrame, ...], origin: float) -> dict[str, Any]:
    """Planned paths along the way, thinned in time and along the path: frame by robot by point."""
    shown = [frames[n] for n in spread(len(frames), _MOST_FRAMES)]
    paths = [frame.poses[:, spread(frame.poses.shape[1], _MOST_POINTS)] for frame in shown]
    return {
        "times": [plain(round(frame.time - origin, 3)) for frame in shown],
        "rate": [plain(round(float(frame.progress_rate), 3)) for frame in shown],
        "x": [_rounded(path[:, :, 0], 3) for path in paths],
        "y": [_rounded(path[:, :, 1], 3) for path in paths],
    }


def _kept_samples(count: int, clearance: np.ndarray) -> np.ndarray:
    """Samples that the page holds: evenly spread, and the one with the smallest clearance, which must not be lost."""
    kept = spread(count, _MOST_SAMPLES)
    return np.union1d(kept, [int(np.argmin(clearance))]) if count else kept


def spread(count: int, most: int) -> np.ndarray:
    """At most ``most`` of ``count`` indices, evenly spread, the first and the last among them."""
    return np.unique(np.linspace(0, max(count - 1, 0), min(count, most)).round().astype(int))


def _rounded(values: np.ndarray, digits: int) -> Any:
    return plain(np.round(np.asarray(values, dtype=float), digits))


def _in_words(name: str) -> str:
    return name.replace("_", " ").strip() or "a run"


def _as_json(values: dict[str, Any]) -> str:
    """Strict JSON that cannot close the script element it stands in, whatever a name or a text contains."""
    text = json.dumps(values, allow_nan=False, separators=(",", ":"))
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def _escaped(text: str) -> str:
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def _part(name: str) -> str:
    return (resources.files(__package__) / name).read_text(encoding="utf-8")
