# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Who shares a block with whom, and in which order robots are eliminated. Depends on edges and pairs alone."""

from __future__ import annotations

import attrs
import numpy as np

from .factor import elimination_order


@attrs.frozen(eq=False)
class Structure:
    """E edges, P pairs, robots in an order of elimination.

    Attributes:
        order: every robot once. edges, pairs: shapes (E, 2) and (P, 2), the robot that is eliminated first in front.
        turned: whether a pair was turned round for that, shape (P,).
        joins: pairs of robots that share a block, shape (J, 6): the one that is eliminated first, the other; position
            of their edge, or -1; of their pair, or -1; whether the edge, and the pair, were turned round.
    """

    order: list[int]
    edges: np.ndarray
    pairs: np.ndarray
    turned: np.ndarray
    joins: np.ndarray


def structure(count: int, edges: np.ndarray, pairs: np.ndarray) -> Structure:
    """The order for ``count`` robots; edges weigh first, since their blocks are always there."""
    order = elimination_order(count, [*map(tuple, edges.tolist()), *map(tuple, pairs.tolist())])
    place = np.empty(count, dtype=int)
    place[order] = np.arange(count)
    (own_edges, edges_turned), (own_pairs, turned) = _in_front(place, edges), _in_front(place, pairs)
    joins: dict[tuple[int, int], list[int]] = {}
    for which, (joined, back) in enumerate(((own_edges, edges_turned), (own_pairs, turned))):
        for position, ((k, j), other) in enumerate(zip(joined.tolist(), back.tolist())):
            join = joins.setdefault((k, j), [k, j, -1, -1, 0, 0])
            join[2 + which], join[4 + which] = position, int(other)
    return Structure(
        order, own_edges, own_pairs, turned, np.array(list(joins.values()), np.int64).reshape(-1, 6)
    )


def _in_front(place: np.ndarray, joined: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    turned = place[joined[:, 0]] > place[joined[:, 1]]
    return np.where(turned[:, None], joined[:, ::-1], joined), turned
