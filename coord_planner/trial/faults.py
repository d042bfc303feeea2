"""What can go wrong in a rehearsal, and when."""

from __future__ import annotations

from collections.abc import Iterable

import attrs

from .vehicle import SimulatedFleet


@attrs.frozen
class Fault:
    """One thing that goes wrong for a while.

    Attributes:
        kind: ``robot_slow`` (the machine reaches only ``value`` times the commanded speed).
        robot: its name.
        from_s, to_s: seconds since the manoeuvre began to move.
        value: meaning by kind.
    """

    kind: str
    robot: str
    from_s: float
    to_s: float
    value: float

    def active(self, since: float) -> bool:
        """Whether it acts at seconds since the beginning."""
        return self.from_s <= since < self.to_s


def apply(faults: Iterable[Fault], since: float, fleet: SimulatedFleet, names: Iterable[str]) -> None:
    """Put the faults that act now into force, and take back those that do not."""
    factors = dict.fromkeys(names, 1.0)
    for fault in faults:
        if fault.active(since):
            factors[fault.robot] = min(factors[fault.robot], fault.value)
    for name, factor in factors.items():
        fleet.slow(name, factor)
