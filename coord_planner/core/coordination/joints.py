# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The next part of a sequence: made well before it begins, and taken up at the joint."""

from __future__ import annotations

from collections.abc import Callable

import attrs
import numpy as np

from .. import members, rules
from ..chain import Chain
from ..messages import Caution
from ..pursuit import Takeover
from ..reference import Reference
from .desk import Answered, Outcome, Request, figures
from .situation import Situation


def forget_next(situation: Situation) -> None:
    """The next part is to be made anew."""
    if situation.chain is not None and situation.pursuit is not None and situation.chain.expected is not None:
        situation.pursuit.forget(situation.chain.expected)
        situation.chain = attrs.evolve(situation.chain, expected=None)


def next_maker(
    situation: Situation, chain: Chain, states: np.ndarray, driving: tuple[str, ...]
) -> Callable[[], Reference]:
    """Makes the reference of the next part from where the part before it ends."""
    fleet, settings, hazard, (name, wanted) = situation.fleet, situation.settings, situation.hazard.point, chain.next
    graph = members.among(situation.graph, fleet.names, driving)
    return lambda: members.replaced(name, wanted, fleet, graph, settings, states, driving, hazard)


def ask_next(
    situation: Situation, chain: Chain, answered: Answered = lambda _answer: None, request_id: str = ""
) -> None:
    """Have the next part made, from where the one before it ends."""
    assert situation.pursuit is not None
    before = situation.pursuit.before(None if situation.chain is None else situation.chain.expected)
    old, ends = before.reference, before.at - float(before.reference.plan.times[0]) + before.reference.end
    driven = tuple(name for k, name in enumerate(situation.fleet.names) if k not in old.task.stands)
    maker = next_maker(situation, chain, old.state(old.end), situation.members.driving(driven))
    situation.desk.ask(
        situation.in_force, "next", maker, answered, request_id, ends, chain=chain)


def look_after_next(situation: Situation, cautions: list[Caution]) -> None:
    """Have the next part made, well before it begins."""
    chain, pursuit = situation.chain, situation.pursuit
    if chain is None or pursuit is None or not chain.more:
        return
    if chain.refused:
        cautions.append(rules.next_refused(situation.settings, chain.next[0], chain.refused))
    elif situation.desk.request is None and chain.expected is None:
        ask_next(situation, chain)


def take_next(situation: Situation, request: Request, outcome: Outcome, now: float) -> None:
    """The reference of the next part is there or was refused."""
    pursuit, chain = situation.pursuit, request.chain
    assert chain is not None
    if not situation.moving or pursuit is None:
        request.answer(False, f"the fleet is {situation.state.value}")
    elif request.made_for != situation.in_force:
        request.answer(False, "something was changed meanwhile; ask again")
    elif outcome.reference is None:
        if situation.chain is not None and situation.chain.parts == chain.parts:
            situation.chain = attrs.evolve(chain, refused=outcome.reason)
        request.answer(False, f"{outcome.reason} (nothing has changed)")
    else:
        # Who stands at the joint already goes on as soon as it can.
        at = max(request.takes_over_at, pursuit.s(now + situation.settings.horizon.budget))
        forget_next(situation)
        pursuit.expect(Takeover(outcome.reference, at))
        situation.chain = attrs.evolve(chain, expected=outcome.reference, silence=outcome.silence)
        text = f"in {max(pursuit.clock(at) - now, 0.0):.1f} s {figures(outcome.reference)}"
        request.answer(True, text)
