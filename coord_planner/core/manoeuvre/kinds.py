# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The kinds of manoeuvre that a parameter file may name, with what each needs to be told."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, ClassVar, Optional, Union

import attrs

from ...errors import SettingsError
from ..parameter import parameter


def _coupling(default: Optional[float]) -> Any:
    return parameter(
        default, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4
    )


def _alignment(default: Optional[float]) -> Any:
    return parameter(
        default, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )


@attrs.frozen(kw_only=True)
class _Coupled:
    """What every kind may be told besides.

    Attributes:
        coupling, alignment: instead of those of the settings; None where those count.
    """

    coupling: Optional[float] = _coupling(None)
    alignment: Optional[float] = _alignment(None)


@attrs.frozen(kw_only=True)
class _Driven(_Coupled):
    """What every kind may be told besides that drives at one asked speed."""

    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)


@attrs.frozen
class EqualRadius(_Driven):
    """Everyone turns by the same angle at the same radius, easing in and out of the turn."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-720.0, maximum=720.0)
    radius: float = parameter(5.0, "tightest radius of the turn", "m", above=0.0, maximum=1000.0)


@attrs.frozen
class ToEnds(_Driven):
    """Named robots get an end pose or an end heading; the others copy their neighbours."""

    ends_deg: tuple[str, ...] = parameter(
        attrs.NOTHING, "an end for each named robot: 'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG'"
    )
    reverse: bool = parameter(
        False, "true: robots whose min_speed is below 0 may reverse on their way where that is shorter"
    )
    duration: float = parameter(
        0.0, "time for the manoeuvre; 0: worked out from the longest way", "s", minimum=0.0, maximum=600.0
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
class RowEnd(_Coupled):
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
    row_width: float = parameter(
        0.0, "free width of a row: beside it nobody drives where the rows are; 0: the whole row spacing", "m",
        minimum=0.0, maximum=1e3,
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

    def in_words(self) -> str:
        """What is asked, for people."""
        how = {"same": "in the same order", "mirrored": "in mirrored order", "listed": "as listed"}[self.order]
        return (
            f"everyone back into the next rows on the {self.side} {how}, {self.row_spacing:g} m apart, in a headland "
            f"{self.depth:g} m deep"
        )

    def __attrs_post_init__(self) -> None:
        if self.row_width > self.row_spacing:
            raise SettingsError(
                f"{self.row_width:g} m is wider than row_spacing", key="row_width",
                allowed=f"at most {self.row_spacing:g}, or 0",
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
class Wheel(_Driven):
    """The line turns as one about a pivot: who is further out drives faster, spacing and alignment are kept."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-270.0, maximum=270.0)
    pivot: str = parameter(
        "", "what it turns about: a point 'X Y', or 'NAME METRES', beside the robot at that end of the line"
        " (m); left out: as near the innermost robot as the group can turn at the asked speed"
    )
    speed: float = parameter(
        1.0, "highest speed asked of any robot; where the group cannot hold it, a lower one is worked out", "m/s",
        above=0.0, maximum=20.0,
    )
    alignment: Optional[float] = _alignment(20.0)

    def in_words(self) -> str:
        """What is asked, for people."""
        side, about = ("left" if self.angle_deg >= 0 else "right"), self.about()
        where = "the nearest pivot that the innermost robot can turn about"
        if about is not None:
            where = f"{about.distance:g} m beside {about.beside}" if about.point is None else f"{about.point} m"
        return f"the line {abs(self.angle_deg):g} degrees to the {side} as one, about {where}"

    def about(self) -> Optional[Pivot]:
        """The pivot; None where it is left to be worked out; SettingsError when it cannot be read."""
        words = self.pivot.split()
        if not words:
            return None
        numbers = [_number(word) for word in words]
        if len(words) == 2 and numbers[1] is not None:
            if numbers[0] is not None:
                return Pivot(point=(numbers[0], numbers[1]))
            if _number(words[0], finite=False) is None:
                return Pivot(beside=words[0], distance=numbers[1])
        raise SettingsError(f"{self.pivot!r} cannot be read", key="pivot", allowed="'X Y' or 'NAME METRES', or nothing")


@attrs.frozen
class InSuccession(_Driven):
    """A file turns one after the other at the same place; neighbours are compared where they are at the same place."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-270.0, maximum=270.0)
    radius: float = parameter(5.0, "tightest radius of the turn", "m", above=0.0, maximum=1000.0)
    before: float = parameter(
        0.0, "how far the first robot drives straight on before the turn begins", "m", minimum=0.0, maximum=1000.0
    )
    after: float = parameter(
        0.0, "how far the last robot drives straight on after it has turned", "m", minimum=0.0, maximum=1000.0
    )
    # Headings at equal moments differ here by intent.
    alignment: Optional[float] = attrs.field(default=0.0, init=False)

    def in_words(self) -> str:
        """What is asked, for people."""
        side = "left" if self.angle_deg >= 0 else "right"
        return f"one after the other {abs(self.angle_deg):g} degrees to the {side}, radius {self.radius:g} m"


@attrs.frozen
class Form(_Driven):
    """From where they stand into a formation, each robot to the place that suits best."""

    shape: str = parameter(
        "line", "line (abreast), file (one behind the other) or echelon (each further right and back)",
        choices=("line", "file", "echelon"),
    )
    spacing: float = parameter(3.0, "distance from place to place", "m", above=0.0, maximum=1000.0)
    slant_deg: float = parameter(
        45.0, "echelon: by how much the line is turned back from abreast; negative: further left and back", "deg",
        minimum=-85.0, maximum=85.0,
    )
    heading_deg: Optional[float] = parameter(
        None, "heading of the formation; left out: the robots' mean one", "deg", minimum=-36000.0, maximum=36000.0
    )
    x: Optional[float] = parameter(
        None, "middle of the formation; left out, with y: ahead of where they stand", "m", minimum=-1e6, maximum=1e6
    )
    y: Optional[float] = parameter(
        None, "middle of the formation; left out, with x: ahead of where they stand", "m", minimum=-1e6, maximum=1e6
    )
    coupling: Optional[float] = _coupling(0.0)

    def __attrs_post_init__(self) -> None:
        if (self.x is None) != (self.y is None):
            raise SettingsError("only one of x and y is given", key="x", allowed="both, or neither")

    def in_words(self) -> str:
        """What is asked, for people."""
        slant = f" slanting {self.slant_deg:g} degrees" if self.shape == "echelon" else ""
        where = "" if self.x is None else f" about ({self.x:g}, {self.y:g})"
        return f"into {'an' if self.shape == 'echelon' else 'a'} {self.shape}{slant}, {self.spacing:g} m apart{where}"


@attrs.frozen
class Straight(_Driven):
    """Everyone drives straight on."""

    distance: float = parameter(10.0, "how far", "m", above=0.0, maximum=10000.0)

    def in_words(self) -> str:
        """What is asked, for people."""
        return f"everyone {self.distance:g} m straight on"


@attrs.frozen
class Sequence(_Driven):
    """Manoeuvres of the same file one after the other, with straight runs between them.

    ``named`` holds the manoeuvres that its parts name; whoever reads a file fills it in.
    """

    parts: tuple[str, ...] = parameter(
        attrs.NOTHING, "one after the other: the name of another manoeuvre, or 'straight METRES'"
    )
    speed: float = parameter(1.0, "asked speed of straight runs", "m/s", above=0.0, maximum=20.0)
    joint_speed: float = parameter(
        0.0, "speed at which one part ends and the next begins, instead of their own end_speed", "m/s",
        minimum=0.0, maximum=20.0,
    )
    end_speed: float = parameter(0.0, "speed at the end of the last part", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for parts that have none of their own, instead of coupling.strength", minimum=0.0, maximum=1e4
    )
    named: Mapping[str, Manoeuvre] = attrs.field(factory=dict, kw_only=True, eq=False)
    alignment: Optional[float] = attrs.field(default=None, init=False)  # each part has its own

    def straight(self, part: str) -> Optional[float]:
        """Metres of a straight run; None for a part that names a manoeuvre; SettingsError for neither."""
        words = part.split()
        distance = _number(words[1]) if len(words) == 2 and words[0] == "straight" else None
        if distance is not None and distance > 0.0:
            return distance
        if len(words) != 1:
            raise SettingsError(f"{part!r} is no part of a sequence", key="parts", allowed="NAME or 'straight METRES'")
        return None

    def in_words(self) -> str:
        """What is asked, for people."""
        return ", then ".join(self.parts)


@attrs.frozen
class Pivot:
    """A point (m), or so many metres beside a robot, on the inner side of the turn."""

    point: Optional[tuple[float, float]] = None
    beside: str = ""
    distance: float = 0.0


@attrs.frozen
class End:
    """Where one robot shall arrive: a pose, or a heading alone (x and y None). Radians, metres."""

    heading: float
    x: Optional[float] = None
    y: Optional[float] = None


@attrs.frozen
class TurnAway(_Driven):
    """Who sees a hazard takes a heading away from it, the others copy; begun by a hazard while it is armed."""

    angle_deg: float = parameter(
        60.0, "angle by which those who see it turn, to the side away from it", "deg", above=0.0, maximum=180.0
    )
    after: float = parameter(
        10.0, "how far they drive straight on after the turn, in which the others take their heading", "m",
        minimum=0.0, maximum=1000.0,
    )
    alignment: Optional[float] = _alignment(20.0)

    def in_words(self) -> str:
        """What is asked, for people."""
        return f"{self.angle_deg:g} degrees away from a hazard for who sees it, then {self.after:g} m straight on"


Manoeuvre = Union[EqualRadius, ToEnds, Wheel, InSuccession, RowEnd, Form, Straight, Sequence, TurnAway]
KINDS: dict[str, type] = {
    "equal_radius": EqualRadius, "to_ends": ToEnds, "wheel": Wheel, "in_succession": InSuccession, "row_end": RowEnd,
    "form": Form, "straight": Straight, "sequence": Sequence, "turn_away": TurnAway,
}


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


def _number(word: str, finite: bool = True) -> Optional[float]:
    """The number that a word stands for; None for none, and for one that is not finite where it has to be."""
    try:
        return _finite(float(word)) if finite else float(word)
    except ValueError:
        return None


def _finite(number: float) -> float:
    if not math.isfinite(number):
        raise ValueError(number)
    return number
