# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a manoeuvre is worked out for, and what each kind makes of it."""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np

from ..dubins import ArcPath
from ..fleet import Fleet
from ..settings import Settings


@attrs.frozen(eq=False)
class Scene:
    """The fleet as it stands or drives when a manoeuvre begins. N robots.

    Attributes:
        poses: shape (N, 3), headings unwrapped. speed_now: of the fleet, m/s.
        neighbours: hops from robot to robot in the neighbour graph, shape (N, N), inf where there is no way.
        bends: curvatures that the robots drive at, shape (N,), 1/m; none when left out.
        hazard: a point that everybody keeps away from; None when none is known.
    """

    fleet: Fleet
    settings: Settings
    poses: np.ndarray
    speed_now: float
    neighbours: np.ndarray
    bends: np.ndarray = attrs.Factory(lambda self: np.zeros(len(self.poses)), takes_self=True)
    hazard: Optional[tuple[float, float]] = None


@attrs.frozen(eq=False)
class Laid:
    """Where everyone goes.

    Attributes:
        ends: shape (N, 3), windings chosen; NaN where nothing is asked. ways: a guessed way for each robot.
        duration: seconds that are given; 0: worked out from the longest way.
        max_curvature: tightest bend that is asked for, 1/m.
        speed: that was worked out, m/s; None: the asked one.
        marks: as in lay_out. turn_rates, behind, note, strip, waits, speeds, alike: as in Task.
        otherwise: other ways to do the same, to be tried in turn where this one cannot be kept.
    """

    ends: np.ndarray
    ways: tuple[ArcPath, ...]
    duration: float = 0.0
    max_curvature: float = math.inf
    speed: Optional[float] = None
    marks: Optional[np.ndarray] = None
    turn_rates: bool = False
    behind: Optional[np.ndarray] = None
    note: str = ""
    strip: tuple[tuple[tuple[float, float], float], ...] = ()
    waits: Optional[np.ndarray] = None
    speeds: Optional[np.ndarray] = None
    alike: bool = True
    otherwise: tuple[Laid, ...] = ()
