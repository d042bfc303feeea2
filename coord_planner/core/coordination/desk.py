# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The one reference that is being made at any time: who asked for it, the work it takes, and what came of it."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from ...errors import ArrivedError, CoordPlannerError, RefusedError, SolveError
from ..case import PlannerCase
from ..chain import Chain
from ..fleet import Fleet
from ..graph import NeighbourGraph
from ..messages import Answer
from ..plan import Plan
from ..problem import Problem
from ..reference import Reference
from ..settings import Settings, SiteRules
from ..silence import Silence, worst
from ..solver import Start
from ..tick import pose_problem

Answered = Callable[[Answer], None]
Solve = Callable[[Problem, Start, bool, float], Plan]
Refused = Callable[[PlannerCase], None]
InForce = tuple[Fleet, NeighbourGraph, Settings]


@attrs.frozen(eq=False)
class Outcome:
    """What a job found: a reference, or why there is none."""

    token: int
    reference: Optional[Reference]
    reason: str
    silence: Optional[Silence] = None
    arrived: bool = False


Job = Callable[[], Outcome]  # pure, slow, may run in any thread; its outcome goes to Coordinator.deliver


@attrs.frozen(eq=False)
class Request:
    """A reference that is being made, and what becomes of it."""

    token: int
    kind: str  # "begin", "resume", "replace", "change" or "next"
    answered: Answered
    request_id: str
    made_for: InForce
    takes_over_at: float = 0.0  # second of the last manoeuvre to come, of "replace" and "change"
    again: Callable[[float], None] = lambda _now: None  # asks once more, from a later moment
    chain: Optional[Chain] = None  # the sequence that is under way once it is answered well
    supersedes_change: bool = False  # a change was on its way, to be made up for when this is refused

    def answer(self, ok: bool, text: str) -> None:
        """Tell who asked."""
        self.answered(Answer(ok, text, self.request_id))


class Desk:
    """Takes requests, one at a time, and hands out the work.

    Args:
        solve: solves a tick. refused: is given the program of each reference that was refused, in its job's thread.
        budget: seconds that one tick's solve may take.
    """

    def __init__(self, solve: Solve, refused: Refused, budget: float) -> None:
        self.solve, self.budget = solve, budget
        self.request: Optional[Request] = None
        self._refused = refused
        self._jobs: list[Job] = []
        self._token = 0

    def ask(
        self, in_force: InForce, kind: str, make: Callable[[], Reference], answered: Answered, request_id: str,
        at: float = 0.0, again: Callable[[float], None] = lambda _now: None, chain: Optional[Chain] = None,
    ) -> None:
        """Have a reference made, under what is in force, in the place of any that is being made. See ``Request``."""
        self._token += 1
        token, (fleet, _, settings) = self._token, in_force

        def job() -> Outcome:
            silence: Optional[Silence] = None
            try:
                made = make()
                silence = worst(made, fleet)
                _check_silence(silence, settings.site_rules)
            except CoordPlannerError as error:
                if isinstance(error, RefusedError) and isinstance(error.case, PlannerCase):
                    self._refused(error.case)
                return Outcome(token, None, str(error), silence, isinstance(error, ArrivedError))
            except Exception as error:  # whatever it is: nobody may be left waiting for an answer
                return Outcome(token, None, f"a mistake in the planner ({error!r}); please report it")
            self._try_out(made, fleet, settings)
            return Outcome(token, made, "", silence)

        self.request = Request(token, kind, answered, request_id, in_force, at, again, chain)
        self._jobs = [job]

    def jobs(self) -> list[Job]:
        """Work to be done elsewhere; each job is handed out once."""
        jobs, self._jobs = self._jobs, []
        return jobs

    def taken(self, outcome: Outcome) -> Optional[Request]:
        """The request whose outcome this is, which is then done with; None when nobody waits for it any more."""
        request = self.request
        if request is None or request.token != outcome.token:
            return None
        self.request = None
        return request

    def cancel(self, why: str) -> None:
        """Nobody waits any more for what is being made."""
        if self.request is not None:
            self.request.answer(False, why)
        self.request, self._jobs = None, []

    def _try_out(self, made: Reference, fleet: Fleet, settings: Settings) -> None:
        """Solve a tick beforehand: what a solver has to build for it is built now, and not in the first tick."""
        begins = float(made.plan.times[0])
        problem, _, start = pose_problem(
            made, fleet, settings, made.plan.states[:, 0], begins, begins, 1.0, None, np.zeros(len(fleet))
        )
        with contextlib.suppress(SolveError):  # should the first tick fail as well, that is where it is told
            self.solve(problem, start, True, self.budget)


def figures(made: Reference) -> str:
    """How long a manoeuvre takes and how near the robots come, in words."""
    text = f"{made.task.name} takes {made.end - float(made.plan.times[0]):.1f} s"
    text += f", smallest clearance {made.clearance:.2f} m" if np.isfinite(made.clearance) else ""
    return f"{text}; {made.task.note}" if made.task.note else text


def _check_silence(silence: Silence, site_rules: SiteRules) -> None:
    if not site_rules.refuse_unsafe_silence:
        return
    unsafe = silence.unsafe(site_rules.min_clearance)
    near, into = unsafe.nearing, unsafe.entering
    if near is not None:
        raise RefusedError(
            f"should the planner fall silent after {near.instant:.1f} s, {' and '.join(near.pair)} would come within "
            f"{near.clearance:.2f} m of each other, {site_rules.min_clearance - near.clearance:.2f} m short, before "
            "both stand",
            "shorten their command time-outs, lower the speed or widen the spacing",
        )
    if into is not None:
        raise RefusedError(
            f"should the planner fall silent after {into.instant:.1f} s, {into.robot} would come {-into.spare:.2f} m "
            f"too near to {into.area} before it stands",
            "shorten its command time-out, lower the speed or leave more room",
        )
