# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How motion ends: stops, and the changes of state that time alone brings."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from .. import stopping
from ..chain import Chain
from ..messages import State
from ..observer import Estimate
from ..pursuit import Pursuit
from .situation import SINCE, STANDING, Situation


def stop(
    situation: Situation, now: float, reason: str, *, completed: bool = False, estimate: Optional[Estimate] = None
) -> stopping.Stop:
    """Begin a controlled stop of everyone, which ends the manoeuvre or holds the fleet."""
    pursuit = situation.pursuit
    assert pursuit is not None
    estimate = estimate or situation.observer.estimate(now, situation.planned)
    at = now + situation.effect_delay
    found = stopping.choose(pursuit.schedule, at, situation.fleet, estimate, now, pursuit.reference.fencing)
    pursuit.schedule = pursuit.schedule.splice(found.schedule, at, now - SINCE)
    pursuit.freeze(now)
    # Machines stand some lags after their commands do; until then nobody is told that the fleet stands.
    situation.stop_over = float(found.schedule.times[-1]) + 2 * situation.period + situation.settling
    situation.state, situation.completed = State.STOPPING, completed
    situation.reason = reason if completed else f"{reason}; stopping {found.manner}"
    pursuit.coming = ()
    if situation.chain is not None:
        situation.chain = attrs.evolve(situation.chain, expected=None)
    if situation.desk.request is not None and situation.desk.request.kind in ("change", "replace", "next"):
        situation.desk.cancel("the fleet was stopped")
    return found


def settle(situation: Situation, now: float) -> None:
    """Changes of state that time alone brings."""
    if situation.state is State.STOPPING and now >= situation.stop_over:
        situation.state = State.ENDED if situation.completed else State.HELD
        situation.ended_at = now
    elif situation.state is State.ENDED and now >= situation.ended_at + situation.settings.commands.zeros_after_end:
        situation.state = State.IDLE
    elif situation.moving and situation.pursuit is not None:
        _settle_end(situation, now, situation.pursuit)


def _settle_end(situation: Situation, now: float, pursuit: Pursuit) -> None:
    if pursuit.coming:
        return
    if pursuit.s(now - situation.effect_delay) < pursuit.reference.end:
        return
    standing = np.abs(pursuit.schedule.moment(now)[:, 0]).max() < STANDING
    if situation.chain is not None and situation.chain.more:
        _wait_at_joint(situation, now, pursuit, situation.chain, bool(standing))
    elif standing:
        situation.completed, situation.state, situation.ended_at = True, State.ENDED, now
        situation.reason = "completed"
    elif pursuit.reference.task.end_speed > 0.0:
        stop(situation, now, "completed", completed=True)


def _wait_at_joint(situation: Situation, now: float, pursuit: Pursuit, chain: Chain, standing: bool) -> None:
    """The part is over and the next one is not there."""
    if not standing:
        stop(situation, now, f"{chain.next[0]} could not be planned in time")
    elif chain.refused:
        pursuit.freeze(now)
        situation.state, situation.reason = State.HELD, f"{chain.next[0]} cannot follow: {chain.refused}"
        situation.chain = attrs.evolve(chain, refused="")
