# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Plan: every robot's states from node to node, with what it costs and what it could not keep."""

from __future__ import annotations

from functools import cached_property

import attrs
import numpy as np

from . import outline, rectangles, se2
from .fast.engine import kernels
from .fleet import Fleet
from .problem import POSE, STATES, Problem

SHORT = 2e-3  # metres by which a clearance may be short for the sake of rounding


@attrs.frozen(eq=False)
class Plan:
    """N robots, M intervals.

    Attributes:
        fleet: in the order of the arrays.
        times: nodes, shape (M + 1,), seconds.
        states: shape (N, M + 1, 7), in the order of problem.STATES; headings unwrapped.
        rates: curvature rate and acceleration of the commands in the intervals, shape (N, M, 2).
        cost: what the optimisation reached.
        short: missing clearance at nodes 1 .. M, shape (P, M), metres, >= 0 (along the separating line).
        pairs: positions of the watched pairs, shape (P, 2).
        outside: how far a footprint reaches behind each fence at nodes 1 .. M, shape (F, M), metres, >= 0.
        fenced: position of the robot that each fence binds, shape (F,).
        missed: how far each end component is missed, shape (N, 7), in its own unit, >= 0.
        solved: whether the solver reported convergence.
        solve_time: seconds. iterations: of the solver.
        vector, multipliers: the solver's own primal and dual vectors, for the next start.
    """

    fleet: Fleet
    times: np.ndarray
    states: np.ndarray
    rates: np.ndarray
    cost: float
    short: np.ndarray
    pairs: np.ndarray
    outside: np.ndarray
    fenced: np.ndarray
    missed: np.ndarray
    solved: bool
    solve_time: float
    iterations: int
    vector: np.ndarray
    multipliers: tuple[np.ndarray, np.ndarray]

    @property
    def poses(self) -> np.ndarray:
        """Poses at the nodes, shape (N, M + 1, 3)."""
        return self.states[:, :, POSE]

    def state(self, time: float) -> np.ndarray:
        """States at one moment, shape (N, 7). The pose follows the arc of the interval; the rest is linear."""
        return self.sample(np.array([time]))[:, 0]

    def sample(self, times: np.ndarray) -> np.ndarray:
        """States at several moments, shape (N, K, 7)."""
        i = np.clip(np.searchsorted(self.times, times, side="right") - 1, 0, len(self.times) - 2)
        part = np.clip((times - self.times[i]) / (self.times[i + 1] - self.times[i]), 0.0, 1.0)
        before, after = self.states[:, i], self.states[:, i + 1]
        mixed: np.ndarray = (1.0 - part)[:, None] * before + part[:, None] * after
        mixed[:, :, POSE] = _along_arcs(before[:, :, POSE], self._twists[:, i], part)
        return mixed

    def closest(self, between: int = 2) -> tuple[float, tuple[int, int]]:
        """Smallest exact clearance over all pairs, at the nodes and ``between`` moments in each interval."""
        return closest_along(self.fleet, self.dense(between))

    @cached_property
    def _twists(self) -> np.ndarray:
        """Of the arcs that join the nodes (constant twist over the interval), shape (N, M, 3)."""
        before, after = (tuple(np.moveaxis(nodes, -1, 0)) for nodes in (self.poses[:, :-1], self.poses[:, 1:]))
        return np.stack(se2.log(*se2.compose(se2.inverse(before), after)), axis=-1)

    def dense(self, between: int) -> np.ndarray:
        """Poses at the nodes and at ``between`` moments in each interval, shape (N, K, 3)."""
        parts = np.linspace(0.0, 1.0, between + 1, endpoint=False)
        pieces = _along_arcs(self.poses[:, :-1, None], self._twists[:, :, None], parts)
        return np.concatenate([pieces.reshape(len(self.states), -1, 3), self.poses[:, -1:]], axis=1)


def closest_along(
    fleet: Fleet, poses: np.ndarray, growth: np.ndarray | None = None
) -> tuple[float, tuple[int, int]]:
    """Smallest exact clearance and its pair over poses of shape (N, K, 3); (inf, (-1, -1)) without pairs.

    Exact distances are worked out only where circles round the robots' origins come nearer than what is found already.
    """
    compiled = kernels()
    if compiled is None:
        return _closest_along(fleet.corners(), poses, growth)
    grown = np.zeros(len(poses)) if growth is None else np.ascontiguousarray(growth)
    gap, first, second = compiled.nearest(fleet.corners(), np.ascontiguousarray(poses), grown)
    return max(gap, 0.0), (first, second)


def _closest_along(
    corners: np.ndarray, poses: np.ndarray, growth: np.ndarray | None
) -> tuple[float, tuple[int, int]]:
    """The same without what is compiled."""
    pairs = outline.all_pairs(len(poses))
    if not len(pairs):
        return float("inf"), (-1, -1)
    reach = np.linalg.norm(corners, axis=2).max(axis=1) + (0.0 if growth is None else growth)
    apart = np.linalg.norm(poses[pairs[:, 0], :, :2] - poses[pairs[:, 1], :, :2], axis=2)
    at_least = apart - reach[pairs].sum(axis=1)[:, None]
    nearest = np.array([np.unravel_index(int(np.argmin(at_least)), at_least.shape)])
    gap = _gaps(corners, poses, pairs, nearest, growth)[0]
    where = np.argwhere(at_least < gap)
    if len(where):
        gaps = _gaps(corners, poses, pairs, where, growth)
        best = int(np.argmin(gaps))
        if gaps[best] < gap:
            gap, nearest = gaps[best], where[best : best + 1]
    first, second = pairs[nearest[0, 0]].tolist()
    return max(float(gap), 0.0), (first, second)


def _gaps(
    corners: np.ndarray, poses: np.ndarray, pairs: np.ndarray, where: np.ndarray, growth: np.ndarray | None
) -> np.ndarray:
    """Exact clearances at chosen places, shape (C, 2): which pair, and when; below 0 where growth makes them meet."""
    robots, moments = pairs[where[:, 0]], where[:, 1]
    first, second = robots.T
    found = rectangles.distances((corners[first], corners[second]), (poses[first, moments], poses[second, moments]))
    return found if growth is None else found - growth[robots].sum(axis=1)


def near_pairs(fleet: Fleet, poses: np.ndarray, gap: float) -> np.ndarray:
    """Pairs whose circumscribed circles come within ``gap`` at equal times, shape (P, 2); at least the nearest pair.

    Args:
        poses: shape (N, K, 3).
    """
    pairs = outline.all_pairs(len(poses))
    if not len(pairs) or not np.isfinite(gap):
        return pairs
    reach = np.linalg.norm(fleet.corners(), axis=2).max(axis=1)
    apart = np.linalg.norm(poses[pairs[:, 0], :, :2] - poses[pairs[:, 1], :, :2], axis=2).min(axis=1)
    free = apart - reach[pairs].sum(axis=1)
    return pairs[free < max(gap, float(free.min()) + 1.0)]


def _along_arcs(before: np.ndarray, twists: np.ndarray, part: np.ndarray) -> np.ndarray:
    """Poses a part (...) of the way along arcs from poses, shapes (..., 3)."""
    step = se2.exp(*(part * twists[..., column] for column in range(3)))
    x, y, theta = se2.compose((before[..., 0], before[..., 1], before[..., 2]), step)
    found = np.empty((*theta.shape, 3))
    found[..., 0], found[..., 1], found[..., 2] = x, y, theta
    return found


def from_solution(problem: Problem, variables: dict[str, np.ndarray], **solver: object) -> Plan:
    """A plan from the variables of a solved program, by name."""
    states = np.stack([variables[name] for name in STATES], axis=2)
    return Plan(
        fleet=problem.fleet, times=problem.times, states=states,
        rates=np.stack([variables["curvature_rate"], variables["acceleration"]], axis=2),
        short=variables["short"], pairs=problem.watch.pairs, outside=variables["outside"],
        fenced=problem.fences.robots, missed=variables["over"] + variables["under"],
        **solver,  # type: ignore[arg-type]
    )
