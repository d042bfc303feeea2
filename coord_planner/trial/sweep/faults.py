"""Faults as a file lists them: ``{kind, robot, from_s, to_s, value}``."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from ...config.complaints import Complaints, nearest, shown
from ..faults import Fault

# What stands behind ``value``, by kind.
KINDS = {"robot_slow": "the part of the commanded speed that the machine reaches, above 0 and at most 1"}
_KEYS = ("kind", "robot", "from_s", "to_s", "value")
_FORM = "{kind, robot, from_s, to_s, value}"


def fault_list(entries: Any, robots: Iterable[str], complaints: Complaints, where: str = "faults") -> tuple[Fault, ...]:
    """Faults from what a YAML file holds; what is wrong goes to the complaints."""
    if not isinstance(entries, list):
        complaints.add(f"{shown(entries)} is no list", where, f"a list of {_FORM}")
        return ()
    names = tuple(robots)
    found = [_fault(entry, names, complaints, f"{where}[{n}]") for n, entry in enumerate(entries)]
    return tuple(fault for fault in found if fault is not None)


def _fault(entry: Any, robots: tuple[str, ...], complaints: Complaints, where: str) -> Fault | None:
    if not isinstance(entry, dict):
        complaints.add(f"{shown(entry)} is no fault", where, _FORM)
        return None
    before = complaints.count
    for key in entry:
        if key not in _KEYS:
            complaints.add(f"it is not a known key{nearest(str(key), _KEYS)}", f"{where}.{key}", ", ".join(_KEYS))
    for key in _KEYS:
        if key not in entry:
            complaints.add("it has to be given", f"{where}.{key}", _FORM)
    if complaints.count > before:
        return None
    if entry["kind"] not in KINDS:
        complaints.add(f"{shown(entry['kind'])} is not known", f"{where}.kind", "one of " + ", ".join(KINDS))
    if entry["robot"] not in robots:
        complaints.add(f"{shown(entry['robot'])} is not in the fleet", f"{where}.robot", ", ".join(robots))
    for key in ("from_s", "to_s", "value"):
        if not _number(entry[key]):
            complaints.add(f"{shown(entry[key])} is not a number", f"{where}.{key}", "a number")
    if complaints.count > before:
        return None
    if not 0.0 <= entry["from_s"] < entry["to_s"]:
        complaints.add(f"from {entry['from_s']:g} to {entry['to_s']:g} s is no stretch of time", f"{where}.to_s",
                       "from_s at least 0 (when the motion begins) and to_s above it")
    if not 0.0 < entry["value"] <= 1.0:
        complaints.add(f"{entry['value']:g} is out of range", f"{where}.value", KINDS[entry["kind"]])
    if complaints.count > before:
        return None
    return Fault(entry["kind"], entry["robot"], float(entry["from_s"]), float(entry["to_s"]), float(entry["value"]))


def _number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
