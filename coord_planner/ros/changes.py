# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Changes that were asked for while the planner runs, and when the plan took them up."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Optional

import attrs

from ..core.messages import Decision, State
from .reports import Change

if TYPE_CHECKING:
    from .planner_node import PlannerNode


class Changes:
    """Hands changes to the coordinator and remembers the newest. In motion a change takes force when the rest of
    the reference, made anew, is swapped in."""

    def __init__(self, node: PlannerNode) -> None:
        self._node = node
        self.newest: Optional[Change] = None
        self._from = 0

    def make(self, words: str, **parts: Any) -> None:
        """Hand a change on.

        Args:
            words: what is changed. parts: settings, fleet, graph, as Coordinator.change takes them.
        """
        coordinator, now = self._node.coordinator, self._node.now()
        moving = coordinator.state is State.MOVING
        self._from = coordinator.taken_over
        self.newest = Change(words, now, None if moving else now)
        coordinator.change(self._node.time(), **parts)
        self._node.collect()
        self._node.reporter.report()

    def follow(self, decision: Decision) -> None:
        """See from a decision whether the newest change has taken force."""
        change = self.newest
        if change is None or change.in_force is not None:
            return
        if decision.state is not State.MOVING or self._node.coordinator.taken_over != self._from:
            self.newest = attrs.evolve(change, in_force=self._node.now())
            self._node.reporter.say(str(self.newest))

    def forget(self) -> None:
        """Nothing was changed."""
        self.newest, self._from = None, 0
