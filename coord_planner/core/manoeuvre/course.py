# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where everyone goes and what holds on the way, as it is laid out first and as it stays in the task made of it."""

from __future__ import annotations

import math
from typing import Any, Optional

import attrs
import numpy as np

from ..dubins import ArcPath
from ..fence import Line, Piece


@attrs.frozen(eq=False)
class Course:
    """Ends and ways. N robots.

    Attributes:
        ends: shape (N, 3), headings unwrapped, windings chosen; NaN where nothing is asked.
        ways: a guessed way for each robot; segments of negative length are driven backward.
        max_curvature: tightest bend that the manoeuvre asks for, 1/m; inf when only the machines' limits count.
        turn_rates: neighbours compare turn rates, not turnings: the line turns as one.
        behind: metres by which each robot is behind the first on a way that all drive one after the other, shape (N,):
            neighbours are then compared where they are at the same place of it. None: at the same moment.
        note: what was worked out and was not asked, in words.
        strip: lines that no footprint may cross; how far along their normals one may reach counts from the origin of
            the frame. pieces: what no footprint may come near besides.
        waits, speeds: seconds of the drives until each robot sets out and the speed that it then drives at, shape
            (N,), m/s; None where all set out at once and arrive together.
        alike: whether all turn alike at the same time; where they do not, nobody copies anybody.
    """

    ends: np.ndarray
    ways: tuple[ArcPath, ...]
    max_curvature: float = math.inf
    turn_rates: bool = False
    behind: Optional[np.ndarray] = None
    note: str = ""
    strip: tuple[Line, ...] = ()
    pieces: tuple[Piece, ...] = ()
    waits: Optional[np.ndarray] = None
    speeds: Optional[np.ndarray] = None
    alike: bool = True


def as_given(course: Course) -> dict[str, Any]:
    """What a course holds, by name, for another that is made of it."""
    return {field.name: getattr(course, field.name) for field in attrs.fields(Course)}
