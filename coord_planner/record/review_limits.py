# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How near each robot came to each of its limits in a recording, from what it drove; and what it was asked for."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np

from ..core.settings import SiteRules
from .adherence import outside_limits
from .review_fleet import FleetRecord
from .review_turns import turn_rates

_OVER = 0.25  # seconds over which changes are measured: shorter ones are noise
# What is measured, and the limits of the robot and of the site that it is held against.
_HELD_AGAINST = {
    "max_speed": "max_speed", "max_lateral_acceleration": "max_lateral_acceleration",
}


def limits(record: FleetRecord) -> list[dict[str, Any]]:
    """For each robot and limit: the value that came nearest to it, when, what is allowed, and the part that was used.

    Without a parameter file nothing is known of what is allowed: ``allowed`` and ``used`` are then None.
    """
    return [row for number in range(len(record.robots)) for row in _of_robot(record, number)]


def commands_outside(record: FleetRecord) -> int | None:
    """How many commands break a limit of their robot; None where limits or common commands are not known."""
    if record.configuration is None or not record.run.commanded.shape[1]:
        return None
    if not np.isfinite(record.run.commanded).all():
        return None
    return int(outside_limits(record.run).sum())


def _of_robot(record: FleetRecord, number: int) -> Iterator[dict[str, Any]]:
    run, name = record.run, record.robots[number].name
    known = record.configuration is not None
    robot = run.fleet.robots[number]
    rules = record.configuration.settings.site_rules if record.configuration is not None else None
    for limit, values in _measured(record, number).items():
        sizes = np.where(np.isfinite(values), values, -math.inf)
        at = int(np.argmax(sizes))
        if not math.isfinite(sizes[at]):
            continue
        allowed = _allowed(getattr(robot.limits, limit), limit, rules) if known else math.nan
        value = float(values[at])
        yield {"robot": name, "limit": limit, "value": value, "at_s": float(run.times[at]), "allowed": allowed,
               "used": value / allowed if known and allowed > 0.0 else math.nan}


def _allowed(own: float, limit: str, rules: SiteRules | None) -> float:
    """The robot's own limit, or the site's where that is tighter."""
    site = getattr(rules, _HELD_AGAINST[limit]) if rules is not None and limit in _HELD_AGAINST else math.inf
    return float(min(own, site))


def _measured(record: FleetRecord, number: int) -> dict[str, np.ndarray]:
    """Magnitudes on the common times that are held against the limits of the same names."""
    run = record.run
    speeds, curvatures = run.speeds[number], run.curvatures[number]
    rates = turn_rates(record)[number]
    change = _slope(run.times, np.abs(speeds))
    return {
        "max_speed": speeds, "max_acceleration": change, "max_braking": -change, "max_curvature": np.abs(curvatures),
        "max_curvature_rate": np.abs(_slope(run.times, curvatures)), "max_turn_rate": np.abs(rates),
        "max_lateral_acceleration": np.abs(speeds * rates),
    }


def _slope(times: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Change a second, over a quarter of a second or two samples; NaN at the ends and beside gaps."""
    out = np.full(len(values), math.nan)
    if len(times) < 3:
        return out
    reach = max(1, round(_OVER / 2 / float(np.median(np.diff(times)))))
    if len(times) > 2 * reach:
        out[reach:-reach] = (values[2 * reach:] - values[:-2 * reach]) / (times[2 * reach:] - times[:-2 * reach])
    return out
