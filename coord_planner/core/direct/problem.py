# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The problem as data. SI units; headings are not wrapped."""

from __future__ import annotations

from typing import Protocol

import attrs
import networkx as nx
import numpy as np

from ..theory.classical import ClassicalProblem


def _rows(value: object) -> np.ndarray:
    return np.array(value, dtype=float, ndmin=2)


class _Graph(Protocol):
    @property
    def names(self) -> tuple[str, ...]: ...

    @property
    def edges(self) -> np.ndarray: ...

    @property
    def weights(self) -> np.ndarray: ...


def laplacian_of(problem: _Graph) -> np.ndarray:
    """Weighted graph Laplacian of a problem with names, edges (E, 2) and weights (E,), shape (N, N)."""
    matrix = np.zeros((len(problem.names),) * 2)
    for (k, j), weight in zip(problem.edges, problem.weights):
        matrix[[k, j], [k, j]] += weight
        matrix[[k, j], [j, k]] -= weight
    return matrix


@attrs.frozen
class Speeds:
    """Speeds of all robots, m/s: fixed where ``lowest`` equals ``highest``; ``lowest`` below 0 allows reversing.

    A turn rate over ``asked`` is the turning that is priced; leaving ``asked``, in either gear, has a price of its own.
    """

    lowest: float
    highest: float
    asked: float

    @property
    def fixed(self) -> bool:
        """Whether the speed is no control."""
        return self.lowest == self.highest

    @property
    def reversing(self) -> bool:
        """Whether robots may drive backwards."""
        return self.lowest < 0

    @property
    def fastest(self) -> float:
        """Largest magnitude of a speed."""
        return max(abs(self.lowest), abs(self.highest))


@attrs.frozen(eq=False)
class Caps:
    """Limits of each robot, shape (N,) each, inf where there is none; units as in core.fleet.Limits."""

    max_curvature: np.ndarray
    max_curvature_rate: np.ndarray
    max_turn_rate: np.ndarray
    max_lateral_acceleration: np.ndarray
    max_acceleration: np.ndarray
    max_braking: np.ndarray

    @classmethod
    def none(cls, count: int) -> Caps:
        """No limits."""
        return cls(*(np.full(count, np.inf) for _ in attrs.fields(cls)))

    def curvature(self, speeds: Speeds) -> np.ndarray:
        """Largest curvature at any allowed speed, shape (N,); at a fixed speed turn rate and lateral count too."""
        if not speeds.fixed:
            return self.max_curvature
        v = abs(speeds.asked)
        return np.minimum.reduce([self.max_curvature, self.max_turn_rate / v, self.max_lateral_acceleration / v**2])


@attrs.frozen
class SmallPrices:
    """Prices beside the coupled cost, as in core.settings.Prices: of changing the curvature, of speeding up and
    braking, and of leaving the asked speed.
    """

    curvature_rate: float = 0.0
    acceleration: float = 0.0
    speed: float = 0.0


@attrs.frozen(eq=False)
class DirectProblem:
    """N robots, M equal intervals, E edges.

    Attributes:
        names: of the robots. starts, ends: (N, 3) x, y, heading in m, m, rad; NaN in ends where free: all three, or
            x and y.
        edges, weights: neighbour graph, shapes (E, 2) and (E,).
        coupling: chi. alignment: price of heading differences as a multiple of the coupling, 1/m^2.
        duration: s. intervals: M.
        min_clearance: between footprints of any two robots, m; 0: none is asked.
        boxes: footprints, shape (N, 4): length, width, and how far the centre lies ahead and left of the pose, m;
            zeros: a point.
    """

    names: tuple[str, ...]
    starts: np.ndarray = attrs.field(converter=_rows)
    ends: np.ndarray = attrs.field(converter=_rows)
    edges: np.ndarray
    weights: np.ndarray
    coupling: float
    duration: float
    intervals: int
    speeds: Speeds = Speeds(1.0, 1.0, 1.0)
    caps: Caps = attrs.field()
    min_clearance: float = 0.0
    boxes: np.ndarray = attrs.field(converter=_rows)
    alignment: float = 0.0
    prices: SmallPrices = SmallPrices()

    @caps.default
    def _no_caps(self) -> Caps:
        return Caps.none(len(self.names))

    @boxes.default
    def _points(self) -> np.ndarray:
        return np.zeros((len(self.names), 4))

    def __len__(self) -> int:
        return len(self.names)

    @property
    def times(self) -> np.ndarray:
        """Nodes of equal intervals, shape (M + 1,), seconds."""
        return np.linspace(0.0, self.duration, self.intervals + 1)

    @property
    def length(self) -> float:
        """Way driven at the asked speed, metres."""
        return abs(self.speeds.asked) * self.duration

    @property
    def placed(self) -> np.ndarray:
        """Which robots have an end position, shape (N,)."""
        return ~np.isnan(self.ends[:, 0])

    @property
    def headed(self) -> np.ndarray:
        """Which robots have an end heading, shape (N,)."""
        return ~np.isnan(self.ends[:, 2])

    @property
    def laplacian(self) -> np.ndarray:
        """Weighted graph Laplacian, shape (N, N)."""
        return laplacian_of(self)

    @property
    def corners(self) -> np.ndarray:
        """Footprint corners in the robots' frames, shape (N, 4, 2), metres; zeros for points."""
        signs = np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]]) / 2
        return self.boxes[:, None, 2:] + signs * self.boxes[:, None, :2]

    @property
    def points_only(self) -> bool:
        """Whether every footprint is a point."""
        return not self.boxes.any()

    @property
    def pairs(self) -> np.ndarray:
        """Pairs that have a clearance to keep, shape (P, 2)."""
        if self.min_clearance <= 0.0:
            return np.zeros((0, 2), dtype=int)
        return np.stack(np.triu_indices(len(self), k=1), axis=1)

    @property
    def classical(self) -> bool:
        """Whether only the coupled cost and the ends count, at one fixed speed forward."""
        limited = any(np.isfinite(getattr(self.caps, field.name)).any() for field in attrs.fields(Caps))
        priced = self.alignment * self.coupling > 0.0 or self.prices.curvature_rate > 0.0
        return self.speeds.fixed and self.speeds.asked > 0 and not (limited or priced or len(self.pairs))

    def groups(self) -> list[list[int]]:
        """Robots that have to do with each other, through the graph or through a clearance to keep."""
        graph = nx.Graph()
        graph.add_nodes_from(range(len(self)))
        graph.add_edges_from(map(tuple, self.pairs.tolist()))
        if self.coupling > 0.0:
            graph.add_edges_from(map(tuple, self.edges.tolist()))
        return [sorted(group) for group in nx.connected_components(graph)]

    def part(self, robots: list[int]) -> DirectProblem:
        """The problem of some robots, with the edges among them."""
        kept = np.isin(self.edges, robots).all(axis=1)
        caps = Caps(*(getattr(self.caps, field.name)[robots] for field in attrs.fields(Caps)))
        return attrs.evolve(
            self, names=tuple(self.names[k] for k in robots), starts=self.starts[robots], ends=self.ends[robots],
            edges=np.searchsorted(robots, self.edges[kept]), weights=self.weights[kept], caps=caps,
            boxes=self.boxes[robots],
        )

    def relaxed(self) -> ClassicalProblem:
        """The classical form with the same ends, over the way as its duration: its cost over the asked speed is a
        cost of this problem, which no limits, clearances and prices can lower while the speed is fixed.

        Raises:
            ValueError: an end is farther than the way is long.
        """
        return ClassicalProblem(self.starts, self.ends, self.laplacian, self.coupling, self.length)


@attrs.frozen
class Units:
    """Metres, seconds and cost of one unit: the way's length, the duration, and a cost of one turning over it.

    Programs are solved in these units, about the middle of the starts, so that neither site coordinates nor the size
    of a fleet's turn matter to the solver.
    """

    metre: float
    second: float
    middle: tuple[float, float]

    @classmethod
    def of(cls, problem: DirectProblem) -> Units:
        x, y = problem.starts[:, :2].mean(axis=0)
        return cls(problem.length, problem.duration, (float(x), float(y)))

    @property
    def cost(self) -> float:
        """Cost of one unit of cost: turning is 1/metre."""
        return self.second / self.metre**2

    def poses_in(self, poses: np.ndarray) -> np.ndarray:
        """Poses (..., 3) in these units."""
        return np.concatenate([(poses[..., :2] - np.array(self.middle)) / self.metre, poses[..., 2:]], axis=-1)

    def problem(self, problem: DirectProblem) -> DirectProblem:
        """The same problem in these units."""
        m, s = self.metre, self.second
        caps, prices, speeds = problem.caps, problem.prices, problem.speeds
        return attrs.evolve(
            problem, starts=self.poses_in(problem.starts), ends=self.poses_in(problem.ends), duration=1.0,
            speeds=Speeds(*(value * s / m for value in (speeds.lowest, speeds.highest, speeds.asked))),
            caps=Caps(caps.max_curvature * m, caps.max_curvature_rate * m * s, caps.max_turn_rate * s,
                      caps.max_lateral_acceleration * s**2 / m, caps.max_acceleration * s**2 / m,
                      caps.max_braking * s**2 / m),
            min_clearance=problem.min_clearance / m, boxes=problem.boxes / m,
            alignment=problem.alignment * m**2,
            prices=SmallPrices(prices.curvature_rate / s**2, prices.acceleration * m**4 / s**4, prices.speed * m**2),
        )

