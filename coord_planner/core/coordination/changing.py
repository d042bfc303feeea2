# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""New settings, limits, members or neighbours, also in motion."""

from __future__ import annotations

from typing import Optional

from .. import members
from ..fleet import Fleet
from ..graph import NeighbourGraph
from ..observer import Estimate
from ..settings import Settings
from .renewal import remake_if_free
from .situation import Situation


def change(
    situation: Situation, now: float, settings: Optional[Settings] = None, fleet: Optional[Fleet] = None,
    graph: Optional[NeighbourGraph] = None,
) -> None:
    """See ``Coordinator.change``."""
    now = situation.moment(now)
    situation.settings = settings or situation.settings
    situation.members.want(fleet or situation.members.wanted)
    situation.fleet = members.renewed(situation.fleet, situation.members.wanted)
    everybody = situation.members.everybody(situation.fleet.names)
    situation.graph = (graph or situation.graph).relative_to(everybody)
    if situation.resting:
        situation.adopt()
    situation.observer.configure(situation.fleet, situation.settings.poses)
    if situation.moving and not situation.members.absent(situation.fleet.names):
        remake_if_free(situation, now)  # otherwise the next step does, when it has rows for them


def look_for_neighbours(situation: Situation, now: float, estimate: Estimate, at_once: bool = False) -> None:
    """Take up the graph that the poses give, where it is they that give it."""
    rows = [situation.fleet.index(name) for name in situation.driving]
    graph, places = situation.graph.relative_to(situation.driving), estimate.states[rows, :2]
    found = situation.lookout.found(situation.settings.neighbours, graph, places, now, at_once)
    if found is not None:
        change(situation, now, graph=found)
