# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is sound and still worth knowing before a fleet is driven with it."""

from __future__ import annotations

import numpy as np

from ..core.manoeuvre import ToEnds, TurnAway, work_out
from ..errors import RefusedError
from .configuration import Configuration


def notes(configuration: Configuration) -> list[str]:
    """One sentence for each thing that is allowed and may not be meant."""
    return [*_fleet(configuration), *_graph(configuration), *_manoeuvres(configuration), *_simulation(configuration)]


def _fleet(configuration: Configuration) -> list[str]:
    found = []
    disabled = [name for name in configuration.fleet.names if name not in configuration.enabled]
    if disabled:
        found.append(f"{', '.join(disabled)} is not enabled and no part of the plan")
    if not configuration.settings.commands.publish:
        found.append("commands.publish is false: the planner plans and drives nobody")
    if configuration.activate_on_start:
        found.append("activate_on_start is true: the planner takes requests as soon as it runs")
    return found


def _graph(configuration: Configuration) -> list[str]:
    if len(configuration.fleet) < 2:
        return []
    if not configuration.graph.edges:
        return ["graph.edges is empty: nobody copies anybody"]
    found = []
    parts = configuration.graph.components()
    if len(parts) > 1:
        words = " | ".join(" ".join(part) for part in parts)
        found.append(f"the neighbour graph falls into {len(parts)} parts that do not copy each other: {words}")
    return found


def _manoeuvres(configuration: Configuration) -> list[str]:
    if not configuration.manoeuvres:
        return ["manoeuvres.names is empty: there is nothing to begin"]
    found = []
    for name, manoeuvre in configuration.manoeuvres.items():
        coupling = manoeuvre.coupling if manoeuvre.coupling is not None else configuration.settings.coupling.strength
        if isinstance(manoeuvre, ToEnds):
            found += _without_end(configuration, name, manoeuvre, coupling)
        if manoeuvre.end_speed > manoeuvre.speed:
            found.append(f"{name} ends faster, at {manoeuvre.end_speed:g} m/s, than it is asked to drive, "
                         f"{manoeuvre.speed:g} m/s")
        found += _refusal(configuration, name)
    return found


def _without_end(configuration: Configuration, name: str, manoeuvre: ToEnds, coupling: float) -> list[str]:
    ends = manoeuvre.ends()
    copying = [robot for robot in configuration.fleet.names if robot not in ends]
    if copying and coupling == 0.0:
        return [f"{name} gives no end to {', '.join(copying)}, and at coupling 0 nobody copies"]
    alone = [robot for part in configuration.graph.components() if not set(part) & set(ends) for robot in part]
    return [f"{name} gives no end to {', '.join(alone)} nor to anyone they could copy"] if alone else []


def _refusal(configuration: Configuration, name: str) -> list[str]:
    """Whether the manoeuvre would be refused at once when begun from the starts in the file."""
    fleet = configuration.fleet
    if any(robot not in configuration.starts for robot in fleet.names):
        return []
    if isinstance(configuration.manoeuvres[name], TurnAway):  # which is begun by a hazard, in motion
        return []
    poses = np.array([configuration.starts[robot] for robot in fleet.names])
    hops = configuration.graph.hops()
    try:
        work_out(name, configuration.manoeuvres[name], fleet, configuration.settings, poses, 0.0, hops)
    except RefusedError as refused:
        return [f"{name} would be refused from the starts in this file: {refused}"]
    return []


def _simulation(configuration: Configuration) -> list[str]:
    found = []
    missing = [name for name in configuration.fleet.names if name not in configuration.starts]
    if missing:
        found.append(f"{', '.join(missing)} has no start: the file cannot be rehearsed")
    simulation, oldest = configuration.simulation, configuration.settings.poses.max_age
    age = simulation.pose_delay + 1.0 / simulation.pose_rate
    if age > oldest:
        found.append(f"simulated poses get {age:.2f} s old, and poses.max_age refuses them beyond {oldest:g} s")
    return found
