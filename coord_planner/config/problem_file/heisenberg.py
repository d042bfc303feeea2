# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``model: heisenberg``: the driftless problem. Starts and ends are x, y, z; there are no limits."""

from __future__ import annotations

from typing import Any

from ...core.direct.heisenberg import HeisenbergProblem
from . import common
from .entries import Entries

_NO_USE = "without it: this model has no headings, speeds, limits or clearances"
_OF_OTHERS = ("speed", "limits", "min_clearance", "alignment", "prices", "footprint", "end_heading")


def read(top: Entries) -> HeisenbergProblem:
    """A problem from a file.

    Raises:
        SettingsError: with all that is wrong with it.
    """
    group = common.robots(top, "x, y, z")
    edges, weights, coupling = common.graph(top, group.names)
    duration, intervals = common.times(top, len(group.names))
    for entries in (*group.entries, top):
        entries.done(dict.fromkeys(_OF_OTHERS, _NO_USE))
    top.raise_any()
    return HeisenbergProblem(group.names, group.starts, group.ends, edges, weights, coupling, duration, intervals)


def write(problem: HeisenbergProblem) -> dict[str, Any]:
    """The file of a problem."""
    entries = []
    for name, start, end in zip(problem.names, problem.starts.tolist(), problem.ends.tolist()):
        entry: dict[str, Any] = {"name": name, "start": start}
        entries.append(entry if end[0] != end[0] else {**entry, "end": end})
    return {
        "model": "heisenberg", "robots": entries,
        "edges": common.graph_entries(problem.names, problem.edges, problem.weights),
        "coupling": problem.coupling, "duration": problem.duration, "intervals": problem.intervals,
    }
