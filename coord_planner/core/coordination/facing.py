# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the fleet does about a hazard that it knows."""

from __future__ import annotations

import numpy as np

from ..hazard import Point, nearest, told
from ..messages import Answer
from .ending import stop
from .renewal import replace
from .situation import Situation


def face_hazard(situation: Situation, now: float, poses: np.ndarray) -> None:
    """Stop for the hazard that is known, or turn away from it, where anybody is concerned; in motion."""
    watch, pursuit = situation.hazard, situation.pursuit
    if watch.point is None or pursuit is None or watch.faced(pursuit.reference.task.hazard):
        return
    near = nearest(watch.point, pursuit.reference, pursuit.s(now), poses, situation.fleet, situation.settings)
    armed = watch.is_armed(now)
    watch.caution = told(near, watch.point, situation.settings, armed)
    if armed and near.sees:
        _turn_away(situation, now, watch.point)
    elif near.concerned and not armed:
        stop(situation, now, watch.caution.text)


def _turn_away(situation: Situation, now: float, point: Point) -> None:
    """Begin what is armed; when it is refused everyone stops."""
    watch, wanted = situation.hazard, situation.manoeuvres[situation.hazard.armed]
    watch.turned_for = point

    def answered(answer: Answer) -> None:
        if not answer.ok and situation.moving:
            newest = max(situation.seen.values(), default=now)
            stop(situation, newest, f"turning away was refused: {answer.text}")

    replace(situation, now, watch.armed, wanted, answered, "", point)
