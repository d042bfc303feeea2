# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Every key that a parameter file may hold, given the names of its robots and manoeuvres."""

from __future__ import annotations

import re
import typing
from collections.abc import Iterable, Mapping
from typing import Any

import attrs

from ..core.fleet import Footprint, Limits, Response
from ..core.manoeuvre import KINDS
from ..core.parameter import Description, describe
from ..core.settings import Settings
from . import areas
from .connection import Connection
from .groups import Failures, FleetWords, Graph, Names, Node, Place, Simulation
from .values import kind_of

# Groups whose fields stand per robot, in robots.NAME.* and robot_defaults.*.
ROBOT_GROUPS = (Limits, Footprint, Response, Connection, Place)
# One key for each group of the file that does not depend on names.
PLAIN_GROUPS: dict[str, type] = {"": Node, "fleet": FleetWords, "graph": Graph, "failures": Failures,
                                   "simulation": Simulation}
# Parameters that ROS gives to every node by itself.
_OF_ROS = re.compile(r"(use_sim_time|start_type_description_service|qos_overrides\..*)\Z")


@attrs.frozen
class Slot:
    """One key: its kind (see ``values.KINDS``), default and description.

    ``default`` is None for a key that may be left out without having a value, ``attrs.NOTHING`` for a key that
    must be given.
    """

    key: str
    kind: str
    default: Any
    description: Description


def group_types(parent: type) -> dict[str, type]:
    """The groups inside a group of groups, by field name."""
    return {name: hint for name, hint in typing.get_type_hints(parent).items() if attrs.has(hint)}


def slots(prefix: str, group: type) -> dict[str, Slot]:
    """One slot for each described field of a settings group."""
    hints = typing.get_type_hints(group)
    defaults = {field.name: field.default for field in attrs.fields(group)}
    found = {}
    for name, description in describe(group).items():
        key = f"{prefix}.{name}" if prefix else name
        found[key] = Slot(key, kind_of(hints[name]), defaults[name], description)
    return found


def name_slots() -> dict[str, Slot]:
    """``robots.names``, ``manoeuvres.names`` and the names of areas."""
    found = {}
    for slot in slots("", Names).values():
        key = next((group for group in areas.GROUPS if group.endswith(f".{slot.key}")), slot.key) + ".names"
        found[key] = attrs.evolve(slot, key=key)
    return found


def kind_slot(manoeuvre: str) -> Slot:
    """``manoeuvres.NAME.kind``."""
    key = f"manoeuvres.{manoeuvre}.kind"
    return Slot(key, "str", attrs.NOTHING, Description("what kind of turn it is", choices=tuple(KINDS)))


def layout(
    robots: Iterable[str], kinds: Mapping[str, str], named_areas: Mapping[str, Iterable[str]]
) -> dict[str, Slot]:
    """All keys for a fleet, its manoeuvres (name -> kind) and the site's areas (group -> names)."""
    found = name_slots()
    for prefix, group in {**PLAIN_GROUPS, **group_types(Settings)}.items():
        found |= slots(prefix, group)
    for group in ROBOT_GROUPS:
        # Read once, when the planner starts: each robot's own key then holds the value in force.
        for key, slot in slots("robot_defaults", group).items():
            found[key] = attrs.evolve(slot, description=attrs.evolve(slot.description, live=False))
        for name in robots:
            found |= slots(f"robots.{name}", group)
    for prefix, names in named_areas.items():
        for name in names:
            found |= slots(f"{prefix}.{name}", areas.GROUPS[prefix])
    for name, kind in kinds.items():
        found[f"manoeuvres.{name}.kind"] = kind_slot(name)
        found |= slots(f"manoeuvres.{name}", KINDS[kind])
    return found


def belongs_to_ros(key: str) -> bool:
    """Whether a key is a parameter that ROS itself gives to nodes."""
    return _OF_ROS.match(key) is not None
