# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parameter file -> typed settings; every error names the file, the key, the value and the remedy.

One format for the node and for the desk: a ROS 2 parameter file. The node hands its parameters over as flat
dotted keys (:func:`from_parameters`), the command reads the file (:func:`load`); all checks are the same.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import attrs

from .assemble import assemble, checked, declared
from .complaints import Complaints, SeveralSettingsErrors, Source, nearest
from .configuration import Configuration, Declaration
from .connection import Connection
from .file import read, scalar_or_list
from .groups import Simulation

__all__ = [
    "Configuration", "Connection", "Declaration", "SeveralSettingsErrors", "Simulation",
    "changed", "declarations", "from_parameters", "load", "set_values",
]


def load(path: str | Path) -> Configuration:
    """Read and check a parameter file.

    Raises:
        SettingsError: with all that is wrong with it, each with its file, line, key, value and what is allowed.
    """
    flat, lines = read(path)
    return assemble(flat, Source(str(path), lines))


def from_parameters(flat: Mapping[str, Any], file: str = "") -> Configuration:
    """Check flat dotted keys as ROS gives them (lists may be lists, tuples or arrays)."""
    return assemble(flat, Source(file))


def declarations(flat: Mapping[str, Any]) -> list[Declaration]:
    """Every parameter that the fleet and the manoeuvres named in ``flat`` have, to be declared by a node.

    ``flat`` must hold sound values (SettingsError otherwise); contradictions between them are not looked for.
    """
    return declared(flat, Source())


def changed(configuration: Configuration, updates: Mapping[str, Any]) -> Configuration:
    """The configuration with some keys changed while the planner runs, all of them or none.

    Raises:
        SettingsError: a key is not known or cannot change while running, or the values cannot be kept together.
    """
    slots = checked(configuration.flat, Source(configuration.file)).slots
    complaints = Complaints(Source())
    for key in updates:
        if key not in slots:
            complaints.add(f"it is not a known key{nearest(key, slots)}", key)
        elif not slots[key].description.live:
            complaints.add("it cannot be changed while the planner runs", key, _instead(key, slots))
    complaints.raise_any()
    return attrs.evolve(assemble({**configuration.flat, **updates}, Source()), file=configuration.file)


def _instead(key: str, slots: Mapping[str, Any]) -> str:
    own = key.replace("robot_defaults.", "robots.NAME.")
    example = next((other for other in slots if other.startswith("robots.") and other.endswith(key.rpartition(".")[2])
                    and slots[other].description.live), None)
    if key.startswith("robot_defaults.") and example:
        return f"{own}, for each robot"
    return "a change in the parameter file and a new start"


def set_values(flat: Mapping[str, Any], entries: Iterable[str]) -> dict[str, Any]:
    """Flat keys with values from the command line, each ``KEY=VALUE``, the value as in a parameter file.

    Raises:
        SettingsError: an entry has no ``=``, an unknown key or a value of the wrong type or range.
    """
    set_flat: dict[str, Any] = {}
    complaints = Complaints(Source("--set"))
    for entry in entries:
        key, equals, text = entry.partition("=")
        key = key.strip()
        if not equals or not key:
            complaints.add(f"{entry!r} is not understood", "", "KEY=VALUE, e.g. coupling.strength=0.5")
            continue
        with complaints.about(key):
            set_flat[key] = scalar_or_list(text)
    complaints.raise_any()
    merged = {**flat, **set_flat}
    checked(merged, Source("--set"))
    return merged
