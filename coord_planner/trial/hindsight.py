# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Could a contact have been avoided at all? Judged from the record alone, by code that knows nothing of the planner."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import shapely

from .faults import Fault
from .run import Run

_REACTION = 0.3  # seconds from a fault's onset until anybody could have braked: noticing it, and the command's way
_STEP = 0.02  # seconds


def unavoidable(run: Run, faults: Sequence[Fault]) -> bool:
    """Whether robots touch although all of them brake fully, on their curves, from the first fault's onset on.

    Each robot is followed from where it truly was when the first fault struck: it drives on as it did for the
    reaction time plus its own command delay, then brakes at its limit along its last curvature.
    """
    onset = run.began + min(fault.from_s for fault in faults)
    i = int(np.clip(np.searchsorted(run.times, onset), 0, len(run.times) - 1))
    tracks = [_braked(run, k, i) for k in range(len(run.fleet))]
    corners = run.fleet.corners()
    longest = max(len(track) for track in tracks)
    outlines = []
    for track, corner in zip(tracks, corners):
        padded = np.concatenate([track, np.repeat(track[-1:], longest - len(track), axis=0)])
        s, c = np.sin(padded[:, 2]), np.cos(padded[:, 2])
        x = padded[:, :1] + c[:, None] * corner[:, 0] - s[:, None] * corner[:, 1]
        y = padded[:, 1:2] + s[:, None] * corner[:, 0] + c[:, None] * corner[:, 1]
        outlines.append(shapely.polygons(np.stack([x, y], axis=2)))
    return any(
        bool(shapely.intersects(outlines[k], outlines[j]).any())
        for k in range(len(outlines)) for j in range(k + 1, len(outlines))
    )


def _braked(run: Run, k: int, i: int) -> np.ndarray:
    """Poses of one robot until it stands, shape (S, 3)."""
    robot = run.fleet.robots[k]
    x, y, heading = run.poses[k, i]
    speed, curvature = float(run.speeds[k, i]), float(run.curvatures[k, i])
    reaction = _REACTION + robot.response.command_delay + robot.response.speed_lag
    track, time = [(x, y, heading)], 0.0
    while abs(speed) > 1e-6:
        if time >= reaction:
            speed = float(np.sign(speed)) * max(abs(speed) - robot.limits.max_braking * _STEP, 0.0)
        middle = heading + speed * curvature * _STEP / 2
        x, y = x + speed * _STEP * np.cos(middle), y + speed * _STEP * np.sin(middle)
        heading += speed * curvature * _STEP
        time += _STEP
        track.append((x, y, heading))
    return np.array(track)
