# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots that stand abreast or in file: the line that they form."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ...errors import RefusedError
from .. import se2
from .scene import Scene

_OUT_OF_LINE = 0.25  # metres by which a robot may stand ahead of or behind the line
_ASKEW = math.radians(5.0)  # by which its heading may differ from the line's


@attrs.frozen(eq=False)
class Line:
    """A line abreast of N robots.

    Attributes:
        origin: a point on it, shape (2,). heading: of the robots, radians, wound as the first one's.
        across: place of each robot on it, shape (N,), metres, to the left positive.
    """

    origin: np.ndarray
    heading: float
    across: np.ndarray
    tolerance: float = _OUT_OF_LINE

    def place(self, point: tuple[float, float]) -> tuple[float, float]:
        """Metres ahead of the line and to the left along it."""
        off = np.asarray(point) - self.origin
        forward, left = _axes(self.heading)
        return float(off @ forward), float(off @ left)

    def point(self, ahead: float, across: float) -> np.ndarray:
        """The point that lies there, shape (2,)."""
        forward, left = _axes(self.heading)
        return np.asarray(self.origin + ahead * forward + across * left)


@attrs.frozen(eq=False)
class File:
    """N robots one behind the other.

    Attributes:
        origin: where the first one's place is, shape (2,). heading: of the robots, radians, wound as robot 0's.
        behind: metres by which each is behind the first, shape (N,), >= 0.
    """

    origin: np.ndarray
    heading: float
    behind: np.ndarray

    def places(self) -> np.ndarray:
        """Where each robot's place is, shape (N, 2)."""
        return np.asarray(self.origin - np.outer(self.behind, _axes(self.heading)[0]))


def line_of(name: str, scene: Scene) -> Line:
    """The line abreast in which the fleet stands; RefusedError with the figure when it stands in none."""
    heading, origin, ahead, across = _placed(name, scene)
    _check_near(name, scene, ahead, ("ahead of the line", "behind the line"), "form a line abreast first")
    return Line(origin, heading, across)


def file_of(name: str, scene: Scene) -> File:
    """The file in which the fleet stands; RefusedError with the figure when it stands in none."""
    heading, origin, ahead, across = _placed(name, scene)
    _check_near(name, scene, across, ("to the left of the file", "to the right of the file"), "form a file first")
    return File(origin + ahead.max() * _axes(heading)[0], heading, ahead.max() - ahead)


def _check_near(name: str, scene: Scene, off: np.ndarray, sides: tuple[str, str], remedy: str) -> None:
    """Nobody stands too far off, shape (N,), metres; ``sides`` are the words for more and less than 0."""
    k = int(np.argmax(np.abs(off)))
    if abs(off[k]) > _OUT_OF_LINE:
        raise RefusedError(
            f"{name}: {scene.fleet.names[k]} stands {abs(off[k]):.2f} m {sides[0] if off[k] > 0 else sides[1]}, "
            f"{_OUT_OF_LINE:g} m allowed", f"ask again after this turn, or {remedy}" if scene.turning else remedy,
        )


def _placed(name: str, scene: Scene) -> tuple[float, np.ndarray, np.ndarray, np.ndarray]:
    """The common heading, the middle, and metres ahead of it and to the left of it, shape (N,) each."""
    poses = scene.poses
    off = np.asarray(se2.wrap(poses[:, 2] - poses[0, 2]))
    heading = float(poses[0, 2] + off.mean())
    askew = np.abs(se2.wrap(poses[:, 2] - heading))
    k = int(np.argmax(askew))
    if askew[k] > _ASKEW:
        raise RefusedError(
            f"{name}: the robots do not look one way: {scene.fleet.names[k]} is {math.degrees(askew[k]):.1f} degrees "
            f"off the mean, {math.degrees(_ASKEW):g} allowed", "form a line or a file first",
        )
    forward, left = _axes(heading)
    origin = poses[:, :2].mean(axis=0)
    return heading, origin, (poses[:, :2] - origin) @ forward, (poses[:, :2] - origin) @ left


def _axes(heading: float) -> tuple[np.ndarray, np.ndarray]:
    forward = np.array([math.cos(heading), math.sin(heading)])
    return forward, np.array([-forward[1], forward[0]])
