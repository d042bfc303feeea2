# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a manoeuvre is worked out for, and what each kind makes of it."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from ..fleet import Fleet
from ..settings import Settings
from .course import Course

STRAIGHT = 1e-3  # 1/m; a smaller bend is none


@attrs.frozen(eq=False)
class Scene:
    """The fleet as it stands or drives when a manoeuvre begins. N robots.

    Attributes:
        poses: shape (N, 3), headings unwrapped. speed_now: of the fleet, m/s.
        neighbours: hops from robot to robot in the neighbour graph, shape (N, N), inf where there is no way.
        bends: curvatures that the robots drive at, shape (N,), 1/m; none when left out.
        hazard: a point that everybody keeps away from; None when none is known.
        turning: whether somebody was in a bend when it was asked for, though the scene may be what follows it.
    """

    fleet: Fleet
    settings: Settings
    poses: np.ndarray
    speed_now: float
    neighbours: np.ndarray
    bends: np.ndarray = attrs.Factory(lambda self: np.zeros(len(self.poses)), takes_self=True)
    hazard: Optional[tuple[float, float]] = None
    turning: bool = attrs.Factory(lambda self: bool(np.abs(self.bends).max() > STRAIGHT), takes_self=True)


@attrs.frozen(eq=False)
class Laid(Course):
    """A course, and what is still to be made of it.

    Attributes:
        duration: seconds that are given; 0: worked out from the longest way.
        speed: that was worked out, m/s; None: the asked one.
        marks: metres along each robot's way that everybody passes at the same moment, shape (N, K), from 0 to its
            length; in between the ways are driven in proportion. The beginning and the end when left out.
        otherwise: other ways to do the same, to be tried in turn where this one cannot be kept.
    """

    duration: float = 0.0
    speed: Optional[float] = None
    marks: Optional[np.ndarray] = None
    otherwise: tuple[Laid, ...] = ()
