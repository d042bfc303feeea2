# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What manoeuvres say in words of their own: where robots shall arrive, for the point that is planned with; pivots."""

from __future__ import annotations

import math
from collections.abc import Mapping

import attrs

from ..core.manoeuvre import End, Manoeuvre, RowEnd, Sequence, ToEnds, Wheel
from ..errors import SettingsError
from .complaints import nearest, shown
from .connection import Connection

_FARTHEST = 1e6  # metres or degrees; beyond it lies a slip of the pen


# The field of a kind that holds words of its own.
WORDED: dict[type, str] = {ToEnds: "ends_deg", Wheel: "pivot", RowEnd: "rows", Sequence: "parts"}


def understood(manoeuvre: Manoeuvre, connections: Mapping[str, Connection]) -> Manoeuvre:
    """The manoeuvre with the words in its fields read; SettingsError for those that mean nothing."""
    if isinstance(manoeuvre, ToEnds):
        return for_turning_points(manoeuvre, connections)
    if isinstance(manoeuvre, Wheel):
        about = manoeuvre.about()
        if about is not None and about.point is None and about.beside not in connections:
            raise _unknown(manoeuvre.pivot, about.beside, connections, "pivot")
    if isinstance(manoeuvre, RowEnd):
        _check_rows(manoeuvre, connections)
    return manoeuvre


def with_parts(sequence: Sequence, manoeuvres: Mapping[str, Manoeuvre]) -> Sequence:
    """The sequence with the manoeuvres that its parts name; SettingsError for a part that is none."""
    if not sequence.parts:
        raise SettingsError("it has no parts", key="parts", allowed="at least one: NAME or 'straight METRES'")
    alone = {name: manoeuvre for name, manoeuvre in manoeuvres.items() if not isinstance(manoeuvre, Sequence)}
    for part in sequence.parts:
        if sequence.straight(part) is None and part not in alone:
            known = part in manoeuvres
            words = "is itself a sequence" if known else f"is not in manoeuvres.names{nearest(part, alone)}"
            raise SettingsError(f"{shown(part)} {words}", key="parts", allowed="'straight METRES', " + ", ".join(alone))
    return attrs.evolve(sequence, named={part: alone[part] for part in sequence.parts if part in alone})


def _check_rows(manoeuvre: RowEnd, connections: Mapping[str, Connection]) -> None:
    listed = manoeuvre.listed()
    for entry, name in zip(manoeuvre.rows, listed):
        if name not in connections:
            raise _unknown(entry, name, connections, "rows")
    if bool(listed) != (manoeuvre.order == "listed"):
        raise SettingsError(
            f"rows is {'given' if listed else 'empty'} and order is {manoeuvre.order!r}", key="rows",
            allowed="a row for each robot with order 'listed', and none otherwise",
        )


def for_turning_points(manoeuvre: ToEnds, connections: Mapping[str, Connection]) -> ToEnds:
    """The same ends for the points that are planned with; end poses in a file mean the reported points.

    Raises:
        SettingsError: an end that cannot be used, an end for a robot that is not there, no end at all.
    """
    ends = manoeuvre.ends()
    if not ends:
        raise SettingsError("no robot has an end", key="ends_deg", allowed="an end for at least one robot")
    entries = []
    for entry, (name, end) in zip(manoeuvre.ends_deg, ends.items()):
        if name not in connections:
            raise _unknown(entry, name, connections, "ends_deg")
        if any(number is not None and abs(number) > _FARTHEST for number in (end.x, end.y, math.degrees(end.heading))):
            raise SettingsError(f"{shown(entry)} holds a number out of range", key="ends_deg",
                                allowed=f"at most {_FARTHEST:g} in size")
        entries.append(_shifted(entry, name, end, connections[name]))
    return attrs.evolve(manoeuvre, ends_deg=tuple(entries))


def _unknown(entry: str, name: str, connections: Mapping[str, Connection], key: str) -> SettingsError:
    return SettingsError(f"{shown(entry)} names {shown(name)}, which is not in robots.names"
                         f"{nearest(name, connections)}", key=key, allowed=", ".join(connections))


def _shifted(entry: str, name: str, end: End, connection: Connection) -> str:
    if end.x is None or end.y is None or connection.pose_offset_x == 0.0:
        return entry
    x, y, heading = connection.planned_pose(end.x, end.y, end.heading)
    return f"{name} pose {x!r} {y!r} {math.degrees(heading)!r}"
