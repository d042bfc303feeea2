# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""From flat keys to a Configuration."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from typing import Any, TypeVar

import attrs

from ..core.fleet import Fleet
from ..core.graph import Edge, NeighbourGraph
from ..core.manoeuvre import KINDS, Manoeuvre, Sequence
from ..core.parameter import describe
from ..core.settings import Settings
from ..errors import SettingsError
from .areas import GROUPS, with_areas
from .complaints import Complaints, Source, nearest, shown
from .configuration import Configuration, Declaration
from .connection import Connection
from .contradictions import check_together
from .ends import WORDED, understood, with_parts
from .groups import Failures, FleetWords, Graph, Node, Place, Simulation
from .layout import Slot, belongs_to_ros, group_types, kind_slot, layout, name_slots
from .robots import build_robot, check_shared_topics, resolve
from .values import allowed, convert

Group = TypeVar("Group")
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9]*(_[A-Za-z0-9]+)*\Z")
_NAME_RULE = "a letter first, then letters, digits and single underscores, e.g. mower_1"


@attrs.frozen
class Checked:
    """Given values, each known by its key and right by itself.

    Attributes:
        slots: every key that this fleet and its manoeuvres may have. given: values by key, each of its kind.
        robots: names. kinds: kind of each manoeuvre. areas: names of areas by group.
    """

    slots: Mapping[str, Slot]
    given: Mapping[str, Any]
    robots: tuple[str, ...]
    kinds: Mapping[str, str]
    areas: Mapping[str, tuple[str, ...]]


def checked(flat: Mapping[str, Any], source: Source) -> Checked:
    """Check every key and value by itself; SettingsError with all that is wrong."""
    flat = {str(key): value for key, value in flat.items() if not belongs_to_ros(str(key))}
    complaints = Complaints(source)
    robots, kinds, areas = _names(flat, complaints)
    complaints.raise_any()
    slots = layout(robots, kinds, areas)
    given = {}
    for key, value in flat.items():
        if key not in slots:
            complaints.add(*_unknown(key, slots, {"robots": robots, "manoeuvres": tuple(kinds), **areas}))
            continue
        slot = slots[key]
        with complaints.about(key):
            given[key] = convert(value, slot.kind, key, slot.description)
    for key, slot in slots.items():
        if slot.default is attrs.NOTHING and key not in flat:
            complaints.add("it has to be given", key, slot.description.text)
    complaints.raise_any()
    return Checked(slots, given, robots, kinds, areas)


def assemble(flat: Mapping[str, Any], source: Source) -> Configuration:
    """Check everything, by itself and together, and build the typed groups."""
    known = checked(flat, source)
    complaints = Complaints(source)
    values = [resolve(name, known.given, known.slots) for name in known.robots]
    robots = [build_robot(robot, complaints) for robot in values]
    check_shared_topics(values, complaints)
    words: FleetWords = _group(FleetWords, "fleet", known, complaints)
    _check_words(words, complaints)
    edges = _edges(known, complaints)
    settings = Settings(**{
        name: _group(group, name, known, complaints) for name, group in group_types(Settings).items()
    })
    settings = attrs.evolve(
        settings, site_rules=with_areas(settings.site_rules, known.given, known.areas, complaints)
    )
    simulation: Simulation = _group(Simulation, "simulation", known, complaints)
    complaints.raise_any()
    built = [robot for robot in robots if robot is not None]
    connections = {robot.name: connection for robot, connection, _ in built}
    manoeuvres = _manoeuvres(known, connections, complaints)
    check_together(values, settings, manoeuvres, simulation, complaints)
    complaints.raise_any()
    return Configuration(
        file=source.file, flat=dict(known.given), settings=settings,
        fleet=Fleet(tuple(robot for robot, _, _ in built)), edges=edges, manoeuvres=manoeuvres,
        frame=words.frame, fleet_name=words.name, listen_time=words.listen_time,
        invented=words.invented,
        connections=connections, failures=_group(Failures, "failures", known, complaints), simulation=simulation,
        starts={
            robot.name: _start(place, connection) for robot, connection, place in built if place.start_x is not None
        },
        enabled=frozenset(robot.name for robot, _, place in built if place.enabled),
        activate_on_start=_group(Node, "", known, complaints).activate_on_start,
    )


def declared(flat: Mapping[str, Any], source: Source) -> list[Declaration]:
    """Every parameter of the fleet and the manoeuvres that ``flat`` names."""
    known = checked(flat, source)
    own = {name: resolve(name, known.given, known.slots) for name in known.robots}
    found = []
    for key, slot in known.slots.items():
        value = known.given.get(key, slot.default)
        default = None if slot.default is attrs.NOTHING else slot.default
        prefix, _, field = key.rpartition(".")
        robot = own.get(prefix.removeprefix("robots."))
        if robot is not None and prefix.startswith("robots."):
            value = robot.values[field]
            without = {other: known.given[other] for other in known.given if other != key}
            default = resolve(robot.name, without, known.slots).values[field]
        found.append(Declaration(key, slot.kind, default, value, slot.description))
    return found


def _names(
    flat: Mapping[str, Any], complaints: Complaints
) -> tuple[tuple[str, ...], dict[str, str], dict[str, tuple[str, ...]]]:
    """Names of the robots, of the manoeuvres with their kinds, and of areas by group."""
    lists: dict[str, tuple[str, ...]] = {}
    for key, slot in name_slots().items():
        lists[key] = ()
        with complaints.about(key):
            if key in flat:
                lists[key] = convert(flat[key], slot.kind, key, slot.description)
        _check_names(key, lists[key], complaints)
    robots, manoeuvres = lists["robots.names"], lists["manoeuvres.names"]
    if not robots and not complaints.count:
        complaints.add("the fleet has no robots", "robots.names", "a list with at least one name")
    kinds = {}
    for name in dict.fromkeys(manoeuvres):
        slot = kind_slot(name)
        if slot.key not in flat:
            complaints.add(f"the manoeuvre {name!r} has no kind", slot.key, allowed(slot.kind, slot.description))
            continue
        with complaints.about(slot.key):
            kinds[name] = convert(flat[slot.key], slot.kind, slot.key, slot.description)
    return robots, kinds, {group: tuple(dict.fromkeys(lists[f"{group}.names"])) for group in GROUPS}


def _check_names(key: str, names: tuple[str, ...], complaints: Complaints) -> None:
    for name in dict.fromkeys(names):
        if not _NAME.match(name) or name == "names":
            complaints.add(f"{shown(name)} cannot be a name", key, _NAME_RULE)
        elif names.count(name) > 1:
            complaints.add(f"{name} is given more than once", key, "each name once")


def _unknown(
    key: str, slots: Mapping[str, Slot], named: Mapping[str, tuple[str, ...]]
) -> tuple[str, str, str]:
    """Problem, key and what is allowed for a key that is not known; ``named``: names by group."""
    for group, names in named.items():
        parts = key.removeprefix(f"{group}.").split(".")
        if key.startswith(f"{group}.") and len(parts) > 1 and parts[0] not in names:
            problem = f"{shown(parts[0])} is not in {group}.names{nearest(parts[0], names)}"
            return problem, key, ", ".join(names) or f"no name, for {group}.names is empty"
    group, _, field = key.rpartition(".")
    fields = [other.rpartition(".")[2] for other in slots if other.rpartition(".")[0] == group]
    if group and fields:
        close = nearest(field, fields, f"{group}.")
        return f"it is not a known key{close}", key, "" if close else f"in {group}: {', '.join(fields)}"
    close = nearest(key, slots)
    groups = dict.fromkeys(other.split(".")[0] for other in slots)
    return f"it is not a known key{close}", key, "" if close else f"at the top: {', '.join(groups)}"


def _group(group: type[Group], prefix: str, known: Checked, complaints: Complaints) -> Group:
    """A settings group from what was given; a contradiction inside it is complained about."""
    dotted = f"{prefix}." if prefix else ""
    values = {field: known.given[dotted + field] for field in describe(group) if dotted + field in known.given}
    try:
        return group(**values)
    except SettingsError as error:
        complaints.add(error.problem, f"{dotted}{error.key}", error.allowed)
        complaints.raise_any()
        raise


def _check_words(words: FleetWords, complaints: Complaints) -> None:
    for key, word in (("fleet.frame", words.frame), ("fleet.name", words.name)):
        if not re.match(r"\S+\Z", word):
            complaints.add(f"{shown(word)} is empty or has a space in it", key, "a word without spaces")


def _edges(known: Checked, complaints: Complaints) -> tuple[Edge, ...]:
    graph: Graph = _group(Graph, "graph", known, complaints)
    with complaints.about("graph.edges"):
        return NeighbourGraph(known.robots, tuple(_edge(entry) for entry in graph.edges)).edges
    return ()


def _edge(entry: str) -> Edge:
    words = entry.split()
    rule = "'NAME NAME' or 'NAME NAME WEIGHT', the weight a number above 0"
    if len(words) not in (2, 3):
        raise SettingsError(f"{shown(entry)} is no edge", allowed=rule)
    try:
        weight = float(words[2]) if len(words) == 3 else 1.0
    except ValueError:
        raise SettingsError(f"{shown(entry)} has a weight that is no number", allowed=rule) from None
    return words[0], words[1], weight


def _manoeuvres(known: Checked, connections: Mapping[str, Connection], complaints: Complaints) -> dict[str, Manoeuvre]:
    found: dict[str, Manoeuvre] = {}
    for name, kind in known.kinds.items():
        manoeuvre: Manoeuvre = _group(KINDS[kind], f"manoeuvres.{name}", known, complaints)
        with complaints.about(f"manoeuvres.{name}.{WORDED.get(KINDS[kind], 'kind')}"):
            found[name] = understood(manoeuvre, connections)
    for name, manoeuvre in found.items():
        if isinstance(manoeuvre, Sequence):
            with complaints.about(f"manoeuvres.{name}.parts"):
                found[name] = with_parts(manoeuvre, found)
    return found


def _start(place: Place, connection: Connection) -> tuple[float, float, float]:
    assert place.start_x is not None and place.start_y is not None  # build_robot complained otherwise
    return connection.planned_pose(place.start_x, place.start_y, math.radians(place.start_heading_deg))
