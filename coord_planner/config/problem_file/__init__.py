# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem files (YAML or JSON): what ``coord-planner solve`` reads, and what a failure leaves behind.

Three models: ``se2`` (when no model is named), the form of core/direct; ``heisenberg``, its driftless counterpart; and
``planner``, one program of the running planner with everything that it depends on, so that it can be solved again.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, Union

from ...core.case import PlannerCase
from ...core.direct.heisenberg import HeisenbergProblem
from ...core.direct.problem import DirectProblem
from ...core.problem import Problem
from . import direct, heisenberg, planner
from .entries import Entries
from .text import read as read_text

__all__ = ["Posed", "load", "to_problem_file"]

Posed = Union[DirectProblem, HeisenbergProblem, PlannerCase]
_MODELS: dict[str, Callable[[Entries], Posed]] = {
    "se2": direct.read, "heisenberg": heisenberg.read, "planner": planner.read,
}


def load(path: str | Path) -> Posed:
    """Read and check a problem file.

    Raises:
        SettingsError: with what is wrong with it: file, line where known, key, value and what is allowed.
    """
    tree, source = read_text(path)
    entries = Entries(tree, source)
    model = entries.word("model", choices=tuple(_MODELS), default="se2")
    entries.raise_any()
    posed: Posed = _MODELS[model](entries)
    return posed


def to_problem_file(problem: Union[Posed, Problem]) -> dict[str, Any]:
    """A problem as the contents of a problem file (JSON-able), from which ``load`` makes the same problem."""
    if isinstance(problem, DirectProblem):
        return direct.write(problem)
    if isinstance(problem, HeisenbergProblem):
        return heisenberg.write(problem)
    return planner.write(PlannerCase(problem) if isinstance(problem, Problem) else problem)
