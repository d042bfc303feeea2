# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Configuration: everything a parameter file says, typed and checked."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import attrs
import numpy as np

from ..core.fleet import Fleet
from ..core.graph import Edge, NeighbourGraph
from ..core.manoeuvre import Manoeuvre
from ..core.neighbours import from_poses
from ..core.parameter import Description
from ..core.settings import Settings
from ..errors import SettingsError
from .connection import Connection, Pose
from .groups import Failures, Simulation


@attrs.frozen
class Declaration:
    """What a ROS node needs to declare one parameter.

    Attributes:
        key: dotted, as in the file.
        kind: ``bool``, ``int``, ``float``, ``str``, ``floats`` or ``strs``.
        default: what is in force when the key is left out; None: then it has no value.
        value: what is in force, of the kind (a whole number given for a real one is a float here).
        description: meaning, unit, range, choices, and whether it may be changed while running.
    """

    key: str
    kind: str
    default: Any
    value: Any
    description: Description


@attrs.frozen
class Configuration:
    """A sound parameter file. Poses are those of the turning points (see Connection), SI units, radians.

    Attributes:
        file: where it came from, for messages; "" when it came from elsewhere.
        flat: what was given, by dotted key, each value of its kind.
        settings, fleet, manoeuvres: what the pure planning code needs.
        edges: (name, name, weight) of the neighbour graph.
        frame, fleet_name, listen_time (s), invented: of the group ``fleet``.
        connections: by robot.
        failures: whether and where problems without a plan are kept.
        simulation: how imperfect simulated robots are.
        starts: (x, y, heading) by robot; robots without a start are absent.
        enabled: robots that the planner drives.
        activate_on_start: whether the planner node activates itself.
    """

    file: str
    flat: Mapping[str, Any]
    settings: Settings
    fleet: Fleet
    edges: tuple[Edge, ...]
    manoeuvres: Mapping[str, Manoeuvre]
    frame: str
    fleet_name: str
    listen_time: float
    invented: bool
    connections: Mapping[str, Connection]
    failures: Failures
    simulation: Simulation
    starts: Mapping[str, Pose]
    enabled: frozenset[str]
    activate_on_start: bool

    @property
    def driven(self) -> Fleet:
        """The robots that are enabled: those that the planner drives."""
        return Fleet(tuple(robot for robot in self.fleet.robots if robot.name in self.enabled))

    @property
    def graph(self) -> NeighbourGraph:
        """The neighbour graph over the whole fleet: as listed, or as the starts give it."""
        if self.settings.neighbours.source == "listed":
            return NeighbourGraph(self.fleet.names, self.edges)
        placed = tuple(name for name in self.fleet.names if name in self.starts)
        places = np.array([self.starts[name][:2] for name in placed]).reshape(-1, 2)
        return NeighbourGraph(self.fleet.names, from_poses(self.settings.neighbours, placed, places).edges)

    def all_starts(self) -> dict[str, Pose]:
        """Starts of all robots, for a simulation; SettingsError when one has none."""
        missing = [name for name in self.fleet.names if name not in self.starts]
        if missing:
            raise SettingsError(f"{', '.join(missing)} stands nowhere; a simulation needs a start for every robot",
                                key=f"robots.{missing[0]}.start_x", file=self.file,
                                allowed="start_x, start_y (m) and start_heading_deg for each robot")
        return dict(self.starts)

    def manoeuvre(self, name: str) -> Manoeuvre:
        """A manoeuvre by its name; SettingsError for an unknown one."""
        if name not in self.manoeuvres:
            raise SettingsError(f"there is no manoeuvre {name!r}", key="manoeuvres.names", file=self.file,
                                allowed=", ".join(self.manoeuvres) or "none is named in the file")
        return self.manoeuvres[name]
