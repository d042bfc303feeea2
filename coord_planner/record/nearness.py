# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How near the robots of a run came to each other, in exact geometry, at every sample."""

from __future__ import annotations

import attrs
import numpy as np

from ..core import outline
from ..core.fleet import Fleet
from ..trial.run import Run

_BLOCK = 10_000  # samples whose outlines are in memory at once


@attrs.frozen
class Nearness:
    """Distances between footprints. S samples of the run.

    Attributes:
        clearance: smallest distance over all pairs, shape (S,), metres; inf where there is no pair.
        pair: the two robots that have it, as indices, shape (S, 2); -1 where there is no pair.
        contacts: stretches of time in which a pair overlapped or touched, counted pair by pair.
    """

    clearance: np.ndarray
    pair: np.ndarray
    contacts: int

    @property
    def smallest(self) -> float:
        """Smallest distance of the whole run, metres; inf without pairs."""
        return float(self.clearance.min(initial=np.inf))


def nearness(run: Run) -> Nearness:
    """Exact clearances of a run. Robots whose pose is unknown (NaN) at a sample are left out of it."""
    pairs = outline.all_pairs(len(run.fleet))
    samples = len(run.times)
    if not len(pairs) or not samples:
        return Nearness(np.full(samples, np.inf), np.full((samples, 2), -1), 0)
    blocks = [_distances(run.fleet, run.poses[:, begin:begin + _BLOCK], pairs) for begin in range(0, samples, _BLOCK)]
    distance = np.concatenate(blocks, axis=1)
    nearest = distance.argmin(axis=0)
    touching = np.pad(distance <= 0.0, ((0, 0), (1, 0)))
    begins = touching[:, 1:] & ~touching[:, :-1]
    return Nearness(distance[nearest, np.arange(samples)], pairs[nearest], int(begins.sum()))


def _distances(fleet: Fleet, poses: np.ndarray, pairs: np.ndarray) -> np.ndarray:
    """Exact distance wherever a pair overlaps or is the nearest one, a lower bound or inf elsewhere; (P, S).

    The bounds come from the circles round and inside the footprints; they only save work.
    """
    known = np.isfinite(poses).all(axis=2)
    poses = np.where(known[:, :, None], poses, 0.0)
    first, second = pairs[:, 0], pairs[:, 1]
    both = known[first] & known[second]
    gap = _gaps(fleet, poses, first, second)
    outer, inner = _radii(fleet)
    lower = np.where(both, gap - (outer[first] + outer[second])[:, None], np.inf)
    upper = np.where(both, gap - (inner[first] + inner[second])[:, None], np.inf)
    exact = both & ((lower <= upper.min(axis=0)) | (lower <= 0.0))
    polygons = outline.outlines(fleet.corners(), poses)
    row, sample = np.nonzero(exact)
    wanted = np.stack([polygons[first[row], sample], polygons[second[row], sample]])
    lower[row, sample] = outline.clearances(wanted, np.array([[0, 1]]))[0]
    return lower


def _gaps(fleet: Fleet, poses: np.ndarray, first: np.ndarray, second: np.ndarray) -> np.ndarray:
    """Distance between the centres of the footprints of pairs, shape (P, S)."""
    ahead, left = fleet.corners().mean(axis=1).T[:, :, None]
    s, c = np.sin(poses[:, :, 2]), np.cos(poses[:, :, 2])
    x, y = poses[:, :, 0] + ahead * c - left * s, poses[:, :, 1] + ahead * s + left * c
    return np.hypot(x[first] - x[second], y[first] - y[second])


def _radii(fleet: Fleet) -> tuple[np.ndarray, np.ndarray]:
    """Radii of the circles round and inside each footprint, each of shape (N,)."""
    sides = np.array([[robot.footprint.footprint_length, robot.footprint.footprint_width] for robot in fleet.robots])
    return np.hypot(sides[:, 0], sides[:, 1]) / 2, sides.min(axis=1) / 2
