"""Clearances of the watched pairs on their separating lines: the rows of ocp.clearance_rows without slack."""

from __future__ import annotations

import attrs
import numpy as np

from .. import ocp
from .chain import Rollout, node_slopes
from .numbers import Numbers


@attrs.frozen(eq=False)
class Sight:
    """What all clearance rows at one rollout share: directions of the robots at nodes 1 .. M, each (N, M)."""

    cos: np.ndarray
    sin: np.ndarray


@attrs.frozen(eq=False)
class Rows:
    """Chosen clearance rows, W of them.

    Attributes:
        pairs: which pair, shape (W,). nodes: which node, 1 .. M, shape (W,).
        robots: the two robots, shape (2, W).
        force_x, force_y, torque: derivatives by position and heading of the two, each of shape (2, W).
    """

    pairs: np.ndarray
    nodes: np.ndarray
    robots: np.ndarray
    force_x: np.ndarray
    force_y: np.ndarray
    torque: np.ndarray


def look(r: Rollout) -> Sight:
    """Directions at a rollout."""
    return Sight(np.cos(r.theta[:, 1:]), np.sin(r.theta[:, 1:]))


def clearances(numbers: Numbers, r: Rollout, sight: Sight) -> np.ndarray:
    """Gap between the shadows on the line, less the gap to keep, shape (P, M), metres; negative where short."""
    normal_x, normal_y = numbers.normals[..., 0], numbers.normals[..., 1]
    shape = numbers.fleet
    ahead, left = shape.offset_x[:, None], shape.offset_y[:, None]
    centre_x = r.x[:, 1:] + sight.cos * ahead - sight.sin * left
    centre_y = r.y[:, 1:] + sight.sin * ahead + sight.cos * left
    first, second = numbers.pairs[:, 0], numbers.pairs[:, 1]
    between = normal_x * (centre_x[second] - centre_x[first]) + normal_y * (centre_y[second] - centre_y[first])
    for robot in (first, second):
        cos, sin = sight.cos[robot], sight.sin[robot]
        along, across = normal_x * cos + normal_y * sin, normal_y * cos - normal_x * sin
        between -= shape.half_length[robot, None] * _rounded(along) + shape.half_width[robot, None] * _rounded(across)
    return between - numbers.gaps


def rows_of(numbers: Numbers, sight: Sight, pairs: np.ndarray, nodes: np.ndarray) -> Rows:
    """Derivatives of chosen rows by the poses of their two robots. pairs, nodes (1 .. M): shape (W,)."""
    normal_x, normal_y = numbers.normals[pairs, nodes - 1].T
    robots = numbers.pairs[pairs].T
    side = np.array([[-1.0], [1.0]])
    cos, sin = sight.cos[robots, nodes - 1], sight.sin[robots, nodes - 1]
    along, across = normal_x * cos + normal_y * sin, normal_y * cos - normal_x * sin
    shape = numbers.fleet
    # The shadow's slope: along turns into across, across into -along.
    growing = along * across * (shape.half_length[robots] / _rounded(along) - shape.half_width[robots] / _rounded(across))
    swinging = shape.offset_x[robots] * across - shape.offset_y[robots] * along
    return Rows(pairs, nodes, robots, side * normal_x, side * normal_y, side * swinging - growing)


def command_rows(numbers: Numbers, r: Rollout, rows: Rows) -> np.ndarray:
    """Derivatives of chosen rows by the commands of their two robots (curvatures, then speeds), shape (2, W, 2M)."""
    m = r.turn.shape[1]
    found = np.empty((2, len(rows.pairs), 2 * m))
    for i in range(2):
        robots = rows.robots[i]
        by_distance, by_turn = node_slopes(r, robots, rows.nodes, rows.force_x[i], rows.force_y[i], rows.torque[i])
        by_curvature = by_turn * r.distance[robots]
        by_speed = numbers.h * (by_distance + by_turn * r.mean_curvature[robots])
        found[i, :, :m] = numbers.curvature.backward(numbers.curvature.mean, by_curvature, robots)
        found[i, :, m:] = numbers.speed.backward(numbers.speed.mean, by_speed, robots)
    return found


def bend(
    numbers: Numbers, sight: Sight, pairs: np.ndarray, nodes: np.ndarray, weights: np.ndarray, found: np.ndarray
) -> None:
    """Add weights * second derivatives of the shadows by the headings to ``found``, shape (N, M), in place.

    From sqrt(s^2 + r^2) with s'' = -s: r^2 s'^2 / (s^2 + r^2)^(3/2) - s^2 / sqrt(s^2 + r^2).
    """
    normal_x, normal_y = numbers.normals[pairs, nodes - 1].T
    robots = numbers.pairs[pairs].T
    cos, sin = sight.cos[robots, nodes - 1], sight.sin[robots, nodes - 1]
    along, across = normal_x * cos + normal_y * sin, normal_y * cos - normal_x * sin
    shape, square = numbers.fleet, ocp._ROUNDING**2
    total = np.zeros_like(along)
    for half, one, other in ((shape.half_length, along, across), (shape.half_width, across, along)):
        rounded = _rounded(one)
        total += half[robots] * (square * other**2 / rounded**3 - one**2 / rounded)
    np.add.at(found, (robots, np.broadcast_to(nodes - 1, robots.shape)), total * weights)


def push(
    rows: Rows, weights: np.ndarray, force_x: np.ndarray, force_y: np.ndarray, torque: np.ndarray
) -> None:
    """Add weights * derivatives of the rows to forces on the poses at nodes 1 .. M, each (N, M), in place."""
    place = (rows.robots, np.broadcast_to(rows.nodes - 1, rows.robots.shape))
    for forces, part in ((force_x, rows.force_x), (force_y, rows.force_y), (torque, rows.torque)):
        np.add.at(forces, place, part * weights)


def _rounded(value: np.ndarray) -> np.ndarray:
    return np.sqrt(value * value + ocp._ROUNDING**2)
