# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Rows that end at a headland: which one each robot is in, and which it goes into."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ...errors import RefusedError
from ..fence import Piece
from ..fleet import Fleet
from .kinds import RowEnd

_BESIDE = 0.35  # part of the row spacing by which a robot may stand beside the middle of its row
_WATCHED = 1.0  # metres from the edge of a row within which a footprint is held off it
_SKEW = math.radians(15.0)  # by which its heading may leave that of the rows


@attrs.frozen(eq=False)
class Rows:
    """N robots in rows.

    Attributes:
        origin: where the row numbered 0 ends, shape (2,), metres. out: unit vector along the rows into the headland.
        across: unit vector towards the side of the next rows, shape (2,). side: 1 when that is on the left, else -1.
        spacing: between rows, metres.
        now, then: number of each robot's row and of its next one, shape (N,).
        along: how far out of its row each robot is, metres, negative inside, shape (N,).
        heading: of each robot along its row, unwrapped, rad, shape (N,).
    """

    origin: np.ndarray
    out: np.ndarray
    across: np.ndarray
    side: float
    spacing: float
    now: np.ndarray
    then: np.ndarray
    along: np.ndarray
    heading: np.ndarray

    @property
    def shifts(self) -> np.ndarray:
        """How far towards the side each robot moves over, shape (N,), metres."""
        return self.spacing * (self.then - self.now)

    def start(self, k: int) -> tuple[float, float, float]:
        """Where a robot is, on the middle of its row and along it."""
        place = self.origin + self.along[k] * self.out + self.spacing * self.now[k] * self.across
        return float(place[0]), float(place[1]), float(self.heading[k])

    def edges(self, width: float, back: float) -> tuple[Piece, ...]:
        """What lies between the rows, beside and beyond all that are driven, as far back as ``back`` metres.

        Args:
            width: free width of each row, metres.
        """
        numbers = np.concatenate([self.now, self.then])
        half = (self.spacing - width) / 2 * self.across
        found = []
        for i in range(int(numbers.min()) - 1, int(numbers.max()) + 1):
            end = self.origin + (i + 0.5) * self.spacing * self.across
            far = end - back * self.out
            corners = np.array([far - half, end - half, end + half, far + half] if width < self.spacing else [far, end])
            found.append(Piece("the edge of a row", corners if self.side > 0.0 else corners[::-1], 0.0, _WATCHED))
        return tuple(found)

    def ends(self, inside: float) -> np.ndarray:
        """In the next rows, so far inside, shape (N, 3); the heading is left open."""
        places = self.origin - inside * self.out + self.spacing * self.then[:, None] * self.across
        return np.concatenate([places, np.full((len(places), 1), np.nan)], axis=1)


def rows_of(name: str, wanted: RowEnd, fleet: Fleet, poses: np.ndarray) -> Rows:
    """Which rows the robots are in and go into, from their poses, shape (N, 3).

    Raises:
        RefusedError: a robot is beside its row or askew, two are in one row, or a list names the wrong robots.
    """
    direction = math.radians(wanted.heading_deg)
    out = np.array([math.cos(direction), math.sin(direction)])
    side = 1.0 if wanted.side == "left" else -1.0
    across = side * np.array([-out[1], out[0]])
    origin = np.array([wanted.end_x, wanted.end_y])
    away = poses[:, :2] - origin
    beside, along = away @ across / wanted.row_spacing, away @ out
    now = np.round(beside).astype(int)
    skew = np.array([math.remainder(float(heading) - direction, 2 * math.pi) for heading in poses[:, 2]])
    _check_in_rows(name, wanted, fleet, now, beside, skew)
    then = _next(name, wanted, fleet, now)
    return Rows(origin, out, across, side, wanted.row_spacing, now, then, along, poses[:, 2] - skew)


def _check_in_rows(
    name: str, wanted: RowEnd, fleet: Fleet, now: np.ndarray, beside: np.ndarray, skew: np.ndarray
) -> None:
    off = np.abs(beside - now) * wanted.row_spacing
    for k, robot in enumerate(fleet.robots):
        if off[k] > _BESIDE * wanted.row_spacing:
            raise RefusedError(
                f"{name}: {robot.name} is {off[k]:.2f} m beside the middle of the nearest row, "
                f"{_BESIDE * wanted.row_spacing:.2f} m allowed", "drive it into its row, or correct end_x and end_y",
            )
        if abs(skew[k]) > _SKEW:
            raise RefusedError(
                f"{name}: {robot.name} looks {math.degrees(abs(skew[k])):.0f} degrees away from the direction of the "
                f"rows, {math.degrees(_SKEW):.0f} allowed", "turn it along its row, or correct heading_deg",
            )
        for j in range(k):
            if now[j] == now[k]:
                raise RefusedError(
                    f"{name}: {fleet.names[j]} and {robot.name} are in the same row", "one robot to a row"
                )


def _next(name: str, wanted: RowEnd, fleet: Fleet, now: np.ndarray) -> np.ndarray:
    """The row of each robot afterwards: those beyond all robots and the rows left out, in the order asked for."""
    last = int(now.max()) + int(wanted.skip_rows)
    if wanted.order == "mirrored":
        rank = np.argsort(np.argsort(-now))
        return np.asarray(last + 1 + rank)
    if wanted.order == "same":
        return np.asarray(now + (last + 1 - int(now.min())))
    listed = wanted.listed()
    if set(listed) != set(fleet.names):
        missing = sorted(set(fleet.names) - set(listed)) or sorted(set(listed) - set(fleet.names))
        raise RefusedError(
            f"{name}: rows lists {', '.join(listed) or 'nobody'}, which is not the fleet ({', '.join(missing)})",
            "list every robot once with its row",
        )
    return np.array([last + listed[robot] for robot in fleet.names])
