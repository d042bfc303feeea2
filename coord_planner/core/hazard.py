# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Points that arrive in motion: what is known of them, whether turning away is armed, and who would come near."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from . import rules
from .fence import Fencing, hazards
from .fleet import Fleet
from .messages import Caution, HazardPoint
from .reference import Reference
from .settings import Settings

Point = tuple[float, float]

FURTHEST = 1e7  # metres from the origin of the frame; nothing that is further away is believed
_SAME = 1.0  # metres; a point that near to the last one is the same thing, seen again
_STEP = 0.2  # seconds between the places of a way that are looked at


@attrs.frozen
class Near:
    """The robot nearest to a hazard, metres from it, whether it sees it, whether anybody does or will come near it."""

    robot: str
    distance: float
    sees: bool
    concerned: bool


@attrs.define
class HazardWatch:
    """The newest hazard, and what was done about it.

    Attributes:
        point: None when none is known. until: planner time at which it is forgotten.
        caution: what is told of it meanwhile.
        armed: name of the manoeuvre that turns away; "" when none is armed. armed_until: planner time.
        turned_for: the point for which turning away was begun.
    """

    point: Optional[Point] = None
    until: float = 0.0
    caution: Optional[Caution] = None
    armed: str = ""
    armed_until: float = 0.0
    turned_for: Optional[Point] = None

    def hear(self, point: Point, now: float, settings: Settings) -> None:
        """Keep a point."""
        self.point, self.until = point, now + settings.hazard.expires

    def faced(self, planned: Optional[Point]) -> bool:
        """Whether this is the point that is turned away from, or that the plan keeps away from (``planned``)."""
        if self.point is None:
            return False
        known = [other for other in (self.turned_for, planned) if other is not None]
        return any(float(np.hypot(*np.subtract(self.point, other))) <= _SAME for other in known)

    def take(self, heard: Optional[HazardPoint], now: float, settings: Settings) -> None:
        """What a snapshot says, and forget what has expired."""
        if heard is not None and np.abs([heard.x, heard.y]).max() <= FURTHEST and heard.heard <= now:
            self.hear((heard.x, heard.y), heard.heard, settings)
        self.look(now)

    def look(self, now: float) -> None:
        """Forget what has expired."""
        if self.point is not None and now >= self.until:
            self.point, self.caution, self.turned_for = None, None, None
        if self.armed and now >= self.armed_until:
            self.armed = ""

    def is_armed(self, now: float) -> bool:
        """Whether turning away is armed at a moment."""
        return bool(self.armed) and now < self.armed_until

    def shift(self, by: float) -> None:
        """The clock was set."""
        self.until, self.armed_until = self.until + by, self.armed_until + by


def nearest(
    point: Point, made: Reference, since: float, poses: np.ndarray, fleet: Fleet, settings: Settings
) -> Near:
    """Who is nearest to a point, and whether anybody sees it or could come near it on the way that is left.

    Args:
        since: second of the manoeuvre now. poses: now, shape (N, 3), NaN where not known.
    """
    distance = np.nan_to_num(np.hypot(*(poses[:, :2] - np.array(point)).T), nan=np.inf)
    first = int(np.argmin(distance))
    moments = np.arange(since, max(made.end, since) + _STEP, _STEP)
    way = made.states(moments)[:, :, :3]
    spare = Fencing(hazards(settings, point)).least(fleet, way)[0]
    sees = bool(distance[first] <= settings.hazard.sight)
    return Near(fleet.names[first], float(distance[first]), sees, sees or spare < settings.clearance.reach)


def told(near: Near, point: Point, settings: Settings, armed: bool) -> Caution:
    """The warning of a hazard."""
    if not near.concerned or (armed and not near.sees):
        return rules.hazard_known(settings, point)
    return rules.hazard_seen(settings, near.robot, point, near.distance, armed)
