# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Named areas of a site: polygons, convex or not, and the convex pieces that they are taken apart into."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import attrs
import numpy as np
import shapely

from ..errors import SettingsError

Corner = tuple[float, float]

_LEAST = 1e-4  # square metres; less is a line or a point
_STRAIGHT = 1e-12  # square metres; a corner that spans less is straight
_FORM = "x and y of at least three corners in their order round the area, [x, y, x, y, ...], in metres"


@attrs.frozen
class Area:
    """A polygon in the fleet's frame, corners in their order round it, metres.

    Raises:
        SettingsError: it crosses itself, or is no more than a line or a point.
    """

    name: str
    corners: tuple[Corner, ...]

    def __attrs_post_init__(self) -> None:
        if len(self.corners) < 3:
            raise SettingsError(f"{self.name} has {len(self.corners)} corners", key="corners", allowed=_FORM)
        if not np.isfinite(np.array(self.corners)).all():
            raise SettingsError(f"{self.name} has a corner that is not finite", key="corners", allowed=_FORM)
        polygon = shapely.Polygon(self.corners)
        if polygon.area < _LEAST and not _crossing(self.corners):
            raise SettingsError(
                f"the corners of {self.name} lie on one line or in one place", key="corners",
                allowed="an area, not a line; give a narrow one its true width",
            )
        if not polygon.is_valid:
            where = _crossing(self.corners)
            at = f" at ({where[0]:.2f}, {where[1]:.2f})" if where else ""
            raise SettingsError(
                f"the outline of {self.name} crosses or touches itself{at}", key="corners",
                allowed=f"{_FORM}; two areas where it is really two",
            )

    @property
    def polygon(self) -> shapely.Polygon:
        return shapely.Polygon(self.corners)

    @property
    def pieces(self) -> tuple[np.ndarray, ...]:
        """Convex polygons that make it up, each of shape (K, 2), anticlockwise."""
        return _pieces(self.corners)


def area_of(name: str, numbers: Sequence[float]) -> Area:
    """An area from a flat list of coordinates; SettingsError when it is none."""
    if len(numbers) % 2:
        raise SettingsError(f"{len(numbers)} numbers are no list of corners", key="corners", allowed=_FORM)
    return Area(name, tuple((float(x), float(y)) for x, y in zip(numbers[::2], numbers[1::2])))


def _crossing(corners: tuple[Corner, ...]) -> Corner | None:
    """A place at which two sides that are not neighbours meet."""
    count = len(corners)
    sides = [shapely.LineString([corners[i], corners[(i + 1) % count]]) for i in range(count)]
    for i in range(count):
        for j in range(i + 2, count - (i == 0)):
            if sides[i].intersects(sides[j]):
                where = sides[i].intersection(sides[j]).centroid
                return where.x, where.y
    return None


@lru_cache(maxsize=256)
def _pieces(corners: tuple[Corner, ...]) -> tuple[np.ndarray, ...]:
    ring = np.array(shapely.simplify(shapely.Polygon(corners), 1e-9).exterior.coords[:-1])
    if np.sum(_cross(ring, np.roll(ring, -1, axis=0))) < 0.0:
        ring = ring[::-1]
    return tuple(ring[piece] for piece in _merged(ring, _triangles(ring)))


def _triangles(ring: np.ndarray) -> list[list[int]]:
    """Ears cut off one after the other (O'Rourke, *Computational Geometry in C*, 1998, ch. 1, from memory)."""
    left, found = list(range(len(ring))), []
    while len(left) > 3:
        at = next(i for i in range(len(left)) if _is_ear(ring, left, i))
        found.append([left[at - 1], left[at], left[(at + 1) % len(left)]])
        del left[at]
    return [*found, left]


def _is_ear(ring: np.ndarray, left: list[int], i: int) -> bool:
    before, here, after = (ring[left[j % len(left)]] for j in (i - 1, i, i + 1))
    if _cross(here - before, after - here) <= _STRAIGHT:
        return False
    others = ring[[k for n, k in enumerate(left) if n not in ((i - 1) % len(left), i, (i + 1) % len(left))]]
    inside = [_cross(b - a, others - a) >= 0.0 for a, b in ((before, here), (here, after), (after, before))]
    return not np.logical_and.reduce(inside).any()


def _merged(ring: np.ndarray, pieces: list[list[int]]) -> list[list[int]]:
    """Neighbouring pieces joined as long as they stay convex (Hertel & Mehlhorn, LNCS 158, 1983, pp. 207-218)."""
    for k in range(len(pieces)):
        for j in range(k + 1, len(pieces)):
            joined = _joined(pieces[k], pieces[j])
            if joined and _convex(ring[joined]):
                return _merged(ring, [joined, *(p for n, p in enumerate(pieces) if n not in (k, j))])
    return pieces


def _joined(first: list[int], second: list[int]) -> list[int]:
    """Two rings along the side that they share; [] when they share none."""
    for i, start in enumerate(first):
        end = first[(i + 1) % len(first)]
        if start in second and end in second and second[(second.index(end) + 1) % len(second)] == start:
            at = second.index(start)
            between = [second[(at + 1 + n) % len(second)] for n in range(len(second) - 2)]
            return [*first[: i + 1], *between, *first[i + 1 :]]
    return []


def _convex(ring: np.ndarray) -> bool:
    sides = np.roll(ring, -1, axis=0) - ring
    return bool((_cross(sides, np.roll(sides, -1, axis=0)) >= -_STRAIGHT).all())


def _cross(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return np.asarray(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0])
