"""``coord-planner solve``: one plan from a problem file, with its optimality check."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

import time
from collections.abc import Callable
from typing import Annotated, Any

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

from ..config.problem_file import PlannerCase, Posed, load
from ..core.direct.heisenberg import HeisenbergProblem
from . import solved
from .speaking import DID_NOT_HOLD, errors_reported, say, write_json

_PATIENCE = 2.0  # seconds without a word


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
    """Solve with a bar on a terminal once it has taken a while."""
    if isinstance(posed, PlannerCase):
        from ..core.again import again

        return solved.of_planner(again(posed.problem, posed.start, posed.warm), posed.reason)
    with _Bar() as bar:
        if isinstance(posed, HeisenbergProblem):
            from ..core.direct import heisenberg

            return solved.of_heisenberg(heisenberg.plan(posed, seed=seed, progress=bar.advance))
        from ..core.direct.planning import plan

        return solved.of_direct(plan(posed, seed=seed, progress=bar.advance))


class _Bar:
    """A progress bar that shows itself after two seconds, only on a terminal."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        columns = TextColumn("looking for the best plan"), BarColumn(), TextColumn("{task.percentage:3.0f}%")
        self._console = Console(stderr=True)
        self._progress = Progress(*columns, TimeElapsedColumn(), console=self._console, transient=True)
        self._task = self._progress.add_task("", total=1.0)
        self._clock, self._began, self._shown = clock, clock(), False

    def __enter__(self) -> "_Bar":
        return self

    def __exit__(self, *_error: object) -> None:
        if self._shown:
            self._progress.stop()

    def advance(self, part: float) -> None:
        """Tell which part of the work is done, 0 to 1."""
        if not self._shown and self._console.is_terminal and self._clock() - self._began > _PATIENCE:
            self._progress.start()
            self._shown = True
        self._progress.update(self._task, completed=part)
