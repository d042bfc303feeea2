# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner solve``: one plan from a problem file, with its optimality check."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from typing import Annotated, Any

import typer

from ..config.problem_file import Posed, load
from ..core.case import PlannerCase
from ..core.direct.heisenberg import HeisenbergProblem
from . import solved
from .progress import progress_shown
from .speaking import DID_NOT_HOLD, errors_reported, say, write_json


def solve(
    problem: Annotated[str, typer.Argument(metavar="PROBLEM", help="Problem file (YAML or JSON).")],
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of the random first guesses.")] = 0,
) -> None:
    """One plan from a problem file, the best of many first guesses, with its optimality check."""
    with errors_reported():
        posed = load(problem)
        found = _solve(posed, seed)
        if as_json:
            write_json(found)
        else:
            solved.write_figures(found, problem)
    if found["status"] != "solved":
        say(f"{problem}: {found['status']}: {found['reason']}.")
        raise typer.Exit(DID_NOT_HOLD)


def _solve(posed: Posed, seed: int) -> dict[str, Any]:
    if isinstance(posed, PlannerCase):
        from ..core.again import again

        return solved.of_planner(again(posed), posed.reason)
    with progress_shown("looking for the best plan") as progress:
        if isinstance(posed, HeisenbergProblem):
            from ..core.direct import heisenberg

            return solved.of_heisenberg(heisenberg.plan(posed, seed=seed, progress=progress))
        from ..core.direct.planning import plan

        return solved.of_direct(plan(posed, seed=seed, progress=progress))

