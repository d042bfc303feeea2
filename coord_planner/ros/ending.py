# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""From the first signal to the end of a planner."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Optional

from .spinning import Signals

if TYPE_CHECKING:
    from .planner_node import PlannerNode


class Ending:
    """The fleet is ramped to a stand; a second signal sends zeros at once."""

    def __init__(self, node: PlannerNode, signals: Signals) -> None:
        self._node, self._signals = node, signals
        self._until: Optional[float] = None  # steady seconds

    def __call__(self) -> Optional[int]:
        if self._signals.count >= 2:
            return self._leave(1)
        if self._until is None:
            if self._signals.count or self._node.signalled:
                self._until = time.monotonic() + self._node.longest_stop()
                self._node.begin_stop()
            return None
        if self._node.standing:
            return self._leave(0)
        return self._leave(1) if time.monotonic() > self._until else None

    def _leave(self, status: int) -> int:
        self._node.last_word()
        return status
