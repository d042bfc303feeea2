# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Which robots say that they may be driven."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping


class Readiness:
    """What the robots that have to say so have said last, and when.

    Timed with the steady clock: a clock that is set must not make anybody ready or silent. May be read from any thread.

    Args:
        timeouts: seconds of silence allowed, by robot; only these have to say that they are ready.
        clock: seconds, steady.
    """

    def __init__(self, timeouts: Mapping[str, float], clock: Callable[[], float] = time.monotonic) -> None:
        self._timeouts, self._clock = dict(timeouts), clock
        self._said: dict[str, tuple[float, bool]] = {}

    @property
    def names(self) -> tuple[str, ...]:
        """The robots that have to say so."""
        return tuple(self._timeouts)

    def say(self, name: str, ready: bool) -> None:
        """A robot says that it may be driven, or that it may not."""
        self._said[name] = (self._clock(), ready)

    def not_ready(self) -> frozenset[str]:
        """Robots whose last word was no."""
        return frozenset(name for name, (_, ready) in dict(self._said).items() if not ready)

    def silent(self) -> frozenset[str]:
        """Robots that have not said anything for too long, or never."""
        return frozenset(name for name, allowed in self._timeouts.items() if self.silence(name) > allowed)

    def silence(self, name: str) -> float:
        """Seconds since a robot's last word; inf before the first."""
        said = self._said.get(name)
        return float("inf") if said is None else self._clock() - said[0]
