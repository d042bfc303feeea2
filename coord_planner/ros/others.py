# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who else drives the same robots, as the heartbeats of planners tell it."""

from __future__ import annotations

import time
from collections.abc import Callable

import attrs

from .messages import Beat

_SILENT = 1.0  # seconds without a heartbeat after which a planner counts as gone: five of them missed
_MOST = 16  # planners that are remembered at once


@attrs.define
class OtherPlanners:
    """The planners heard of late that command robots of ours.

    Attributes:
        own: the heartbeat of this planner. clock: seconds, steady.
    """

    own: Beat
    clock: Callable[[], float] = time.monotonic
    _heard: dict[str, tuple[float, Beat]] = attrs.field(factory=dict, init=False)

    def hear(self, beat: Beat) -> None:
        """A heartbeat has come, perhaps our own."""
        if beat.run != self.own.run and self.own.meets(beat):
            now = self.clock()
            heard = {run: item for run, item in self._heard.items() if now - item[0] <= _SILENT}
            if beat.run in heard or len(heard) < _MOST:
                heard[beat.run] = (now, beat)
            self._heard = heard  # put in place as a whole: another thread may be reading

    @property
    def newest(self) -> str:
        """The one heard last, in words; "" when nobody is heard."""
        now = self.clock()
        recent = [(when, beat) for when, beat in self._heard.values() if now - when <= _SILENT]
        return str(max(recent, key=lambda item: item[0])[1]) if recent else ""
