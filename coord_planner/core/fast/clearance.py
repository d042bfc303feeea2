# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Clearances of the watched pairs on their separating lines, and of robots from fences, all without slack.

The rows of ocp.clearance_rows and, below them, of ocp.fence_rows.
"""

from __future__ import annotations

import attrs
import numpy as np

from .. import ocp
from .chain import Rollout, node_slopes
from .numbers import Numbers

_SQUARE = ocp._ROUNDING**2


@attrs.frozen(eq=False)
class Sight:
    """The two robots of each pair, seen along and across the pair's line at nodes 1 .. M; each of shape (2, P, M).

    Attributes:
        along, across: cosines of the robots' headings to the line and to its left normal.
        long, wide: the same without sign, rounded off: what the half length and the half width show on the line.
    """

    along: np.ndarray
    across: np.ndarray
    long: np.ndarray
    wide: np.ndarray


@attrs.frozen(eq=False)
class Rows:
    """All clearance rows of Q chosen pairs.

    Attributes:
        pairs: which pairs, shape (Q,), increasing. robots: the two robots of each, shape (2, Q).
        by_commands: derivatives at nodes 1 .. M by the commands of the first (curvatures, then speeds) and of the
            second, shape (Q, M, 4M).
    """

    pairs: np.ndarray
    robots: np.ndarray
    by_commands: np.ndarray


def look(numbers: Numbers, r: Rollout) -> Sight:
    """Directions at a rollout."""
    heading = r.theta[:, 1:]
    cos, sin = np.cos(heading)[numbers.pairs.T], np.sin(heading)[numbers.pairs.T]
    normal_x, normal_y = numbers.normals[..., 0], numbers.normals[..., 1]
    along, across = normal_x * cos + normal_y * sin, normal_y * cos - normal_x * sin
    return Sight(along, across, np.sqrt(along * along + _SQUARE), np.sqrt(across * across + _SQUARE))


def clearances(numbers: Numbers, r: Rollout, sight: Sight) -> np.ndarray:
    """Gap between the shadows on the line, less the gap to keep, shape (P, M), metres; negative where short."""
    first, second = numbers.pairs.T
    between = numbers.normals[..., 0] * (numbers.second * r.x[second, 1:] - r.x[first, 1:])
    between += numbers.normals[..., 1] * (numbers.second * r.y[second, 1:] - r.y[first, 1:])
    shadows = numbers.half_length * sight.long + numbers.half_width * sight.wide
    if numbers.offset_x.any() or numbers.offset_y.any():
        centres = numbers.offset_x * sight.along + numbers.offset_y * sight.across
        between += centres[1] - centres[0]
    return between - shadows[0] - shadows[1] - numbers.gaps


def push(
    numbers: Numbers, sight: Sight, weights: np.ndarray, force_x: np.ndarray, force_y: np.ndarray, torque: np.ndarray
) -> None:
    """Add weights (P, M) * derivatives of the clearances by the poses to forces at nodes 1 .. M, (N, M), in place."""
    pulled = np.concatenate([weights * numbers.normals[..., 0], weights * numbers.normals[..., 1]], axis=1)
    moved = numbers.toward @ pulled
    m = weights.shape[1]
    force_x += moved[:, :m]
    force_y += moved[:, m:]
    twists = weights * _twists(numbers, sight)
    torque += numbers.beside[0] @ twists[0] + numbers.beside[1] @ twists[1]


def bend(numbers: Numbers, sight: Sight, weights: np.ndarray) -> np.ndarray:
    """Weights (P, M) * second derivatives of the shadows by the headings, summed over each robot's pairs, (N, M).

    From sqrt(s^2 + r^2) with s'' = -s: r^2 s'^2 / (s^2 + r^2)^(3/2) - s^2 / sqrt(s^2 + r^2).
    """
    along, across = sight.along**2, sight.across**2
    bent = weights * (
        numbers.half_length * (_SQUARE * across / sight.long**2 - along) / sight.long
        + numbers.half_width * (_SQUARE * along / sight.wide**2 - across) / sight.wide
    )
    found: np.ndarray = numbers.beside[0] @ bent[0] + numbers.beside[1] @ bent[1]
    return found


def rows_of(numbers: Numbers, r: Rollout, sight: Sight, pairs: np.ndarray) -> Rows:
    """Derivatives of the clearances of chosen pairs, shape (Q,), at all nodes, by the commands of their two robots."""
    robots = numbers.pairs[pairs].T
    each = robots.ravel()
    normal = np.concatenate([-numbers.normals[pairs], numbers.normals[pairs] * numbers.second[pairs, :, None]])
    twists = np.concatenate(list(_twists(numbers, sight)[:, pairs]))
    by_distance, by_turn = node_slopes(r, each, normal[:, :, 0], normal[:, :, 1], twists)
    by_curvature = by_turn * r.distance[each, None]
    by_speed = numbers.h * (by_distance + by_turn * r.mean_curvature[each, None])
    found = np.concatenate([
        numbers.curvature.backward(numbers.curvature.mean, by_curvature, each),
        numbers.speed.backward(numbers.speed.mean, by_speed, each),
    ], axis=2)
    return Rows(pairs, robots, np.concatenate([found[: len(pairs)], found[len(pairs) :]], axis=2))


def _twists(numbers: Numbers, sight: Sight) -> np.ndarray:
    """Derivatives of the clearances by the headings of the two robots, shape (2, P, M).

    Turning left takes along to across, and across to -along.
    """
    growing = sight.along * sight.across * (numbers.half_length / sight.long - numbers.half_width / sight.wide)
    if not (numbers.offset_x.any() or numbers.offset_y.any()):
        return -growing
    swinging = numbers.offset_x * sight.across - numbers.offset_y * sight.along
    swinging[0] *= -1.0
    return swinging - growing
