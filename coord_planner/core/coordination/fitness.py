# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Whether what is asked for can be begun: the manoeuvre, and the fleet as it stands."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import attrs
import numpy as np

from ...errors import RefusedError, SettingsError
from ..manoeuvre import Manoeuvre
from ..messages import Snapshot
from ..observer import Estimate
from ..parameter import describe
from .situation import Situation


def manoeuvre_of(situation: Situation, name: str, overrides: Mapping[str, float]) -> Manoeuvre:
    """The manoeuvre of a name with some of its numbers overridden."""
    if name not in situation.manoeuvres:
        raise RefusedError(f"{name!r} is not a manoeuvre", "ask for one of " + ", ".join(situation.manoeuvres))
    wanted = situation.manoeuvres[name]
    there = [key for key in describe(type(wanted)) if not isinstance(getattr(wanted, key), (tuple, str))]
    for key, value in overrides.items():
        if key not in there:
            raise RefusedError(f"{name} has no number {key!r} to override", "override one of " + ", ".join(there))
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise SettingsError(f"{value!r} is not a number", key=key, allowed="a number")
    numbers: dict[str, Any] = {key: float(value) for key, value in overrides.items()}
    return attrs.evolve(wanted, **numbers)


def check_free(situation: Situation, verb: str) -> None:
    """The fleet rests."""
    if not situation.resting:
        raise RefusedError(f"nothing can be {verb}: the fleet is {situation.state.value}", "halt and abandon it first")


def check_alone(snapshot: Snapshot) -> None:
    """Nobody else drives the fleet."""
    if snapshot.other_planner:
        raise RefusedError(f"{snapshot.other_planner} drives this fleet too", "stop one of the two planners")


def check_joining(situation: Situation) -> None:
    """Whoever is to join can be driven."""
    for reason in situation.members.unfit(situation.fleet.names, situation.settings.poses).values():
        raise RefusedError(reason, "see to it, or disable it")


def check_fit(situation: Situation, estimate: Estimate, snapshot: Snapshot) -> None:
    """Every robot has a fresh pose and may be driven."""
    driving = situation.driving
    stale = [
        name for name, age in zip(situation.fleet.names, estimate.age)
        if name in driving and not age <= situation.settings.poses.max_age
    ]
    if stale:
        raise RefusedError(
            f"no fresh pose of {', '.join(stale)} ({situation.settings.poses.max_age:g} s allowed)",
            "check localisation, the topic, its frame and the clocks",
        )
    graph = situation.graph.relative_to(driving)
    if len(driving) > 1 and not graph.connected and not situation.settings.coupling.may_split:
        words = " | ".join(" ".join(part) for part in graph.components())
        raise RefusedError(
            f"the neighbour graph falls into parts that do not copy each other: {words}",
            "join them by an edge, or set coupling.may_split",
        )
    check_alone(snapshot)
    unready = sorted((snapshot.not_ready | snapshot.silent) & set(driving))
    if unready:
        raise RefusedError(f"{', '.join(unready)} not ready to be driven", "make them ready or disable them")


def check_time(snapshot: Snapshot) -> None:
    """It is known what time it is."""
    if not np.isfinite(snapshot.time):
        raise RefusedError("it is not known what time it is", "check the clock")
