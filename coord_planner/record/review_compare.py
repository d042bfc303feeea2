# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Two recordings side by side: what changed between them, e.g. before and after a change of coupling."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Optional

import numpy as np

# Figures of a turn that are one number: key, and what it is called.
_OF_TURNS = {
    "min_clearance_m": "smallest clearance, m", "heading_spread_max_rad": "largest difference of headings, rad",
    "curvature_spread_max_per_m": "largest difference of curvatures, 1/m",
    "alignment_min": "smallest alignment of headings (1: all alike)",
}


def compare(first: dict[str, Any], second: dict[str, Any]) -> dict[str, Any]:
    """The figures of two reviews and their differences, second minus first.

    Turns are paired in the order in which they came: first with first, and so on.

    Returns:
        ``first``, ``second``: the figures as :func:`coord_planner.record.review.review` gives them.
        ``differences``: rows of ``turn`` (number from 1; None for the whole recording), ``figure``, ``first``,
        ``second``, ``change``; None where one of them is not known. ``notes``: what makes them hard to compare.
    """
    rows = list(_whole(first, second))
    for number, (one, two) in enumerate(zip(first["turns"], second["turns"]), start=1):
        rows += _turn(number, one, two)
    return {"first": first, "second": second, "differences": rows, "notes": _notes(first, second)}


def _row(turn: Optional[int], name: str, one: Optional[float], two: Optional[float]) -> dict[str, Any]:
    change = two - one if one is not None and two is not None else None
    return {"turn": turn, "figure": name, "first": one, "second": two, "change": change}


def _whole(first: dict[str, Any], second: dict[str, Any]) -> Iterator[dict[str, Any]]:
    yield _row(None, "turns", len(first["turns"]), len(second["turns"]))
    yield _row(None, "smallest clearance in the recording, m", first["min_clearance_m"], second["min_clearance_m"])
    yield _row(None, "warnings", len(first["warnings"]), len(second["warnings"]))
    yield _row(None, "stops", len(first["stops"]), len(second["stops"]))


def _turn(number: int, one: dict[str, Any], two: dict[str, Any]) -> list[dict[str, Any]]:
    def row(name: str, value: Any, other: Any) -> dict[str, Any]:
        return _row(number, f"turn {number}: {name}", value, other)

    rows = [row(name, one[key], two[key]) for key, name in _OF_TURNS.items()]
    rows.append(row("duration, s", one["to_s"] - one["from_s"], two["to_s"] - two["from_s"]))
    rows.append(row("last onset after the first, s", _lag(one), _lag(two)))
    rows.append(row("spread, hops/s", *((turn["spread"] or {}).get("hops_per_s") for turn in (one, two))))
    for name in [name for name in one["onset_s"] if name in two["onset_s"]]:
        rows.append(row(f"{name}: onset after the first, s", _after(one, name), _after(two, name)))
        rows.append(row(f"{name}: largest turn rate, rad/s", one["amplitude_rad_per_s"][name],
                        two["amplitude_rad_per_s"][name]))
        rows.append(row(f"{name}: share of {one['hops_from']}'s turn rate", one["share_of_origin"][name],
                        two["share_of_origin"][name] if two["hops_from"] == one["hops_from"] else None))
    return rows


def _onsets(turn: dict[str, Any]) -> list[float]:
    return [onset for onset in turn["onset_s"].values() if onset is not None]


def _lag(turn: dict[str, Any]) -> Optional[float]:
    return float(np.ptp(_onsets(turn))) if _onsets(turn) else None


def _after(turn: dict[str, Any], name: str) -> Optional[float]:
    onset = turn["onset_s"][name]
    return None if onset is None else float(onset - min(_onsets(turn)))


def _notes(first: dict[str, Any], second: dict[str, Any]) -> list[str]:
    notes = []
    if list(first["robots"]) != list(second["robots"]):
        notes.append("the robots are not the same in both recordings")
    if len(first["turns"]) != len(second["turns"]):
        notes.append(f"{len(first['turns'])} turns against {len(second['turns'])}: they are paired in their order")
    if first["edges"] != second["edges"]:
        notes.append("the neighbour graphs differ: hops do not mean the same")
    if first["clearance_between"] != second["clearance_between"]:
        notes.append("clearances are of footprints in one and of reported points in the other")
    return notes
