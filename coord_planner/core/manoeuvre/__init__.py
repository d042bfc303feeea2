# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is asked of the fleet, and from it an end and a guessed way for each robot.

``kinds`` holds what a parameter file may ask for, one module for each kind what it means for the poses at hand,
``task`` the outcome: a Task, which ``core.reference`` plans.
"""

from .driving import STAND_LAGS
from .kinds import (
    KINDS,
    End,
    EqualRadius,
    Form,
    InSuccession,
    Manoeuvre,
    Pivot,
    RowEnd,
    Sequence,
    Straight,
    ToEnds,
    TurnAway,
    Wheel,
)
from .sequence import parts_of
from .task import Task, lay_out
from .ways import eased_turn
from .working_out import go_on, work_out

__all__ = [
    "KINDS", "STAND_LAGS", "End", "EqualRadius", "Form", "InSuccession", "Manoeuvre", "Pivot", "RowEnd", "Sequence",
    "Straight", "Task", "ToEnds", "TurnAway", "Wheel", "eased_turn", "go_on", "lay_out", "parts_of", "work_out",
]
