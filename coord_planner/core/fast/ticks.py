# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How ticks are solved: fast where all of a problem is understood, by the general solver where it is not."""

from __future__ import annotations

from collections.abc import Callable

import attrs

from .. import solver
from ..plan import Plan
from ..problem import Bounds, Comparison, Fences, Problem, Watch
from ..solver import Start
from .groups import Group, groups, part_of, start_of, whole
from .solver import TickSolver

# What the fast solver has been taught. A field that it does not know might be a promise that it would not keep.
_KNOWN = {
    Problem: {
        "fleet", "edges", "weights", "coupling", "alignment", "prices", "times", "pace", "initial", "asked_speed",
        "turn_speed", "full_speed", "target", "bounds", "watch", "fences", "compared",
    },
    Bounds: {"max_curvature", "min_speed", "max_speed", "max_turn_rate", "max_lateral_acceleration"},
    Watch: {"pairs", "normals", "gaps"},
    Fences: {"robots", "normals", "reaches"},
    Comparison: {"edges", "first_at", "second_at", "first", "second", "known", "seconds"},
}


_UNDERSTOOD = {
    kind for kind, names in _KNOWN.items() if {field.name for field in attrs.fields(kind)} == names
}


def knows(problem: Problem) -> bool:
    """Whether the fast solver understands all that a problem holds."""
    parts = (problem, problem.bounds, problem.watch, problem.fences, problem.compared)
    return all(type(part) in _UNDERSTOOD for part in parts if part is not None)


class TickSolve:
    """Solves ticks, for the coordinator. May be called in several threads at once.

    Args:
        clock: seconds that never go back, for the budget.
    """

    def __init__(self, clock: Callable[[], float]) -> None:
        self._clock, self._fast = clock, TickSolver()

    def __call__(self, problem: Problem, start: Start, warm: bool, budget: float) -> Plan:
        """A plan within the budget (seconds); the best so far, marked as not solved, when that runs out.

        Args:
            warm: whether the start is a solution of a problem little different; only the general solver needs it told.

        Raises:
            SolveError: there is no plan at all.
        """
        if not knows(problem):
            return solver.solve(problem, start, warm, budget)
        apart = groups(problem) if problem.compared is None else []
        if len(apart) <= 1:
            return self._fast.solve(problem, start, budget, self._clock)
        return self._each(problem, start, apart, budget)

    def _each(self, problem: Problem, start: Start, apart: list[Group], budget: float) -> Plan:
        """Every group by itself: none takes more steps for another's sake. What one leaves of its time others have."""
        end, left = self._clock() + budget, len(problem.fleet)
        solved = []
        for group in apart:
            part, share = part_of(problem, group), len(group.robots) / left
            left -= len(group.robots)
            plan = self._fast.solve(
                part, start_of(problem, start, group, part), share * (end - self._clock()), self._clock
            )
            solved.append((group, part, plan))
        return whole(problem, solved)
