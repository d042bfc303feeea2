# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What becomes of a reference, or of its refusal, once it is there."""

from __future__ import annotations

import attrs
import numpy as np

from .. import members
from ..judge import Judge
from ..messages import State
from ..problem import POSE
from ..pursuit import Pursuit, Takeover
from ..reference import Reference
from .desk import Outcome, Request, figures
from .joints import take_next
from .renewal import follow_changes, remake
from .situation import Situation
from .turnout import put_off


def deliver(situation: Situation, outcome: Outcome, now: float) -> None:
    """See ``Coordinator.deliver``."""
    request = situation.desk.taken(outcome)
    if request is None:
        return
    if request.kind == "next":
        take_next(situation, request, outcome, now)
    elif request.kind in ("change", "replace"):
        _take_over(situation, request, outcome, now)
    elif outcome.reference is not None:
        _start(situation, outcome.reference, now)
        situation.silence, situation.chain = outcome.silence, request.chain
        request.answer(True, figures(outcome.reference))
        follow_changes(situation, request, now)
    elif outcome.arrived and request.kind == "resume":
        _arrive(situation, request, now)
    else:
        if request.kind == "begin":
            situation.state = State.IDLE
        situation.reason = outcome.reason
        request.answer(False, outcome.reason)


def _arrive(situation: Situation, request: Request, now: float) -> None:
    """Nothing is left of what was held."""
    if situation.pursuit is not None and situation.chain is not None and situation.chain.more:
        situation.pursuit.freeze_at_end()
        request.answer(True, "every robot is at the end of its part; resume for the next one")
        return
    situation.state, situation.completed = State.ENDED, True
    situation.ended_at, situation.reason = now, "completed"
    request.answer(True, "every robot is at its end already")


def _take_over(situation: Situation, request: Request, outcome: Outcome, now: float) -> None:
    """A reference for the rest, or for another manoeuvre, is there or was refused."""
    pursuit, replaces = situation.pursuit, request.kind == "replace"
    if not situation.moving or pursuit is None:
        reason = f"{situation.state.value} before it could take over; begin it again when the fleet is idle"
        request.answer(False, f"the fleet was {reason}")
    elif outcome.reference is None and not replaces and situation.members.joining(situation.fleet.names):
        put_off(situation, situation.members.joining(situation.fleet.names), outcome.reason, now)
    elif outcome.reference is None:
        if not replaces:
            situation.refused_change = outcome.reason
        request.answer(False, f"{outcome.reason} (the running manoeuvre goes on)")
        if request.supersedes_change:
            remake(situation, now)
        elif replaces or request.made_for != situation.in_force:
            follow_changes(situation, request, now)
    elif pursuit.s(now + situation.settings.horizon.budget) > request.takes_over_at:
        situation.desk.request = request if request.supersedes_change else None
        situation.took = now - situation.asked_at
        request.again(now)  # it starts from a moment that has passed: make it again from a later one
    else:
        situation.took = 0.0
        poses = situation.observer.estimate(now, situation.planned).states[:, POSE]
        made = members.extended(outcome.reference, situation.fleet, situation.settings, poses)
        pursuit.expect(Takeover(made, request.takes_over_at))
        situation.silence = outcome.silence
        if replaces:
            situation.chain = request.chain
        in_time = max(pursuit.clock(request.takes_over_at) - now, 0.0)
        text = f"in {in_time:.1f} s {figures(outcome.reference)}"
        request.answer(True, text)
        follow_changes(situation, request, now)


def _start(situation: Situation, made: Reference, now: float) -> None:
    """Drive by a reference, from the first moment at which that is possible."""
    begins = now + situation.lead_time
    last = situation.history.last
    values = np.zeros((len(situation.fleet), 2)) if last is None else last[1]
    situation.pursuit = Pursuit(made, begins, 0.0, values, situation.fleet)
    situation.state, situation.reason = State.MOVING, ""
    situation.take_up(made)
    # Whoever watches for decisions that stay away counts from here, not from one of long ago.
    situation.decision = attrs.evolve(situation.decision, time=now)
    situation.planned_at, situation.refused_change, situation.watchman = begins, "", Judge()
