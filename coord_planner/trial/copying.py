# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The copying law beside the plan of a manoeuvre and beside a rehearsal of it without noise."""

from __future__ import annotations

from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from ..config import Configuration
from ..core import manoeuvre as manoeuvres
from ..core import reference
from ..core.advice.conditions import Condition, conditions, led_by
from ..core.advice.copying import led_shares
from ..core.advice.measuring import Copied, copied, planned_turning
from ..core.graph import NeighbourGraph
from ..core.problem import POSE, STATES
from ..core.reference import Reference
from .rehearsal import rehearse
from .run import Run

Progress = Callable[[float], None]


@attrs.frozen(eq=False)
class LawBeside:
    """A manoeuvre from the starts of the file.

    Attributes:
        led: positions of the robots that have ends of their own.
        made: the reference. conditions: of the law. shares: what the law says, shape (N, len(led)).
        planned, driven: what came out, in the reference and in a rehearsal; None where nobody only copies, or
            nothing was rehearsed. run: that rehearsal.
    """

    led: tuple[int, ...]
    made: Reference
    conditions: tuple[Condition, ...]
    shares: np.ndarray
    planned: Optional[Copied]
    driven: Optional[Copied]
    run: Optional[Run]


def quiet(configuration: Configuration) -> Configuration:
    """The same file with poses that are measured exactly."""
    simulation = attrs.evolve(configuration.simulation, pose_noise_xy=0.0, pose_noise_heading_deg=0.0)
    return attrs.evolve(configuration, simulation=simulation)


def with_coupling(configuration: Configuration, name: str, coupling: float) -> Configuration:
    """The same file with another coupling for one manoeuvre."""
    changed = attrs.evolve(configuration.manoeuvres[name], coupling=coupling)
    return attrs.evolve(configuration, manoeuvres={**configuration.manoeuvres, name: changed})


def driven_graph(configuration: Configuration) -> NeighbourGraph:
    """The neighbour graph over the robots that are driven."""
    return configuration.graph.relative_to(configuration.driven.names)


def reference_from_starts(configuration: Configuration, name: str) -> Reference:
    """The reference of a manoeuvre, begun where the file has the robots stand; RefusedError when it is refused."""
    starts, fleet, graph = configuration.all_starts(), configuration.driven, driven_graph(configuration)
    states = np.zeros((len(fleet), len(STATES)))
    states[:, POSE] = [starts[robot] for robot in fleet.names]
    task = manoeuvres.work_out(
        name, configuration.manoeuvre(name), fleet, configuration.settings, states[:, POSE], 0.0, graph.hops()
    )
    return reference.make(task, fleet, graph, configuration.settings, states)


def beside_law(
    configuration: Configuration, name: str, *, drive: bool = True, progress: Progress = lambda _part: None
) -> LawBeside:
    """Plan a manoeuvre, rehearse it without noise, and hold both against the law.

    Raises:
        RefusedError: the manoeuvre is refused.
    """
    made = reference_from_starts(configuration, name)
    led = led_by(made.task)
    shares = led_shares(driven_graph(configuration), made.task.coupling, led)
    looked_at = conditions(made, configuration.driven, configuration.settings)
    run = rehearse(quiet(configuration), name, progress=progress) if drive else None
    if len(led) == len(configuration.driven):
        return LawBeside(led, made, looked_at, shares, None, None, run)
    planned = copied(*planned_turning(made), made.task.asked, shares, led)
    driven = None if run is None else copied(*_driven_turning(run, made), made.task.asked, shares, led)
    return LawBeside(led, made, looked_at, shares, planned, driven, run)


def _driven_turning(run: Run, made: Reference) -> tuple[np.ndarray, np.ndarray]:
    """Turning of the machines at the samples of a run, shape (N, S), 1/m, and the time that each stands for, s."""
    steps = np.gradient(run.times)
    return run.speeds * run.curvatures / made.task.asked[:, None], steps
