# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Margins of every row and what they are traded against, laid end to end: interior-point steps keep both above 0.

Six parts follow each other; in each the product of margin and push is to vanish:

* limits: room up to the upper limit, and down to the lower one, each with its push;
* ends: metres missed on either side, each with what is left of the price: price - lambda and price + lambda;
* clearances: room with the push lambda, and metres short with what is left of the price: price - lambda.
"""

from __future__ import annotations

import attrs
import numpy as np

from .numbers import Numbers
from .point import Forces, Rows

UPPER, LOWER, OVER, UNDER, ROOM, SHORT = range(6)

_NO_ROOM = 1e-9  # limits nearer to each other than this are kept as an equation
LEAST = 5e-2  # margin of a row that has none when a solve begins
_KEPT = 0.9  # part of the last push on an end with which a solve begins: poses are new, ends are pulled elsewhere
_WITHIN = 0.99  # part of a price that a push may have when a solve begins


@attrs.frozen(eq=False)
class Layout:
    """Which part of the vectors stands for what. N robots, M intervals, P pairs, L entries.

    Attributes:
        shapes: of the six parts. stops: where each ends.
        fixed: limits without room, shape (6, N, M), True where the row is kept as an equation instead.
        on: 1 where an entry counts, 0 where the limit is fixed or the end is free, shape (L,). count: how many count.
        priced: whether an end counts, shape (N, 7). price: of ends, shape (N, 7), 1 where free.
        short_price: shape (P, M).
    """

    shapes: tuple[tuple[int, ...], ...]
    stops: tuple[int, ...]
    fixed: np.ndarray
    on: np.ndarray
    count: float
    priced: np.ndarray
    price: np.ndarray
    short_price: np.ndarray

    def split(self, vector: np.ndarray) -> list[np.ndarray]:
        """Views of a vector's six parts."""
        starts = (0,) + self.stops[:-1]
        return [vector[i:j].reshape(shape) for i, j, shape in zip(starts, self.stops, self.shapes)]


def layout(numbers: Numbers) -> Layout:
    """The layout for a problem."""
    limit, end = numbers.upper.shape, numbers.target.shape
    clear = (len(numbers.pairs), limit[2])
    shapes = (limit, limit, end, end, clear, clear)
    fixed = numbers.upper - numbers.lower < _NO_ROOM
    priced = numbers.end_price > 0
    parts = (~fixed, ~fixed, priced, priced, np.ones(clear), np.ones(clear))
    on = np.concatenate([part.ravel() for part in parts], dtype=float)
    stops, stop = [], 0
    for part in parts:
        stop += part.size
        stops.append(stop)
    return Layout(
        shapes, tuple(stops), fixed, on, max(float(on.sum()), 1.0), priced, np.where(priced, numbers.end_price, 1.0),
        np.broadcast_to(numbers.short_price, clear),
    )


def residuals(numbers: Numbers, point: Rows) -> np.ndarray:
    """Margins as the rows stand, some below 0, shape (L,)."""
    return np.concatenate([part.ravel() for part in (
        numbers.upper - point.limits, point.limits - numbers.lower, point.missed, -point.missed,
        point.clearances, -point.clearances,
    )])


def opened(
    numbers: Numbers, known: Layout, point: Rows, forces: Forces, barrier: float, least: float
) -> tuple[np.ndarray, np.ndarray]:
    """Margins and pushes to begin with, each of shape (L,), from the last multipliers; all above 0.

    Args:
        barrier: product of margin and push that no entry begins below. least: margin of a row that has none.
    """
    raw = residuals(numbers, point)
    margins, pushes = np.maximum(raw, least), np.empty_like(raw)
    raw_parts, margin, push = known.split(raw), known.split(margins), known.split(pushes)
    np.maximum(np.maximum(forces.limits, 0.0), barrier / margin[UPPER], out=push[UPPER])
    np.maximum(np.maximum(-forces.limits, 0.0), barrier / margin[LOWER], out=push[LOWER])
    pulled = np.clip(_KEPT * forces.ends, -_WITHIN * known.price, _WITHIN * known.price)
    np.subtract(known.price, pulled, out=push[OVER])
    np.add(known.price, pulled, out=push[UNDER])
    pressed = np.maximum(forces.clearances, barrier / margin[ROOM])
    np.minimum(pressed, _WITHIN * known.short_price, out=push[ROOM])
    np.subtract(known.short_price, push[ROOM], out=push[SHORT])
    for part in (OVER, UNDER, SHORT):
        np.maximum(raw_parts[part], barrier / push[part], out=margin[part])
    off = known.on == 0.0
    margins[off] = pushes[off] = 1.0
    return margins, pushes


def fit(known: Layout, point: Rows, margins: np.ndarray, barrier: float) -> None:
    """Fit the margins of ends and clearances, in place, to what the rows are where a step along curved paths has led.

    The difference of a row's two margins is known: the one that is too large shrinks, by half at most, the other grows.
    Both grow where one of an end's is narrower than the barrier asks: such a margin would hold up all that follows.
    """
    margin = known.split(margins)
    for one, other, values, counts in (
        (OVER, UNDER, point.missed, known.priced), (ROOM, SHORT, point.clearances, True)
    ):
        lacking = (values - (margin[one] - margin[other])) * counts
        rise, fall = np.maximum(lacking, 0.0), np.maximum(-lacking, 0.0)
        less_other, less_one = np.minimum(rise, 0.5 * margin[other]), np.minimum(fall, 0.5 * margin[one])
        margin[one] += rise - less_other - less_one
        margin[other] += fall - less_one - less_other
    narrow = np.maximum(barrier / known.price - np.minimum(margin[OVER], margin[UNDER]), 0.0)
    margin[OVER] += narrow
    margin[UNDER] += narrow


def largest_of_each(numbers: Numbers, known: Layout, values: np.ndarray) -> np.ndarray:
    """The largest entry of each robot, those of its pairs included, shape (N,)."""
    part = known.split(values)
    found: np.ndarray = np.maximum(
        np.maximum(part[UPPER], part[LOWER]).max(axis=(0, 2)), np.maximum(part[OVER], part[UNDER]).max(axis=1)
    )
    if len(numbers.pairs):
        of_pairs = np.maximum(part[ROOM], part[SHORT]).max(axis=1)
        for robots in numbers.pairs.T:
            np.maximum.at(found, robots, of_pairs)
    return found


def spread(numbers: Numbers, known: Layout, values: np.ndarray) -> np.ndarray:
    """A value of each robot, shape (N,), at all its entries; pairs get the smaller of their robots' two; shape (L,)."""
    found = np.empty(known.on.shape)
    part = known.split(found)
    part[UPPER][:] = part[LOWER][:] = values[:, None]
    part[OVER][:] = part[UNDER][:] = values[:, None]
    part[ROOM][:] = part[SHORT][:] = np.min(values[numbers.pairs], axis=1)[:, None]
    return found


def settled(known: Layout, margins: np.ndarray, pushes: np.ndarray) -> np.ndarray:
    """Pushes as they would be at the end: of each margin and push the smaller one is taken to vanish; shape (L,)."""
    kept = np.where(pushes > margins, pushes, 0.0)
    push = known.split(kept)
    # Of an end both entries are parts of one price; so are the two of a clearance.
    at_most = push[OVER] == 0.0
    at_least = push[UNDER] == 0.0
    push[OVER][at_least], push[UNDER][at_most] = 2.0 * known.price[at_least], 2.0 * known.price[at_most]
    push[SHORT][:] = np.where(push[ROOM] == 0.0, known.short_price, push[SHORT])
    push[ROOM][:] = known.short_price - push[SHORT]
    return kept


def forces_of(known: Layout, pushes: np.ndarray, fixed: np.ndarray) -> Forces:
    """Multipliers of the rows; ``fixed``: of limits without room, shape (6, N, M)."""
    push = known.split(pushes)
    return Forces(
        np.where(known.fixed, fixed, push[UPPER] - push[LOWER]),
        np.where(known.priced, known.price - push[OVER], 0.0), push[ROOM].copy(),
    )
