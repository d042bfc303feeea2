# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is known of robots from their poses alone: who stands where, and who could be driven."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from typing import Optional

import numpy as np

from . import se2
from .messages import PoseSample, Snapshot
from .settings import Poses

_WATCHED = 1.5  # seconds of poses that are remembered
_LEAST = 0.5  # seconds of poses that it takes to see that a robot stands
_MOVED = 0.03  # metres or radians in half of that time that a robot may seem to move, beyond what noise explains


class Bystanders:
    """Remembers the newest poses of all robots that are heard, whether they are driven or not."""

    def __init__(self) -> None:
        self._seen: dict[str, deque[PoseSample]] = {}
        self._last: Optional[Snapshot] = None

    def see(self, snapshot: Snapshot) -> None:
        """Take in what is known at a moment."""
        self._last = snapshot
        for name, pose in snapshot.poses.items():
            track = self._seen.setdefault(name, deque())
            if not np.isfinite([pose.stamp, pose.x, pose.y, pose.heading]).all():
                continue
            if track and pose.stamp < track[-1].stamp:  # time began anew
                track.clear()
            if not track or pose.stamp > track[-1].stamp + 1e-9:
                track.append(pose)
            while track[-1].stamp - track[0].stamp > _WATCHED:
                track.popleft()

    def pose(self, name: str) -> Optional[np.ndarray]:
        """Where a standing robot is, the mean of its newest poses, shape (3,); None when it was never heard of."""
        track = self._seen.get(name)
        return _table(track).mean(axis=0) if track else None

    def places(self, names: Iterable[str]) -> np.ndarray:
        """Where robots were seen last, shape (N, 2), metres; NaN for those that were never heard of."""
        tracks = [self._seen.get(name) for name in names]
        return np.array([(track[-1].x, track[-1].y) if track else (np.nan, np.nan) for track in tracks])

    def unfit(self, name: str, poses: Poses) -> str:
        """Why a robot could not be driven from where it stands, in words; "" when it could."""
        last, track = self._last, self._seen.get(name)
        if last is None or not track:
            return f"no pose of {name} has come"
        age = last.time - track[-1].stamp
        if not age <= poses.max_age:
            return f"the last pose of {name} is {age:.1f} s old, {poses.max_age:g} s allowed"
        if name in last.not_ready | last.silent:
            return f"{name} is not ready to be driven"
        if track[-1].stamp - track[0].stamp < _LEAST:
            return f"{name} was heard for {track[-1].stamp - track[0].stamp:.1f} s only, {_LEAST:g} s are needed"
        moved = _moved(_table(track), poses)
        return f"{name} moves (by {moved:.2f} m or rad in {_WATCHED / 2:.1f} s); it must stand" if moved else ""

    def first_unfit(self, names: Iterable[str], poses: Poses) -> str:
        """The first of several reasons; "" when all could be driven."""
        return next((reason for reason in (self.unfit(name, poses) for name in names) if reason), "")


def _table(track: Iterable[PoseSample]) -> np.ndarray:
    """Poses as rows, shape (K, 3), headings unwrapped."""
    table = np.array([[pose.x, pose.y, pose.heading] for pose in track])
    table[:, 2] = table[0, 2] + se2.wrap(table[:, 2] - table[0, 2])
    return table


def _moved(table: np.ndarray, poses: Poses) -> float:
    """How far the mean of the later half lies from that of the earlier one; 0 where noise explains it."""
    half = len(table) // 2
    off = np.abs(table[-half:].mean(axis=0) - table[:half].mean(axis=0))
    noise = np.array([poses.noise_xy, poses.noise_xy, np.radians(poses.noise_heading_deg)])
    return float(off.max()) if (off > _MOVED + 4.0 * noise * np.sqrt(2.0 / half)).any() else 0.0
