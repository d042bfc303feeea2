# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Boundary-value problems that nobody has seen before, from a seed: invented, and known to have a plan."""

from __future__ import annotations

import math

import networkx as nx
import numpy as np

from coord_planner.core.direct.problem import DirectProblem
from coord_planner.core.theory.classical import ClassicalProblem
from coord_planner.core.theory.reach import reach

GRAPHS = {"path": nx.path_graph, "cycle": nx.cycle_graph, "star": lambda n: nx.star_graph(n - 1),
          "complete": nx.complete_graph}
FREE = [math.nan] * 3


def edges(kind: str, count: int) -> np.ndarray:
    """Edges of a graph on ``count`` robots, shape (E, 2); a cycle of fewer than three is a path."""
    graph = nx.path_graph(count) if count < 3 else GRAPHS[kind](count)
    return np.array(sorted(tuple(sorted(edge)) for edge in graph.edges), dtype=int).reshape(-1, 2)


def driven(seed: int, count: int, kind: str = "path", coupling: float = 1.0, intervals: int = 200) -> DirectProblem:
    """Ends that smooth invented curvatures lead to; some robots have a heading only, some nothing."""
    random = np.random.default_rng(seed)
    duration = random.uniform(1.5, 5.0)
    starts = np.column_stack([random.normal(size=(count, 2)) * 3, random.uniform(-3, 3, count)])
    time = (np.arange(60) + 0.5) / 60
    curvature = np.array([
        random.normal() * 1.5 + 2.5 * random.normal() * np.cos(np.pi * time + random.uniform(0, 6.3))
        + 2.5 * random.normal() * np.cos(2 * np.pi * time + random.uniform(0, 6.3)) for _ in range(count)])
    moved = reach(curvature).displacement * duration * np.exp(1j * starts[:, 2])
    ends = np.column_stack([starts[:, 0] + moved.real, starts[:, 1] + moved.imag,
                            starts[:, 2] + curvature.mean(axis=1)])
    chance = random.random(count)
    ends[chance < 0.15, :2] = math.nan
    ends[1:][chance[1:] > 0.85] = math.nan
    return posed(starts, ends, edges(kind, count), coupling, duration, intervals)


def anywhere(seed: int, count: int, kind: str = "path", coupling: float = 1.0, intervals: int = 200) -> DirectProblem:
    """Ends up to 85% of the way off in any direction, at any heading within half a turn: hard ones."""
    random = np.random.default_rng(seed)
    duration = random.uniform(2.0, 5.0)
    starts = np.column_stack([random.uniform(-2, 2, (count, 2)), random.uniform(-np.pi, np.pi, count)])
    far, bearing = random.uniform(0.1, 0.85, count) * duration, random.uniform(-np.pi, np.pi, count)
    ends = np.column_stack([starts[:, 0] + far * np.cos(bearing), starts[:, 1] + far * np.sin(bearing),
                            starts[:, 2] + random.uniform(-np.pi, np.pi, count)])
    return posed(starts, ends, edges(kind, count), coupling, duration, intervals)


def posed(starts, ends, joined, coupling, duration, intervals=100, **more) -> DirectProblem:
    """A problem of robots a, b, c ..."""
    names = tuple("abcdefghij"[: len(np.atleast_2d(starts))])
    joined = np.array(joined, dtype=int).reshape(-1, 2)
    return DirectProblem(names, starts, ends, joined, np.ones(len(joined)), coupling, duration, intervals, **more)


def classical(problem: DirectProblem) -> ClassicalProblem:
    """The same problem as theory/ has it (unit speed)."""
    return ClassicalProblem(problem.starts, problem.ends, problem.laplacian, problem.coupling, problem.duration)
