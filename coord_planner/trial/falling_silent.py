# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Each manoeuvre of a file from its starts: would robots stay clear should the planner fall silent on the way?"""

from __future__ import annotations

from typing import Optional

import attrs

from ..config import Configuration
from ..core.coordinator import Coordinator
from ..core.fast.ticks import TickSolve
from ..core.messages import Answer, PoseSample, Snapshot
from ..core.silence import Silence


@attrs.frozen
class Prospect:
    """What would come of a manoeuvre.

    Attributes:
        manoeuvre: its name. refused: why it would not begin; "" when it would.
        silence: the worst instants to fall silent; None when it would not begin.
    """

    manoeuvre: str
    refused: str
    silence: Optional[Silence]


def prospect(configuration: Configuration, manoeuvre: str) -> Prospect:
    """Plan one manoeuvre from the starts of the file as a begin does, without moving anything."""
    fleet, answers = configuration.driven, list[Answer]()
    coordinator = Coordinator(
        fleet, configuration.graph.relative_to(fleet.names), configuration.settings, configuration.manoeuvres,
        solve=TickSolve(lambda: 0.0),
    )
    poses = {name: PoseSample(0.0, *pose) for name, pose in configuration.all_starts().items() if name in fleet.names}
    coordinator.begin(manoeuvre, Snapshot(0.0, poses), answered=answers.append)
    silence: Optional[Silence] = None
    for job in coordinator.jobs():
        outcome = job()
        silence = outcome.silence
        coordinator.deliver(outcome, 0.0)
    return Prospect(manoeuvre, "" if answers[-1].ok else answers[-1].text, silence)
