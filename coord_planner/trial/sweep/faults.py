# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Faults as a file lists them: ``{kind, robot or edge, from_s, to_s, value}``."""

from __future__ import annotations

import math
from typing import Any, Optional

from ...config.complaints import Complaints, nearest, shown
from ...core.graph import NeighbourGraph
from ...errors import SettingsError
from ..faults import KINDS, Fault, check_targets

_FORM = "{kind, robot or edge, from_s, to_s, value}"
_KEYS = ("kind", "robot", "edge", "from_s", "to_s", "value")


def fault_list(entries: Any, graph: NeighbourGraph, complaints: Complaints, where: str = "faults") -> tuple[Fault, ...]:
    """Faults from what a YAML file holds; what is wrong goes to the complaints.

    Args:
        graph: of the fleet that they strike.
    """
    if not isinstance(entries, list):
        complaints.add(f"{shown(entries)} is no list", where, f"a list of {_FORM}")
        return ()
    found = [_fault(entry, graph, complaints, f"{where}[{n}]") for n, entry in enumerate(entries)]
    return tuple(fault for fault in found if fault is not None)


def _fault(entry: Any, graph: NeighbourGraph, complaints: Complaints, where: str) -> Optional[Fault]:
    if not isinstance(entry, dict):
        complaints.add(f"{shown(entry)} is no fault", where, _FORM)
        return None
    before = complaints.count
    for key in entry:
        if key not in _KEYS:
            complaints.add(f"it is not a known key{nearest(str(key), _KEYS)}", f"{where}.{key}", ", ".join(_KEYS))
    for key in ("kind", "from_s", "to_s", *_needed(entry.get("kind"))):
        if key not in entry:
            complaints.add("it has to be given", f"{where}.{key}", _FORM)
    for key in ("from_s", "to_s", "value"):
        if key in entry and not _is_number(entry[key]):
            complaints.add(f"{shown(entry[key])} is not a number", f"{where}.{key}", "a number")
    edge = entry.get("edge", ("", ""))
    edge = tuple(edge.split()) if isinstance(edge, str) else edge
    if not (isinstance(edge, (list, tuple)) and len(edge) == 2 and all(isinstance(name, str) for name in edge)):
        complaints.add(f"{shown(edge)} is no edge", f"{where}.edge", "two robots' names: [NAME, NAME]")
    if complaints.count > before:
        return None
    try:
        fault = Fault(
            str(entry["kind"]), str(entry.get("robot", "")), float(entry["from_s"]), float(entry["to_s"]),
            float(entry.get("value", 0.0)), (edge[0], edge[1]),
        )
        check_targets([fault], graph)
    except SettingsError as error:
        complaints.add(error.problem, f"{where}.{error.key}", error.allowed)
        return None
    return fault


def _needed(kind: Any) -> tuple[str, ...]:
    """Keys that a kind cannot do without; Fault itself tells of a missing target and of an unknown kind."""
    known = KINDS.get(kind) if isinstance(kind, str) else None
    return ("value",) if known is not None and known.value else ()


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
