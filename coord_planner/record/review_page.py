# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The page of a recording, or of two side by side: one HTML file that needs no network."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from .metrics import plain
from .page import assembled, scene, spread
from .review import Review
from .review_compare import compare
from .review_turns import turn_rates

_EVENLY, _IN_TURNS = 1000, 1400  # samples that the page holds: over everything, and in turns besides
_DRAWN = 0.015  # part of the scene's extent that a robot is drawn with when its footprint is not known
_LEAST_DRAWN, _SLENDER = 0.3, 0.6  # metres; width over length


def write_page(reviews: Sequence[Review], path: str | Path) -> None:
    """Write the page of one review, or of two compared; folders that are missing are made.

    Raises:
        OSError: the file cannot be written. ValueError: neither one nor two reviews.
    """
    if len(reviews) not in (1, 2):
        raise ValueError(f"a page shows one recording or two; got {len(reviews)}")
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_text(page(reviews[0]) if len(reviews) == 1 else comparison(*reviews), encoding="utf-8")


def page(review: Review) -> str:
    """The page of one recording, as text."""
    return assembled("review.html", "review.js", f"Review of {_name(review)}", data(review))


def comparison(first: Review, second: Review) -> str:
    """The page of two recordings, as text."""
    compared = compare(first.figures, second.figures)
    values = {"first": data(first), "second": data(second), "differences": compared["differences"],
              "notes": compared["notes"]}
    return assembled("compare.html", "compare.js", f"{_name(first)} and {_name(second)}", values)


def data(review: Review) -> dict[str, Any]:
    """All that the page shows, as plain JSON values; times are seconds since the recording began."""
    run = review.record.run
    kept = kept_samples(review)
    shown = scene(run, review.near, kept, 0.0)
    known = review.record.configuration is not None
    return shown | {
        "name": _name(review), "figures": review.figures, "to_scale": known,
        "corners": shown["corners"] if known else _nominal(review),
        "rate": plain(np.round(turn_rates(review.record)[:, kept], 4)),
        "breaks": plain(review.record.clock.breaks),
    }


def kept_samples(review: Review) -> np.ndarray:
    """Samples that the page holds: evenly spread, more of them in turns, and those with the smallest clearances."""
    times, clearance = review.record.run.times, review.near.clearance
    kept = [spread(len(times), _EVENLY), np.array([np.argmin(clearance)])]
    each = max(_IN_TURNS // max(len(review.turns), 1), 20)
    for turn in review.turns:
        inside = np.flatnonzero((times >= turn.span.from_s) & (times <= turn.span.to_s))
        if len(inside):
            kept += [inside[spread(len(inside), each)], inside[[np.argmin(clearance[inside])]]]
    return np.unique(np.concatenate(kept)).astype(int)


def _nominal(review: Review) -> list[list[list[float]]]:
    """Corners to draw robots with whose footprints are not known."""
    places = review.record.run.poses[:, :, :2].reshape(-1, 2)
    extent = float((np.nanmax(places, axis=0) - np.nanmin(places, axis=0)).max())
    half = np.array([1.0, _SLENDER]) * max(_DRAWN * extent, _LEAST_DRAWN) / 2
    corners = np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]]) * half
    return [corners.round(3).tolist()] * len(review.record.robots)


def _name(review: Review) -> str:
    """The recording's name; that of its folder before it where it is just called bag, as many are."""
    path = review.record.content.recording.path.resolve()
    return f"{path.parent.name}/{path.name}" if path.name in ("bag", "rosbag2") else path.name
