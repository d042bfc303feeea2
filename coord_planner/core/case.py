# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A program of the planner as it was solved, so that a failure can carry it and somebody can solve it again."""

from __future__ import annotations

from typing import Optional

import attrs

from .problem import Problem
from .solver import Start


@attrs.frozen(eq=False)
class PlannerCase:
    """A tick's or a reference's program, solved from ``start``, ``warm`` or cold, and why it is kept."""

    problem: Problem
    start: Optional[Start] = None
    warm: bool = False
    reason: str = ""
