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
    """

    order: list[int]
    edges: np.ndarray
    pairs: np.ndarray
    turned: np.ndarray


def structure(count: int, edges: np.ndarray, pairs: np.ndarray) -> Structure:
    """The order for ``count`` robots; edges weigh first, since their blocks are always there."""
    order = elimination_order(count, [*map(tuple, edges.tolist()), *map(tuple, pairs.tolist())])
    place = np.empty(count, dtype=int)
    place[order] = np.arange(count)
    sorted_edges, _ = _in_front(place, edges)
    return Structure(order, sorted_edges, *_in_front(place, pairs))


def _in_front(place: np.ndarray, joined: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    turned = place[joined[:, 0]] > place[joined[:, 1]]
    return np.where(turned[:, None], joined[:, ::-1], joined), turned
