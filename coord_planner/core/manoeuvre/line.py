"""Robots that stand abreast: the line that they form."""

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


def line_of(name: str, scene: Scene) -> Line:
    """The line abreast in which the fleet stands; RefusedError with the figure when it stands in none."""
    poses, names = scene.poses, scene.fleet.names
    off = np.asarray(se2.wrap(poses[:, 2] - poses[0, 2]))
    heading = float(poses[0, 2] + off.mean())
    askew = np.abs(se2.wrap(poses[:, 2] - heading))
    forward, left = _axes(heading)
    origin = poses[:, :2].mean(axis=0)
    ahead = (poses[:, :2] - origin) @ forward
    k = int(np.argmax(askew))
    if askew[k] > _ASKEW:
        raise RefusedError(
            f"{name}: the robots do not look one way: {names[k]} is {math.degrees(askew[k]):.1f} degrees off the mean, "
            f"{math.degrees(_ASKEW):g} allowed", "form a line abreast first",
        )
    k = int(np.argmax(np.abs(ahead)))
    if abs(ahead[k]) > _OUT_OF_LINE:
        raise RefusedError(
            f"{name}: {names[k]} stands {abs(ahead[k]):.2f} m {'ahead of' if ahead[k] > 0 else 'behind'} the line, "
            f"{_OUT_OF_LINE:g} m allowed", "form a line abreast first",
        )
    return Line(origin, heading, (poses[:, :2] - origin) @ left)


def _axes(heading: float) -> tuple[np.ndarray, np.ndarray]:
    forward = np.array([math.cos(heading), math.sin(heading)])
    return forward, np.array([-forward[1], forward[0]])
