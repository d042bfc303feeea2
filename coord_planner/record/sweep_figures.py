# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a sweep keeps of a rehearsal: figures for its table, and the track of the turn for its page."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

import numpy as np
from scipy.integrate import trapezoid

from ..config import Configuration
from ..trial.run import Run
from .metrics import plain, summary
from .nearness import nearness

_TRACK_SAMPLES = 61


def figures(run: Run, configuration: Configuration) -> tuple[dict[str, Any], dict[str, Any]]:
    """The row's figures and the track, plain values; columns as in trial/sweep/measures.py, and what the rules need."""
    near = nearness(run)
    all_figures = summary(run, near)
    effort, disagreement = turning(run, configuration)
    row = {
        "completed": all_figures["completed"], "state": all_figures["state"], "contacts": all_figures["contacts"],
        "limit_violations": all_figures["limit_violations"], "site_min_clearance_m": run.min_clearance,
        "min_clearance_m": all_figures["min_clearance_m"],
        "heading_spread_deg": _degrees(all_figures["heading_spread_max_rad"]),
        "duration_s": all_figures["duration_s"], "effort": effort, "disagreement": disagreement,
        "curvature_spread_per_m": all_figures["curvature_spread_max_per_m"],
        "end_error_m": _largest(all_figures["end_error_m"].values()),
        "end_heading_error_deg": _degrees(_largest(all_figures["end_heading_error_rad"].values())),
        "warnings": ", ".join(sorted({warning["code"] for warning in all_figures["warnings"]})),
        "time_tick_median_ms": all_figures["tick_ms"]["median"], "time_tick_p99_ms": all_figures["tick_ms"]["p99"],
    }
    return {key: plain(value) for key, value in row.items()}, track(run, near.clearance)


def turning(run: Run, configuration: Configuration) -> tuple[float, float]:
    """Effort 1/2 integral of u'u and disagreement 1/2 integral of u'Lu of what the machines did, both in s/m^2.

    u is the turn rate over the manoeuvre's asked speed; L is the Laplacian of the graph in the file.
    """
    if len(run.times) < 2:
        return math.nan, math.nan
    u = run.speeds * run.curvatures / configuration.manoeuvres[run.manoeuvre].speed
    laplacian = configuration.graph.relative_to(run.fleet.names).laplacian()
    own, apart = (u * u).sum(axis=0), np.einsum("ks,kj,js->s", u, laplacian, u)
    return float(trapezoid(own, run.times) / 2), float(trapezoid(apart, run.times) / 2)


def track(run: Run, clearance: np.ndarray) -> dict[str, Any]:
    """Poses along the run, thinned, with the moment of the smallest clearance among them; robot by sample."""
    kept = np.unique(np.linspace(0, len(run.times) - 1, min(len(run.times), _TRACK_SAMPLES)).round().astype(int))
    kept = np.union1d(kept, [int(np.argmin(clearance))])
    return dict(plain({
        "times": np.round(run.times[kept] - run.began, 2), "x": np.round(run.poses[:, kept, 0], 2),
        "y": np.round(run.poses[:, kept, 1], 2), "heading": np.round(run.poses[:, kept, 2], 3),
        "corners": np.round(run.fleet.corners(), 3), "clearance": np.round(clearance[kept], 3),
        "edges": [[run.fleet.index(first), run.fleet.index(second)] for first, second, _ in run.edges],
    }))


def _largest(values: Iterable[float | None]) -> float | None:
    return max((value for value in values if value is not None), default=None)


def _degrees(value: float | None) -> float | None:
    return None if value is None else math.degrees(value)
