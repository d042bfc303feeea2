# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A hazard that turns up in a rehearsal."""

from __future__ import annotations

from typing import Optional

import attrs

from ..core.coordinator import Coordinator
from ..core.manoeuvre import TurnAway
from ..core.messages import HazardPoint
from ..errors import SettingsError

_FORM = "'X Y SECONDS': a point in metres, and when it turns up after the motion began"


@attrs.frozen
class Sighting:
    """Where something turns up, metres, and when, seconds after the motion began; ``arm``: what turns away from it."""

    x: float
    y: float
    at_s: float
    arm: str = ""

    def point(self, since: float, now: float) -> Optional[HazardPoint]:
        """What the planner hears, seconds after the motion began."""
        return HazardPoint(self.x, self.y, now - since + self.at_s) if since >= self.at_s else None


def sighting(text: str, arm: str = "") -> Sighting:
    """A sighting from the command line; SettingsError for what cannot be read."""
    try:
        x, y, at_s = (float(word) for word in text.split())
    except ValueError:
        raise SettingsError(f"{text!r} cannot be read", key="--hazard", allowed=_FORM) from None
    if not (abs(x) < 1e6 and abs(y) < 1e6 and 0.0 <= at_s < 1e6):
        raise SettingsError(f"{text!r} is out of range", key="--hazard", allowed=_FORM)
    return Sighting(x, y, at_s, arm)


def turned_away(coordinator: Coordinator, seen: Sighting, began: float) -> dict[str, object]:
    """Who saw it, when, and the coupling by which the others copied; {} when nobody turned away from it."""
    made = coordinator.reference
    if made is None or made.task.hazard is None or made.task.name != seen.arm:
        return {}
    led = [name for name, end in zip(made.graph.names, made.task.ends) if end[2] == end[2]]
    return {"seen_by": led, "at": began + seen.at_s, "coupling": made.task.coupling}


def check_arming(manoeuvre: object, name: str) -> None:
    """SettingsError for a manoeuvre that turns away from nothing."""
    if not isinstance(manoeuvre, TurnAway):
        raise SettingsError(f"{name!r} does not turn away from anything", key="--arm",
                            allowed="a manoeuvre of the kind turn_away")
