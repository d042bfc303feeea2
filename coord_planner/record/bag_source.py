# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What messages are read from."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Optional, Protocol

import attrs


@attrs.frozen(eq=False)  # told apart by identity: one is looked up for every message
class Topic:
    """One topic of a recording.

    Attributes:
        name, kind: as recorded, e.g. ``/mower_1/odom`` and ``nav_msgs/msg/Odometry``.
        definition: the text of its type ("" when the bag has none). written: messages by the index, if it says.
    """

    name: str
    kind: str
    definition: str = ""
    written: Optional[int] = None


Message = tuple[Topic, int, bytes]  # topic, time of receipt in nanoseconds, packed message


class Source(Protocol):
    """Something messages are read from."""

    topics: list[Topic]
    losses: list[str]

    def messages(self, start: Optional[int], stop: Optional[int]) -> Iterator[Message]:
        """Messages received from start to before stop, nanoseconds."""

    def close(self) -> None:
        """Give back what was opened."""
