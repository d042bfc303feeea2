# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``model: se2``: the problems of core/direct."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np

from ...core.direct.problem import Caps, DirectProblem, SmallPrices, Speeds
from ...core.fleet import Footprint, Limits
from ...core.parameter import Description, describe
from ...core.settings import Coupling, Prices
from . import common
from .entries import Entries

_SPEED = Description("speed of every robot", "m/s", minimum=-20.0, maximum=20.0)
_FIXED = Description("speed of every robot", "m/s", above=0.0, maximum=20.0)
_LIMITS = {field.name: describe(Limits)[field.name] for field in attrs.fields(Caps)}
_OF_FREE_SPEED = ("max_acceleration", "max_braking")
_FOOTPRINT = describe(Footprint)
_CLEARANCE = Description("smallest distance between any two footprints", "m", minimum=0.0, maximum=100.0)
_PRICES = {name: attrs.evolve(describe(Prices)[name], minimum=0.0)
           for name in ("curvature_rate", "acceleration", "speed")}
_PRICE_OF_SPEED = Prices().speed  # what leaving the asked speed costs where nothing else is said
_POSE = "x, y, heading"
_INSTEAD = {
    "min_speed": "speed: {min:, max:, asked:} at the top", "max_speed": "speed: {min:, max:, asked:} at the top",
    **dict.fromkeys(_OF_FREE_SPEED, "speed: {min:, max:} with two different ends, or no such limit"),
}


def read(top: Entries) -> DirectProblem:
    """A problem from a file.

    Raises:
        SettingsError: with all that is wrong with it.
    """
    group = common.robots(top, _POSE)
    names = group.names
    edges, weights, coupling = common.graph(top, names)
    duration, intervals = common.times(top, len(names))
    speeds = _speeds(top)
    caps = _caps(top, group, speeds)
    boxes = _boxes(top, group)
    clearance = top.value("min_clearance", _CLEARANCE, default=0.0)
    if boxes.any() and not clearance:
        top.add("min_clearance", "footprints are given, and no clearance to keep between them", "a number above 0 (m)")
    alignment = top.value("alignment", describe(Coupling)["alignment"], default=0.0)
    prices = _prices(top, speeds)
    for entry in group.entries:
        entry.done()
    top.done()
    top.raise_any()
    return DirectProblem(
        names, group.starts, group.ends, edges, weights, coupling, duration, intervals, speeds, caps,
        float(clearance), boxes, float(alignment), prices,
    )


def _speeds(top: Entries) -> Speeds:
    one = Speeds(1.0, 1.0, 1.0)
    if not isinstance(top.plainly("speed"), dict):
        speed = top.value("speed", _FIXED, default=1.0)
        return one if speed is None else Speeds(speed, speed, speed)
    entries = top.mapping("speed", "")
    assert entries is not None
    lowest, highest = entries.value("min", _SPEED), entries.value("max", _FIXED)
    asked = entries.value("asked", _FIXED, default=highest)
    entries.done()
    if lowest is None or highest is None or asked is None:
        return one
    if lowest > highest:
        entries.add("min", f"{lowest:g} m/s is above max, {highest:g} m/s", "at most max")
        return one
    if not lowest <= asked <= highest:
        entries.add("asked", f"{asked:g} m/s is not between min and max", f"{max(lowest, 0.0):g} to {highest:g} m/s")
        return one
    return Speeds(lowest, highest, asked)


def _caps(top: Entries, group: common.Group, speeds: Speeds) -> Caps:
    """Limits for all robots, and those of a robot's own in their place."""
    allowed = {name: text for name, text in _LIMITS.items() if not (speeds.fixed and name in _OF_FREE_SPEED)}
    shared = _limits(top, allowed)
    own = [{**shared, **_limits(entry, allowed)} for entry in group.entries]
    if speeds.reversing and any("max_curvature" not in each for each in own):
        top.add("limits.max_curvature", "it has to be given where speed.min is below 0: a robot that reverses could "
                "turn on the spot without it, and its changes of gear come from paths of bounded curvature",
                "a number (in 1/m) above 0")
    return Caps(**{name: np.array([each.get(name, np.inf) for each in own]) for name in _LIMITS})


def _limits(entries: Entries, allowed: dict[str, Description]) -> dict[str, float]:
    limits = entries.mapping("limits", "keys: " + ", ".join(allowed))
    if limits is None:
        return {}
    found = limits.given(allowed)
    limits.done(_INSTEAD)
    return found


def _boxes(top: Entries, group: common.Group) -> np.ndarray:
    """Length, width and offsets, shape (N, 4): a robot's own, else those for all; a point where there are none."""
    shared = _footprint(top)
    boxes = np.zeros((len(group.entries), 4))
    for k, entry in enumerate(group.entries):
        given = {**shared, **_footprint(entry)}
        missing = [name for name in ("footprint_length", "footprint_width") if given and name not in given]
        for name in missing:
            entry.add(f"footprint.{name}", "it has to be given where there is a footprint", "a number (in m) above 0")
        boxes[k] = [given.get(name, 0.0) for name in _FOOTPRINT]
    return boxes


def _footprint(entries: Entries) -> dict[str, float]:
    footprint = entries.mapping("footprint", "keys: " + ", ".join(_FOOTPRINT))
    if footprint is None:
        return {}
    found = footprint.given(_FOOTPRINT)
    footprint.done()
    return found


def _prices(top: Entries, speeds: Speeds) -> SmallPrices:
    usual = {} if speeds.fixed else {"speed": _PRICE_OF_SPEED}
    prices = top.mapping("prices", "keys: " + ", ".join(_PRICES))
    if prices is not None:
        known = {"curvature_rate": _PRICES["curvature_rate"]} if speeds.fixed else _PRICES
        usual |= prices.given(known)
        prices.done(dict.fromkeys(_PRICES, "speed: {min:, max:} with two different ends, or no such price"))
    return SmallPrices(**usual)


def write(problem: DirectProblem) -> dict[str, Any]:
    """The file of a problem: what stands at its default is left out."""
    document: dict[str, Any] = {"robots": [_robot(problem, k) for k in range(len(problem))]}
    document["edges"] = common.graph_entries(problem.names, problem.edges, problem.weights)
    document |= {"coupling": problem.coupling, "duration": problem.duration, "intervals": problem.intervals}
    speeds = problem.speeds
    document["speed"] = speeds.asked if speeds.fixed else {
        "min": speeds.lowest, "max": speeds.highest, "asked": speeds.asked}
    if problem.min_clearance > 0:
        document["min_clearance"] = problem.min_clearance
    if problem.alignment > 0:
        document["alignment"] = problem.alignment
    prices = attrs.asdict(problem.prices)
    kept = {name: price for name, price in prices.items() if price > 0 or (name == "speed" and not speeds.fixed)}
    if kept:
        document["prices"] = kept
    return document


def _robot(problem: DirectProblem, k: int) -> dict[str, Any]:
    entry: dict[str, Any] = {"name": problem.names[k], "start": problem.starts[k].tolist()}
    if problem.placed[k]:
        entry["end"] = problem.ends[k].tolist()
    elif problem.headed[k]:
        entry["end_heading"] = float(problem.ends[k, 2])
    limits = {name: float(getattr(problem.caps, name)[k]) for name in _LIMITS}
    finite = {name: value for name, value in limits.items() if np.isfinite(value)}
    if finite:
        entry["limits"] = finite
    if problem.boxes[k].any():
        entry["footprint"] = dict(zip(_FOOTPRINT, problem.boxes[k].tolist()))
    return entry
