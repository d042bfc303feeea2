# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Everyone drives straight on."""

from __future__ import annotations

import numpy as np

from ..dubins import ArcPath
from .kinds import Straight
from .scene import Laid, Scene
from .ways import as_start


def lay(_name: str, wanted: Straight, scene: Scene) -> Laid:
    """The same distance for each robot, the way that it looks."""
    ways = tuple(ArcPath(as_start(pose), "straight", ((0.0, wanted.distance),)) for pose in scene.poses)
    return Laid(np.array([way.end for way in ways]), ways)
