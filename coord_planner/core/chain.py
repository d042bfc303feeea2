# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A sequence under way: which part is driven, and what comes next."""

from __future__ import annotations

from typing import Optional

import attrs

from .manoeuvre import Manoeuvre, parts_of
from .manoeuvre.sequence import Part, ending_at
from .reference import Reference
from .silence import Silence


@attrs.frozen(eq=False)
class Chain:
    """Parts of a sequence, of which one is driven.

    Attributes:
        name: of the sequence. parts: names and manoeuvres. index: of the part that is driven.
        expected: the reference of the next part, once it is made. silence: should the planner fall silent in it.
        refused: why the next part cannot be made; "" when nothing is known of that.
    """

    name: str
    parts: tuple[Part, ...]
    index: int = 0
    expected: Optional[Reference] = None
    silence: Optional[Silence] = None
    refused: str = ""

    @property
    def more(self) -> bool:
        """Whether something comes after the part that is driven."""
        return self.index + 1 < len(self.parts)

    @property
    def next(self) -> Part:
        return self.parts[self.index + 1]

    def moved_on(self) -> Chain:
        """The next part is driven."""
        return Chain(self.name, self.parts, self.index + 1)

    def with_next(self, name: str, wanted: Manoeuvre) -> Chain:
        """Something else is to come in the place of the next part, or after the last one."""
        following = self.parts[self.index + 2 :]
        new = parts_of(name, wanted)
        if following:  # which begins at the speed at which the part before it was to end
            speed = self.next[1].end_speed
            new = (*new[:-1], (new[-1][0], ending_at(new[-1][1], speed)))
        return Chain(self.name, (*self.parts[: self.index + 1], *new, *following), self.index)

    def progress(self, done: float) -> float:
        """Part of the whole that is done, from the part of this part that is."""
        return (self.index + done) / len(self.parts)


def chain_of(name: str, wanted: Manoeuvre) -> Optional[Chain]:
    """The sequence that a manoeuvre is; None when it is not one of several parts."""
    parts = parts_of(name, wanted)
    return Chain(name, parts) if len(parts) > 1 else None
