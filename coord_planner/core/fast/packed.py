# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A problem's numbers as the arrays that kernels take."""

from __future__ import annotations

import attrs
import numpy as np

from .margins import Layout, layout
from .numbers import Numbers
from .structure import Structure


@attrs.frozen(eq=False)
class Packed:
    """One problem, contiguous; rows as kernels/fields.py names them. N robots, M intervals, E edges, P pairs, fences.

    Attributes:
        which: lags of curvature and speed of each robot, (2, N). mean, last: of each lag, first of curvature, then of
            speed, (2, U, M, M) and (2, U, M): see Response.mean, and .reached at the last node.
        span (3, M), prices (3,), field (4, N, M), robot (8, N), foot (9, P), lines (3, P, M): see kernels/fields.py.
        lower, upper: (6, N, M). target, end_price: (N, 7). edges: (E, 2). edge_price: of turning and alignment, (2, E).
        coupled: sum of the first over each robot's edges, (N,).
        rows, means, row_numbers: of Comparing: robots (2, R), means (2, R, M), known and price (2, R).
        compared_own, compared_across: of Comparing; empty where neighbours are compared at equal moments.
        pairs: (P, 2). order: of elimination, (N,). joins: (J, 6), see kernels/matrix.py.
        layout, owners: of margins; owners: the two robots of each entry, (2, L).
    """

    which: np.ndarray
    mean: np.ndarray
    last: np.ndarray
    span: np.ndarray
    prices: np.ndarray
    field: np.ndarray
    robot: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    target: np.ndarray
    end_price: np.ndarray
    edges: np.ndarray
    edge_price: np.ndarray
    coupled: np.ndarray
    rows: np.ndarray
    means: np.ndarray
    row_numbers: np.ndarray
    compared_own: np.ndarray
    compared_across: np.ndarray
    pairs: np.ndarray
    lines: np.ndarray
    foot: np.ndarray
    order: np.ndarray
    joins: np.ndarray
    layout: Layout
    owners: np.ndarray


def packed(numbers: Numbers, structure: Structure) -> Packed:
    """The arrays of a problem."""
    n, m = numbers.asked_speed.shape
    curvature, speed = numbers.curvature, numbers.speed
    comparing = numbers.comparing
    apart = numbers.coupled[numbers.edges[:, 0], numbers.edges[:, 1]]
    none = np.zeros((0, m, m))
    return Packed(
        which=_whole([curvature.which, speed.which]), mean=_both(curvature.mean, speed.mean),
        last=_both(curvature.reached[:, -1], speed.reached[:, -1]),
        span=_flat([numbers.h, numbers.cost_h, numbers.short_price]),
        prices=np.array([numbers.price_curvature_rate, numbers.price_acceleration, numbers.price_speed]),
        field=_field(numbers), robot=_robot(numbers), lower=_flat(numbers.lower), upper=_flat(numbers.upper),
        target=_flat(numbers.target), end_price=_flat(numbers.end_price), edges=_whole(numbers.edges),
        edge_price=_flat([-apart, numbers.alignment]), coupled=np.diagonal(numbers.coupled).copy(),
        rows=np.zeros((2, 0), np.int64) if comparing is None else _whole(comparing.robots),
        means=np.zeros((2, 0, m)) if comparing is None else _flat(comparing.means),
        row_numbers=np.zeros((2, 0)) if comparing is None else _flat([comparing.known, comparing.price]),
        compared_own=none if comparing is None else _flat(comparing.own),
        compared_across=none if comparing is None else _flat(comparing.across),
        pairs=_whole(numbers.pairs),
        lines=_flat([numbers.normals[..., 0], numbers.normals[..., 1], numbers.gaps]),
        foot=_flat([
            *numbers.half_length[..., 0], *numbers.half_width[..., 0], *numbers.offset_x[..., 0],
            *numbers.offset_y[..., 0], numbers.second[:, 0],
        ]),
        order=np.array(structure.order, np.int64), joins=structure.joins,
        layout=layout(numbers), owners=_owners(n, m, numbers.pairs),
    )


def restarted(known: Packed, numbers: Numbers) -> Packed:
    """The same with another first state, which is in the numbers already."""
    return attrs.evolve(known, field=_field(numbers), robot=_robot(numbers))


def _field(numbers: Numbers) -> np.ndarray:
    begins = numbers.begins
    return _flat([
        numbers.asked_speed, numbers.turn_speed, begins.mean_curvature, begins.mean_speed,
    ])


def _robot(numbers: Numbers) -> np.ndarray:
    begins = numbers.begins
    first = begins.initial[:, [0, 1, 2, 5, 6]].T
    return _flat([numbers.full_speed[:, 0], begins.curvature[:, -1], begins.speed[:, -1], *first])


def _owners(n: int, m: int, pairs: np.ndarray) -> np.ndarray:
    robots = np.arange(n)
    limit, end = np.tile(np.repeat(robots, m), 12), np.tile(np.repeat(robots, 7), 2)
    own = np.concatenate([limit, end])
    return np.stack([np.concatenate([own, np.tile(np.repeat(pairs[:, side], m), 2)]) for side in range(2)])


def _both(one: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Two stacks, of which one may be shorter, in one."""
    found = np.zeros((2, max(len(one), len(other)), *one.shape[1:]))
    found[0, : len(one)], found[1, : len(other)] = one, other
    return found


def _flat(values: object) -> np.ndarray:
    return np.ascontiguousarray(values, dtype=float)


def _whole(values: object) -> np.ndarray:
    return np.ascontiguousarray(values, dtype=np.int64)
