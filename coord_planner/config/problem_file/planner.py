# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``model: planner``: one program of the running planner, a tick's or a reference's, with all that it depends on.

It is written by the planner when a plan fails. Beside the keys of other models (where a key means the same) it holds

    times, pace              nodes on the clock; seconds of the manoeuvre per second of the clock
    prices                   all of them
    watch                    for each pair: unit vectors and gaps at the nodes
    fences                   for each line that a robot stays on one side of: unit vectors and reaches at the nodes
    compared                 rows that compare neighbours at other than equal moments (see core.problem.Comparison)
    robots[..].state         what the machine had reached and been commanded at the first node
    robots[..].end_state     what is asked at the last node, of the names in core.problem.STATES; free where left out
    robots[..].limits, footprint, response      as in a parameter file
    robots[..].asked_speed, turn_speed, full_speed      in the intervals
    robots[..].bounds        in force at nodes 1 .. M
    begun                    where the solver started: vector, multipliers (bounds, rows), warm
    reason                   why it was saved
"""

from __future__ import annotations

from typing import Any, Optional

import attrs
import numpy as np

from ...core import ocp
from ...core.case import PlannerCase
from ...core.fleet import Fleet, Footprint, Limits, Response, Robot
from ...core.parameter import Description, describe
from ...core.problem import STATES, Bounds, Fences, Problem, Watch
from ...core.settings import Coupling, Prices
from ...core.solver import Start
from ...errors import SettingsError
from . import common, comparison
from .entries import REQUIRED, Entries

_ANY = Description("a number", minimum=-1e9, maximum=1e9)
_FAR = 1e9  # a reach that stands for none
_BOUNDS = tuple(field.name for field in attrs.fields(Bounds))


def read(top: Entries) -> PlannerCase:
    """A program from a file.

    Raises:
        SettingsError: with all that is wrong with it.
    """
    group = common.robots(top, "x, y, heading", ends=False)
    edges, weights, coupling = common.graph(top, group.names)
    duration, intervals = common.times(top, len(group.names))
    times = _times(top, duration, intervals)
    per_robot = [_Robot.read(entry, start, intervals) for entry, start in zip(group.entries, group.starts)]
    pace = top.value("pace", Description("pace", above=0.0, maximum=10.0))
    alignment = top.value("alignment", describe(Coupling)["alignment"], default=0.0)
    prices = _group(top, "prices", Prices)
    watch, fences = _watch(top, group.names, intervals), _fences(top, group.names, intervals)
    compared = comparison.read(top, len(edges), intervals)
    begun, reason = top.mapping("begun", "vector:, multipliers:, warm:"), top.value("reason", _ANY, "str", "")
    top.raise_any()
    try:
        fleet = Fleet(tuple(each.robot for each in per_robot))
    except SettingsError as error:
        top.add("robots", error.problem, error.allowed)
        top.raise_any()
    assert times is not None
    problem = Problem(
        fleet=fleet, edges=edges, weights=weights, coupling=coupling, alignment=float(alignment), prices=prices,
        times=times, pace=float(pace), initial=np.stack([each.initial for each in per_robot]),
        asked_speed=np.stack([each.asked_speed for each in per_robot]),
        turn_speed=np.stack([each.turn_speed for each in per_robot]),
        full_speed=np.array([each.full_speed for each in per_robot]),
        target=np.stack([each.target for each in per_robot]),
        bounds=Bounds(*(np.stack([each.bounds[i] for each in per_robot]) for i in range(len(_BOUNDS)))), watch=watch,
        fences=fences,
        compared=compared,
    )
    start, warm = _begun(begun, problem)
    top.done()
    top.raise_any()
    return PlannerCase(problem, start, warm, reason)


def write(case: PlannerCase) -> dict[str, Any]:
    """The file of a program."""
    problem = case.problem
    names = problem.fleet.names
    watch = [
        {"pair": [names[k], names[j]], "normals": normals.tolist(), "gaps": gaps.tolist()}
        for (k, j), normals, gaps in zip(problem.watch.pairs, problem.watch.normals, problem.watch.gaps)
    ]
    fences = [
        {"robot": names[k], "normals": normals.tolist(), "reaches": np.nan_to_num(reaches, posinf=_FAR).tolist()}
        for k, normals, reaches in zip(problem.fences.robots, problem.fences.normals, problem.fences.reaches)
    ]
    document = {
        "model": "planner", "reason": case.reason, "robots": [_entry(problem, k) for k in range(len(names))],
        "edges": common.graph_entries(names, problem.edges, problem.weights), "coupling": problem.coupling,
        "alignment": problem.alignment, "prices": attrs.asdict(problem.prices),
        "duration": float(problem.times[-1] - problem.times[0]), "intervals": len(problem.times) - 1,
        "times": problem.times.tolist(), "pace": problem.pace, "watch": watch,
        "fences": fences,
    }
    if problem.compared is not None:
        document["compared"] = comparison.write(problem.compared)
    start = case.start
    if start is not None and not all(np.isfinite(part).all() for part in (start.vector, *(start.multipliers or ()))):
        document["reason"] = f"{case.reason} (where the solver began was not finite, and is left out)".strip()
    elif start is not None:
        begun: dict[str, Any] = {"vector": start.vector.tolist(), "warm": case.warm}
        if start.multipliers is not None:
            begun["multipliers"] = dict(zip(("bounds", "rows"), (part.tolist() for part in start.multipliers)))
        document["begun"] = begun
    return document


@attrs.frozen(eq=False)
class _Robot:
    robot: Robot
    initial: np.ndarray
    target: np.ndarray
    asked_speed: np.ndarray
    turn_speed: np.ndarray
    full_speed: float
    bounds: tuple[np.ndarray, ...]

    @classmethod
    def read(cls, entry: Entries, start: np.ndarray, intervals: int) -> _Robot:
        name = str(entry.plainly("name"))
        robot = Robot(name, *(_group(entry, key, kind) for key, kind in (
            ("limits", Limits), ("footprint", Footprint), ("response", Response))))
        initial = np.concatenate([start, _state(entry, "state", STATES[3:], required=True)])
        target = _state(entry, "end_state", STATES, required=False)
        profiles = [entry.array(key, (intervals,), "one for each interval") for key in ("asked_speed", "turn_speed")]
        full = entry.value("full_speed", Description("full speed", "m/s", above=0.0, maximum=20.0))
        limits = entry.mapping("bounds", "keys: " + ", ".join(_BOUNDS))
        if limits is None and not entry.has("bounds"):
            entry.add("bounds", "it has to be given", "keys: " + ", ".join(_BOUNDS))
        bounds = [None if limits is None else limits.array(key, (intervals,), "one for each node but the first")
                  for key in _BOUNDS]
        if limits is not None:
            limits.done()
        entry.done()
        blank = np.ones(intervals)
        asked, turn = (blank if each is None else each for each in profiles)
        return cls(robot, initial, target, asked, turn, 1.0 if full is None else float(full),
                   tuple(blank if each is None else each for each in bounds))


def _entry(problem: Problem, k: int) -> dict[str, Any]:
    robot = problem.fleet.robots[k]
    initial, target = problem.initial[k].tolist(), problem.target[k].tolist()
    return {
        "name": robot.name, "start": initial[:3], "state": dict(zip(STATES[3:], initial[3:])),
        "end_state": {name: value for name, value in zip(STATES, target) if value == value},
        "limits": attrs.asdict(robot.limits), "footprint": attrs.asdict(robot.footprint),
        "response": attrs.asdict(robot.response), "asked_speed": problem.asked_speed[k].tolist(),
        "turn_speed": problem.turn_speed[k].tolist(),
        "full_speed": float(problem.full_speed[k]),
        "bounds": {name: getattr(problem.bounds, name)[k].tolist() for name in _BOUNDS},
    }


def _group(entries: Entries, name: str, kind: type) -> Any:
    """A settings group; every field may be left out for its default."""
    below = entries.mapping(name, "keys: " + ", ".join(describe(kind)))
    if below is None:
        return kind()
    values = below.given(describe(kind))
    below.done()
    try:
        return kind(**values)
    except SettingsError as error:
        below.add(error.key, error.problem, error.allowed)
        return kind()


def _state(entry: Entries, name: str, names: tuple[str, ...], required: bool) -> np.ndarray:
    below = entry.mapping(name, "keys: " + ", ".join(names))
    if below is None:
        if required and not entry.has(name):
            entry.add(name, "it has to be given", "keys: " + ", ".join(names))
        return np.full(len(names), 0.0 if required else np.nan)
    values = [below.value(key, _ANY, default=REQUIRED if required else np.nan) for key in names]
    below.done()
    return np.array([0.0 if value is None else value for value in values])


def _times(top: Entries, duration: float, intervals: int) -> Optional[np.ndarray]:
    times = top.array("times", (intervals + 1,), "nodes, one more than intervals")
    if times is None:
        return None
    if not (np.diff(times) > 0).all() or abs(times[-1] - times[0] - duration) > 1e-6 * max(duration, 1.0):
        top.add("times", "they do not fit", "increasing seconds whose last less first is the duration")
    return times


def _watch(top: Entries, names: tuple[str, ...], intervals: int) -> Watch:
    what = "a list of {pair: [NAME, NAME], normals:, gaps:}"
    pairs, normals, gaps = [], [], []
    for i, entry in enumerate(top.listed("watch", what)):
        below = top.at("watch", i)
        pair = below.plainly("pair") if isinstance(entry, dict) else None
        if not (isinstance(pair, list) and len(pair) == 2 and all(name in names for name in pair)):
            top.complaints.add("it names no pair of robots of the file", f"watch[{i}]", what)
            continue
        normal = below.array("normals", (intervals, 2), "one vector for each node but the first")
        gap = below.array("gaps", (intervals,), "one for each node but the first")
        below.done()
        if normal is not None and gap is not None:
            pairs.append([names.index(name) for name in pair])
            normals.append(normal)
            gaps.append(gap)
    count = len(pairs)
    return Watch(np.array(pairs, dtype=int).reshape(count, 2), np.array(normals).reshape(count, intervals, 2),
                 np.array(gaps).reshape(count, intervals))


def _fences(top: Entries, names: tuple[str, ...], intervals: int) -> Fences:
    what = "a list of {robot: NAME, normals:, reaches:}"
    robots, normals, reaches = [], [], []
    for i, entry in enumerate(top.listed("fences", what)):
        below = top.at("fences", i)
        name = below.plainly("robot") if isinstance(entry, dict) else None
        if name not in names:
            top.complaints.add("it names no robot of the file", f"fences[{i}]", what)
            continue
        normal = below.array("normals", (intervals, 2), "one vector for each node but the first")
        reach = below.array("reaches", (intervals,), "one for each node but the first")
        below.done()
        if normal is not None and reach is not None:
            robots.append(names.index(name))
            normals.append(normal)
            reaches.append(np.where(reach < _FAR, reach, np.inf))
    count = len(robots)
    return Fences(np.array(robots, dtype=int), np.array(normals).reshape(count, intervals, 2),
                  np.array(reaches).reshape(count, intervals))


def _begun(begun: Optional[Entries], problem: Problem) -> tuple[Optional[Start], bool]:
    if begun is None:
        return None, False
    variables, rows = ocp.variable_blocks(problem.shape).size, ocp.row_blocks(problem.shape).size
    vector = begun.array("vector", (variables,), "one for each variable")
    warm = begun.value("warm", Description("warm start"), "bool", False)
    given = begun.mapping("multipliers", "bounds: and rows:")
    multipliers = None
    if given is not None:
        found = given.array("bounds", (variables,), "one a variable"), given.array("rows", (rows,), "one a row")
        given.done()
        if found[0] is not None and found[1] is not None:
            multipliers = (found[0], found[1])
    begun.done()
    if vector is None:
        return None, False
    return Start(vector, multipliers), bool(warm)
