# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Manoeuvres one after the other, with straight runs between them."""

from __future__ import annotations

from typing import Optional

import attrs

from .kinds import Manoeuvre, RowEnd, Sequence, Straight

Part = tuple[str, Manoeuvre]  # its name, and what it is


def parts_of(name: str, wanted: Manoeuvre) -> tuple[Part, ...]:
    """The parts of a sequence with the speeds at which they are joined; any other manoeuvre is its own only part."""
    if not isinstance(wanted, Sequence):
        return ((name, wanted),)
    following: tuple[Optional[str], ...] = (*wanted.parts[1:], None)
    joints = [_joint_speed(wanted, then) for then in following]
    return tuple((part, _meant(part, wanted, speed)) for part, speed in zip(wanted.parts, joints))


def _joint_speed(wanted: Sequence, then: Optional[str]) -> float:
    """Speed at the end of a part; who turns back at the end of a row, perhaps after waiting, begins from standing."""
    if then is None:
        return wanted.end_speed
    return 0.0 if isinstance(wanted.named.get(then), RowEnd) else wanted.joint_speed


def _meant(part: str, wanted: Sequence, end_speed: float) -> Manoeuvre:
    distance = wanted.straight(part)
    meant = wanted.named[part] if distance is None else Straight(distance=distance, speed=wanted.speed)
    coupled = attrs.evolve(meant, coupling=wanted.coupling if meant.coupling is None else meant.coupling)
    return ending_at(coupled, end_speed)


def ending_at(manoeuvre: Manoeuvre, speed: float) -> Manoeuvre:
    """The same with another speed at its end, where it has one: a row end has none."""
    return manoeuvre if isinstance(manoeuvre, RowEnd) else attrs.evolve(manoeuvre, end_speed=speed)
