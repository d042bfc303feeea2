# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Problem: all that one plan depends on, as data that one can look at, save and solve again."""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from .fleet import Fleet
from .settings import Prices

# Order of the state of a robot in every array: pose, what the machine has reached, what was commanded.
STATES = ("x", "y", "theta", "curvature", "speed", "curvature_command", "speed_command")
X, Y, THETA, CURVATURE, SPEED, CURVATURE_COMMAND, SPEED_COMMAND = range(len(STATES))
POSE = slice(0, 3)


@attrs.frozen(eq=False)
class Bounds:
    """Limits in force at nodes 1 .. M (or in intervals), each of shape (N, M)."""

    max_curvature: np.ndarray
    min_speed: np.ndarray
    max_speed: np.ndarray
    max_turn_rate: np.ndarray
    max_lateral_acceleration: np.ndarray


@attrs.frozen(eq=False)
class Watch:
    """Pairs whose clearance binds. P pairs.

    Attributes:
        pairs: positions of the robots, shape (P, 2).
        normals: unit vectors from first to second at nodes 1 .. M, shape (P, M, 2), taken from exact geometry.
        gaps: distance that must be kept along the normal, shape (P, M), metres.
    """

    pairs: np.ndarray
    normals: np.ndarray
    gaps: np.ndarray


@attrs.frozen(eq=False)
class Fences:
    """Lines that footprints stay on one side of: keep-outs, strips that may not be left. F rows.

    Attributes:
        robots: position of the robot that each binds, shape (F,).
        normals: unit vectors towards the forbidden side at nodes 1 .. M, shape (F, M, 2).
        reaches: how far along the normal the footprint may reach, from the origin of the frame, shape (F, M),
            metres; inf where nothing binds.
    """

    robots: np.ndarray
    normals: np.ndarray
    reaches: np.ndarray


@attrs.frozen(eq=False)
class Comparison:
    """Neighbours compared otherwise than at equal moments, R rows in the place of those. Each row compares a mean of
    the turnings of its edge's first robot with a mean of the second's, in W intervals from a certain one on.

    Attributes:
        edges: position of the edge, shape (R,).
        first_at, second_at: the interval from which on the weights count, shape (R,).
        first, second: weights on turnings, shape (R, W).
        known: what is added to the difference, shape (R,), 1/m: turnings outside these intervals.
        seconds: of the manoeuvre that the row stands for, shape (R,).
    """

    edges: np.ndarray
    first_at: np.ndarray
    second_at: np.ndarray
    first: np.ndarray
    second: np.ndarray
    known: np.ndarray
    seconds: np.ndarray

    def places(self) -> tuple[tuple[int, int, int, int], ...]:
        """Edge, first intervals, and how many, of each row: what a compiled problem depends on."""
        width = self.first.shape[1]
        columns = (self.edges.tolist(), self.first_at.tolist(), self.second_at.tolist())
        return tuple((e, k, j, width) for e, k, j in zip(*columns))

    def disagreements(self, turnings: np.ndarray, edges: np.ndarray) -> np.ndarray:
        """Difference in each row, shape (R,), 1/m, for turnings of shape (N, M)."""
        steps = np.arange(self.first.shape[1])
        k, j = edges[self.edges].T if len(self.edges) else np.zeros((2, 0), dtype=int)
        first = np.sum(self.first * turnings[k[:, None], self.first_at[:, None] + steps], axis=1)
        second = np.sum(self.second * turnings[j[:, None], self.second_at[:, None] + steps], axis=1)
        return np.asarray(first - second + self.known)


def no_fences(intervals: int) -> Fences:
    """Nothing is fenced off."""
    return Fences(np.zeros(0, dtype=int), np.zeros((0, intervals, 2)), np.zeros((0, intervals)))


@attrs.frozen(eq=False)
class Problem:
    """N robots, M intervals, E edges.

    Attributes:
        fleet: limits, footprints and responses, in the order of the arrays.
        edges, weights: neighbour graph, shapes (E, 2) and (E,).
        coupling: chi. alignment: price of heading differences as a multiple of the coupling, 1/m^2: where
            nothing is coupled, nobody copies anything.
        prices: the small and the steep ones.
        times: nodes, shape (M + 1,), seconds, increasing.
        pace: progress rate of the reference that the times are laid out for (1 = as planned): costs are counted
            per second of the reference, not of the clock, so that slowing the group re-prices nothing.
        initial: state at the first node, shape (N, 7), in the order of STATES.
        asked_speed: shape (N, M), m/s.
        turn_speed: speed by which a turn rate is divided to give the turning u, shape (N, M), m/s: the asked one,
            but not less than a part of the full one, so that u stays finite where the fleet starts and stops.
        full_speed: asked speed between starting and stopping, shape (N,), m/s; deviations are priced relative to it.
        target: state at the last node, shape (N, 7); NaN where free.
        bounds: limits in force.
        watch: pairs with a clearance to keep.
        fences: lines that footprints stay on one side of.
        compared: at which moments neighbours are compared; at equal ones when left out.
    """

    fleet: Fleet
    edges: np.ndarray
    weights: np.ndarray
    coupling: float
    alignment: float
    prices: Prices
    times: np.ndarray
    pace: float
    initial: np.ndarray
    asked_speed: np.ndarray
    turn_speed: np.ndarray
    full_speed: np.ndarray
    target: np.ndarray
    bounds: Bounds
    watch: Watch
    fences: Fences = attrs.Factory(lambda self: no_fences(len(self.times) - 1), takes_self=True)
    compared: Optional[Comparison] = None

    @property
    def shape(self) -> Shape:
        return Shape(
            len(self.fleet), len(self.times) - 1,
            tuple(map(tuple, self.edges.tolist())), tuple(map(tuple, self.watch.pairs.tolist())),
            tuple(self.fences.robots.tolist()), None if self.compared is None else self.compared.places(),
        )

    @property
    def rates_of_speed(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest rate of the commanded speed in each interval, each of shape (N, M), m/s^2.

        Slowing down and speeding up change places where the robot drives backward.
        """
        backward = (self.bounds.max_speed <= 0.0) & (self.bounds.min_speed < 0.0)
        before = np.concatenate([self.initial[:, [SPEED_COMMAND]] < 0.0, backward[:, :-1]], axis=1)
        backward = backward | before  # down to standstill too
        up, down = (self.fleet.limit(name)[:, None] for name in ("max_acceleration", "max_braking"))
        return np.where(backward, -up, -down), np.where(backward, down, up)

    @property
    def intervals(self) -> np.ndarray:
        """Lengths of the intervals, shape (M,), seconds."""
        return np.diff(self.times)


@attrs.frozen
class Shape:
    """What a compiled problem depends on; everything else is a number handed to it."""

    robots: int
    intervals: int
    edges: tuple[tuple[int, int], ...]
    pairs: tuple[tuple[int, int], ...]
    fenced: tuple[int, ...] = ()
    compared: Optional[tuple[tuple[int, int, int, int], ...]] = None


def bounds_in_force(
    fleet: Fleet, initial: np.ndarray, times: np.ndarray, end_time: float, end_speed: float,
    speed_cap: float | np.ndarray, lateral_cap: float, curvature_cap: float = np.inf,
    gears: Optional[np.ndarray] = None,
) -> Bounds:
    """Limits at nodes 1 .. M, each an envelope that comes back at the braking or steering rate.

    A state outside a limit (the limit was lowered, a disturbance, a stand-still below min_speed) could not
    return at once; the envelope is the fastest return that the machine's own rates allow. After ``end_time``
    the manoeuvre goes straight on at ``end_speed``.

    Args:
        speed_cap: m/s, one for all or of shape (N, M).
        gears: at nodes 1 .. M, shape (N, M): 1 forward only, -1 backward only, 0 standing; every machine's whole
            range of speeds at all times when left out.
    """
    elapsed = (times[1:] - times[0])[None, :]
    after = (times[1:] > end_time - 1e-9)[None, :]
    to_end = np.maximum(end_time - times[1:], 0.0)[None, :]

    def column(name: str) -> np.ndarray:
        return fleet.limit(name)[:, None]

    steer, brake, speed_up = column("max_curvature_rate"), column("max_braking"), column("max_acceleration")
    kappa = np.abs(initial[:, CURVATURE_COMMAND])[:, None]
    speed = initial[:, SPEED_COMMAND][:, None]
    kappa_back = np.maximum(kappa - steer * elapsed, 0.0)
    speed_back = np.maximum(np.abs(speed) - brake * elapsed, 0.0)
    # Straight on after the end: the last curvature and speed go back as fast as the machine allows.
    curvature = np.maximum(np.where(after, 0.0, np.minimum(column("max_curvature"), curvature_cap)), kappa_back)
    lower, upper = _speed_range(fleet, speed_cap, (len(fleet), len(times) - 1), gears)
    upper = np.where(after, np.minimum(end_speed, upper), upper)
    now = speed if gears is None else np.maximum(speed, 0.0)
    lower = np.minimum(lower, np.minimum(now + speed_up * elapsed, end_speed + brake * to_end))
    lower = np.where(after, np.minimum(lower, end_speed) if gears is None else np.clip(lower, 0.0, end_speed), lower)
    upper = np.maximum(upper, np.where(speed > 0.0, speed_back, 0.0))
    lower = np.minimum(lower, np.where(speed < 0.0, -speed_back, 0.0)) if gears is not None else lower
    back = speed_back * kappa_back
    turn = np.maximum(column("max_turn_rate"), back)
    lateral = np.maximum(np.minimum(column("max_lateral_acceleration"), lateral_cap), speed_back * back)
    return Bounds(curvature, lower, upper, turn, lateral)


def _speed_range(
    fleet: Fleet, cap: float | np.ndarray, shape: tuple[int, int], gears: Optional[np.ndarray]
) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest speed at nodes 1 .. M in the gears asked for, each of shape (N, M)."""
    low = np.broadcast_to(np.maximum(fleet.limit("min_speed")[:, None], -cap), shape)
    high = np.broadcast_to(np.minimum(fleet.limit("max_speed")[:, None], cap), shape)
    if gears is None:
        return low, high
    lower = np.where(gears > 0, np.maximum(low, 0.0), np.where(gears < 0, np.minimum(low, 0.0), 0.0))
    return lower, np.where(gears > 0, high, 0.0)
