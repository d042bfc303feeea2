"""Manoeuvres one after the other, with straight runs between them."""

from __future__ import annotations

import attrs

from .kinds import Manoeuvre, Sequence, Straight

Part = tuple[str, Manoeuvre]  # its name, and what it is


def parts_of(name: str, wanted: Manoeuvre) -> tuple[Part, ...]:
    """The parts of a sequence with the speeds at which they are joined; any other manoeuvre is its own only part."""
    if not isinstance(wanted, Sequence):
        return ((name, wanted),)
    last = len(wanted.parts) - 1
    return tuple(
        (part, _meant(part, wanted, wanted.end_speed if i == last else wanted.joint_speed))
        for i, part in enumerate(wanted.parts)
    )


def _meant(part: str, wanted: Sequence, end_speed: float) -> Manoeuvre:
    distance = wanted.straight(part)
    meant = wanted.named[part] if distance is None else Straight(distance=distance, speed=wanted.speed)
    return attrs.evolve(
        meant, end_speed=end_speed, coupling=wanted.coupling if meant.coupling is None else meant.coupling
    )
