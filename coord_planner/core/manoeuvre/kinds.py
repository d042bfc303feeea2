"""The kinds of manoeuvre that a parameter file may name, with what each needs to be told."""

from __future__ import annotations

import math
from typing import ClassVar, Optional, Union

import attrs

from ...errors import SettingsError
from ..parameter import parameter


@attrs.frozen
class EqualRadius:
    """Everyone turns by the same angle at the same radius, easing in and out of the turn."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-720.0, maximum=720.0)
    radius: float = parameter(5.0, "tightest radius of the turn", "m", above=0.0, maximum=1000.0)
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4
    )
    alignment: Optional[float] = parameter(
        None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )


@attrs.frozen
class ToEnds:
    """Named robots get an end pose or an end heading; the others copy their neighbours."""

    ends_deg: tuple[str, ...] = parameter(
        attrs.NOTHING, "an end for each named robot: 'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG'"
    )
    reverse: bool = parameter(
        False, "true: robots whose min_speed is below 0 may reverse on their way where that is shorter"
    )
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    duration: float = parameter(
        0.0, "time for the manoeuvre; 0: worked out from the longest way", "s", minimum=0.0, maximum=600.0
    )
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4
    )
    alignment: Optional[float] = parameter(
        None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )

    def ends(self) -> dict[str, End]:
        """The end of each named robot; SettingsError for an entry that cannot be read."""
        found: dict[str, End] = {}
        for entry in self.ends_deg:
            name, end = _read_end(entry)
            if name in found:
                raise SettingsError(f"{name!r} has two ends", key="ends_deg", allowed="one end a robot")
            found[name] = end
        return found


@attrs.frozen
class RowEnd:
    """At the end of the rows everyone turns back into a row beside, within the headland."""

    end_speed: ClassVar[float] = 0.0  # whoever is back in a row waits there for the others

    end_x: float = parameter(
        attrs.NOTHING, "x of a point on the middle line of any row, where it ends and the headland begins", "m",
        minimum=-1e6, maximum=1e6,
    )
    end_y: float = parameter(attrs.NOTHING, "y of that point", "m", minimum=-1e6, maximum=1e6)
    heading_deg: float = parameter(
        attrs.NOTHING, "direction of the rows, out into the headland", "deg", minimum=-360.0, maximum=360.0
    )
    depth: float = parameter(
        attrs.NOTHING, "depth of the headland from where the rows end; no footprint reaches beyond", "m", above=0.0,
        maximum=1e3,
    )
    row_spacing: float = parameter(
        attrs.NOTHING, "distance from the middle line of a row to that of the next", "m", above=0.0, maximum=1e3
    )
    side: str = parameter(
        "left", "side on which the next rows lie, looking out into the headland", choices=("left", "right")
    )
    order: str = parameter(
        "same", "same: all move over by the same number of rows; mirrored: the nearest takes the nearest free row; "
        "listed: as in rows", choices=("same", "mirrored", "listed"),
    )
    rows: tuple[str, ...] = parameter(
        (), "for order listed, a row for each robot: 'NAME ROW', where 1 is the first row beyond all robots"
    )
    skip_rows: int = parameter(0, "rows left out between those driven and the next ones", minimum=0, maximum=100)
    inside: float = parameter(
        0.0, "how far back in the next row everyone ends", "m", minimum=0.0, maximum=1e3
    )
    speed: float = parameter(1.0, "asked speed; who turns tightly drives slower", "m/s", above=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for this manoeuvre instead of coupling.strength; it counts where all turn alike at one time",
        minimum=0.0, maximum=1e4,
    )
    alignment: Optional[float] = parameter(
        None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )

    def listed(self) -> dict[str, int]:
        """The row of each robot that is named; SettingsError for an entry that cannot be read."""
        found: dict[str, int] = {}
        for entry in self.rows:
            words = entry.split()
            if len(words) != 2 or not words[1].isdecimal() or int(words[1]) < 1:
                raise SettingsError(f"{entry!r} cannot be read", key="rows", allowed="'NAME ROW', ROW 1 or more")
            if words[0] in found or int(words[1]) in found.values():
                raise SettingsError(f"{entry!r} names a robot or a row again", key="rows", allowed="each of them once")
            found[words[0]] = int(words[1])
        return found


@attrs.frozen
class End:
    """Where one robot shall arrive: a pose, or a heading alone (x and y None). Radians, metres."""

    heading: float
    x: Optional[float] = None
    y: Optional[float] = None


Manoeuvre = Union[EqualRadius, ToEnds, RowEnd]
KINDS: dict[str, type] = {"equal_radius": EqualRadius, "to_ends": ToEnds, "row_end": RowEnd}


def _read_end(entry: str) -> tuple[str, End]:
    words = entry.split()
    try:
        if len(words) == 5 and words[1] == "pose":
            x, y, heading = (float(word) for word in words[2:])
            return words[0], End(math.radians(_finite(heading)), _finite(x), _finite(y))
        if len(words) == 3 and words[1] == "heading":
            return words[0], End(math.radians(_finite(float(words[2]))))
    except ValueError:
        pass
    raise SettingsError(
        f"{entry!r} cannot be read", key="ends_deg",
        allowed="'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG', finite numbers",
    )


def _finite(number: float) -> float:
    if not math.isfinite(number):
        raise ValueError(number)
    return number
