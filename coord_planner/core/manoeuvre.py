"""What is asked of the fleet, and from it an end for each robot (interface; bodies follow)."""

from __future__ import annotations

from typing import Optional, Union

import attrs

from .parameter import parameter


@attrs.frozen
class EqualRadius:
    """Everyone turns by the same angle at the same radius."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-720.0, maximum=720.0)
    radius: float = parameter(5.0, "radius of the turn", "m", above=0.0, maximum=1000.0)
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4)
    alignment: Optional[float] = parameter(None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3)


@attrs.frozen
class End:
    """Where one robot shall arrive: a pose, or a heading alone (x and y None). Radians, metres."""

    heading: float
    x: Optional[float] = None
    y: Optional[float] = None


@attrs.frozen
class ToEnds:
    """Named robots get an end pose or an end heading; the others copy their neighbours.

    ``ends_deg`` entries: ``"mower_1 pose 12.0 8.0 90.0"`` or ``"mower_1 heading 90.0"``.
    """

    ends_deg: tuple[str, ...] = parameter(attrs.NOTHING, "an end for each named robot: 'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG'")
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    duration: float = parameter(0.0, "time for the manoeuvre; 0: worked out from the longest way", "s", minimum=0.0, maximum=600.0)
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4)
    alignment: Optional[float] = parameter(None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3)


Manoeuvre = Union[EqualRadius, ToEnds]
KINDS: dict[str, type] = {"equal_radius": EqualRadius, "to_ends": ToEnds}
