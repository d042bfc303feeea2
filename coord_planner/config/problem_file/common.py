# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the models of a problem file have in common: names, places, graph, time."""

from __future__ import annotations

import math
from typing import Any

import attrs
import numpy as np

from ...core.graph import NeighbourGraph
from ...core.parameter import Description
from ...errors import SettingsError
from ..complaints import one_line, shown
from .entries import Entries, checked_numbers

COUPLING = Description("price of turning differently from a neighbour (chi)", minimum=0.0, maximum=1e6)
DURATION = Description("time from start to end", "s", above=0.0, maximum=1e5)
INTERVALS = Description("equal intervals of the duration", minimum=3, maximum=1000)  # a pose has three numbers
_LARGEST = 4_000  # robots times intervals: the optimality check is dense in them
_EDGE = "[NAME, NAME] or [NAME, NAME, WEIGHT], two different robots of the file, weight above 0"


@attrs.frozen(eq=False)
class Group:
    """Robots or copies: names, their entries in the file, starts and ends (N, 3), the latter NaN where free."""

    names: tuple[str, ...]
    entries: tuple[Entries, ...]
    starts: np.ndarray
    ends: np.ndarray


def robots(top: Entries, place: str, ends: bool = True) -> Group:
    """The ``robots`` list.

    Args:
        place: what three numbers are, for messages. ends: whether ``end`` (and ``end_heading``) is read.
    """
    what = "a list with an entry {name:, start:} for each robot"
    listed = top.listed("robots", what, required=True)
    if not listed and top.has("robots") and not top.complaints.count:
        top.add("robots", "there are no robots", what)
    names: list[str] = []
    found: list[Entries] = []
    starts, targets = np.zeros((len(listed), 3)), np.full((len(listed), 3), np.nan)
    for i in range(len(listed)):
        entry = top.at("robots", i)
        if not entry.is_mapping():
            top.complaints.add(f"{shown(listed[i])} is no entry", f"robots[{i}]", what)
            continue
        names.append(_name(entry, names))
        found.append(entry)
        start = entry.numbers("start", f"[{place}]", 3)
        if start is not None:
            starts[i] = start
        if ends:
            targets[i] = _end(entry, place)
    top.raise_any()
    return Group(tuple(names), tuple(found), starts, targets)


def _name(entry: Entries, before: list[str]) -> str:
    name: Any = entry.value("name", Description("name of the robot"), "str")
    if name is None:
        return ""
    if not name.strip() or not name.isprintable() or len(name) > 64:
        entry.add("name", f"{shown(name)} cannot be a name", "1 to 64 printable characters")
    elif name in before:
        entry.add("name", f"{shown(name)} is given more than once", "each name once")
    return str(name)


def _end(entry: Entries, place: str) -> np.ndarray:
    end = np.full(3, np.nan)
    headed = "heading" in place
    posed = entry.has("end")
    if posed:
        numbers = entry.numbers("end", f"[{place}]", 3)
        end[:] = numbers if numbers is not None else np.nan
    if headed and entry.has("end_heading"):
        if posed:
            entry.add("end_heading", "the end holds a heading already", "end or end_heading, not both")
        heading = checked_numbers(entry.complaints, entry.key("end_heading"), [entry.plainly("end_heading")],
                                  "a number (rad)", 1)
        end[2] = heading[0] if heading is not None else np.nan
    return end


def graph(top: Entries, names: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray, float]:
    """Edges (E, 2), their weights (E,) and the coupling."""
    edges: list[tuple[str, str, float]] = []
    for i, entry in enumerate(top.listed("edges", f"a list of {_EDGE}")):
        good = isinstance(entry, list) and len(entry) in (2, 3) and all(isinstance(name, str) for name in entry[:2])
        weight = entry[2] if good and len(entry) == 3 else 1.0
        if not good or isinstance(weight, bool) or not isinstance(weight, (int, float)) or not abs(weight) < 1e6:
            top.complaints.add(f"{shown(entry)} is no edge", f"edges[{i}]", _EDGE)
            continue
        try:
            NeighbourGraph(names, (*edges, (entry[0], entry[1], float(weight))))
            edges.append((entry[0], entry[1], float(weight)))
        except SettingsError as error:
            top.complaints.add(one_line(error.problem), f"edges[{i}]", error.allowed)
    coupling = top.value("coupling", COUPLING) if edges or top.has("coupling") else 0.0
    built = NeighbourGraph(names, tuple(edges))
    return built.index_edges(), built.weights(), 0.0 if coupling is None else float(coupling)


def times(top: Entries, count: int) -> tuple[float, int]:
    """Duration and number of intervals."""
    duration, intervals = top.value("duration", DURATION), top.value("intervals", INTERVALS, "int", 200)
    if intervals is not None and count * intervals > _LARGEST:
        top.add("intervals", f"{count} robots times {intervals} intervals are too many",
                f"at most {_LARGEST // count} for {count} robots")
    return (math.nan if duration is None else float(duration)), (2 if intervals is None else int(intervals))


def graph_entries(names: tuple[str, ...], edges: np.ndarray, weights: np.ndarray) -> list[list[Any]]:
    """Edges as they stand in a file."""
    return [[names[k], names[j], float(weight)] for (k, j), weight in zip(edges, weights)]
