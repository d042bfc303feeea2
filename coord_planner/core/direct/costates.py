# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Costates recovered from the multipliers of the steps, and what stays constant along a plan.

With p_x, p_y the multipliers of a robot's steps in x and y, and mu_1 that of its heading: mu_2 and mu_3 are p seen
along and across the robot. The Hamiltonian, sum of v (mu_1 kappa + mu_2) less the running cost, is constant since no
data change in time; p is constant for each robot that keeps no clearance at hand, and its sum over robots that keep
one from each other (maximum principle and Lie-Poisson reduction: Jurdjevic, *Geometric Control Theory*, 1997, from
memory; Sachkov & Sachkova, arXiv:1303.1746). All in the problem's own units.
"""

from __future__ import annotations

import attrs
import networkx as nx
import numpy as np

from .. import se2
from .solution import Solved

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)  # exact to rounding for arcs of up to a radian
_SLIGHT = 1e-6  # of the Hamiltonian: a force below it is none
_IN_CONTACT = 1e-7  # of the largest multiplier: a clearance whose multiplier is below it holds nobody


@attrs.frozen(eq=False)
class Costates:
    """At nodes, shape (N, M + 1, 3): p_x, p_y, mu_1, just before and just after each node (the first is only after,
    the last only before; both columns are filled). ``poses`` likewise (N, M + 1, 3).
    """

    before: np.ndarray
    after: np.ndarray
    poses: np.ndarray

    @property
    def force(self) -> np.ndarray:
        """p in the intervals, shape (N, M, 2)."""
        return self.after[:, :-1, :2]

    def along_and_across(self) -> np.ndarray:
        """mu_2 and mu_3 before each node, shape (N, M + 1, 2)."""
        heading = self.poses[..., 2]
        c, s = np.cos(heading), np.sin(heading)
        x, y = self.before[..., 0], self.before[..., 1]
        return np.stack([c * x + s * y, c * y - s * x], axis=-1)


@attrs.frozen
class Drifts:
    """Largest change of what should be constant, relative to its size (the Hamiltonian and mu to abs(p)).

    ``force``: of each robot that is in no contact; ``force_sum``: of groups in contact; ``casimir``: of
    mu_2^2 + mu_3^2 of each robot that is in no contact. None where there is nothing that has to be constant.
    """

    hamiltonian: float
    force: float | None
    force_sum: float | None
    casimir: float | None


def costates(solved: Solved) -> Costates:
    """Costates of a solution."""
    rows = solved.row_multipliers
    step = np.stack([rows["step_x"], rows["step_y"], rows["step_theta"]], axis=-1)
    poses = np.stack([solved.named[name] for name in ("x", "y", "theta")], axis=-1)
    moved = np.diff(poses[..., :2], axis=1)
    leaving = step.copy()  # a heading turns all that is driven after it
    leaving[..., 2] += moved[..., 0] * step[..., 1] - moved[..., 1] * step[..., 0]
    before = np.concatenate([leaving[:, :1], step], axis=1)
    after = np.concatenate([leaving, step[:, -1:]], axis=1)
    return Costates(before, after, poses)


def hamiltonian(solved: Solved, found: Costates) -> np.ndarray:
    """In each interval, within which it is constant while the control is, shape (M,)."""
    problem, h = solved.problem, solved.intervals
    kappa, speed = solved.curvature, solved.speed
    moved = np.diff(found.poses[..., :2], axis=1) / h[:, None]
    total = np.sum(speed * kappa * _mean_moment(solved, found) + np.sum(found.force * moved, axis=-1), axis=0)
    total -= _running_cost(solved, found.poses[..., 2])
    changes = [("curvature_rate", kappa, problem.prices.curvature_rate)]
    if not problem.speeds.fixed:
        changes.append(("acceleration", speed, problem.prices.acceleration))
    for name, values, price in changes:
        rate = np.diff(values, axis=1) / _between(h)
        held = solved.row_multipliers[name] / _between(h) if name in solved.row_multipliers else 0.0
        at_nodes = np.sum(price * rate**2 / 2 + held * rate, axis=0)
        total += _between(np.concatenate([[0.0], at_nodes, [0.0]]))
    return np.asarray(total)


def _mean_moment(solved: Solved, found: Costates) -> np.ndarray:
    """Mean of mu_1 over each interval, shape (N, M): what is still to be driven at each moment turns with the robot."""
    start, end = found.poses[:, :-1], found.poses[:, 1:]
    length = solved.speed * solved.intervals
    rest = np.zeros(length.shape + (2,))
    for part, weight in zip((_NODES + 1) / 2, _WEIGHTS / 2):
        x, y, _ = se2.arc(start[..., 0], start[..., 1], start[..., 2], part * length, part * length * solved.curvature)
        rest += weight * (end[..., :2] - np.stack([x, y], axis=-1))
    p = found.force
    return found.before[:, 1:, 2] + rest[..., 0] * p[..., 1] - rest[..., 1] * p[..., 0]


def _running_cost(solved: Solved, heading: np.ndarray) -> np.ndarray:
    """Cost per unit of time in the intervals, shape (M,), without the prices of changes."""
    problem = solved.problem
    relative = solved.speed / problem.speeds.asked
    u = solved.curvature * relative
    cost = np.sum(u * u, axis=0) / 2
    for (k, j), weight in zip(problem.edges, problem.weights):
        cost += problem.coupling * weight * (u[k] - u[j]) ** 2 / 2
        apart = 2 * np.sin((heading[k] - heading[j]) / 2) ** 2
        cost += problem.alignment * problem.coupling * weight * _between(apart)
    if not problem.speeds.fixed:
        cost += problem.prices.speed * np.sum((solved.gears * relative - 1) ** 2, axis=0) / 2
    return np.asarray(cost)


def drifts(solved: Solved, found: Costates, energy: np.ndarray) -> Drifts:
    """How constant the constants are."""
    force = found.force
    sizes = np.hypot(force[..., 0], force[..., 1])
    largest = float(sizes.max(initial=0.0))
    scale = float(np.abs(energy).max(initial=0.0)) + float(sizes.max(axis=1).sum())
    scale = max(scale, 1e-12)
    largest = max(largest, _SLIGHT * scale)
    groups = _contacts(solved)
    alone = [group[0] for group in groups if len(group) == 1]
    together = [group for group in groups if len(group) > 1]
    squares = np.sum(found.along_and_across() ** 2, axis=-1)
    return Drifts(
        hamiltonian=_relative(energy[None, :, None], scale),
        force=_relative(force[alone], largest) if alone else None,
        force_sum=max(_relative(force[group].sum(axis=0)[None], largest) for group in together) if together else None,
        casimir=_relative(squares[alone][..., None], largest**2) if alone else None,
    )


def _contacts(solved: Solved) -> list[list[int]]:
    """Robots in groups that keep a clearance from each other at some moment."""
    graph = nx.Graph()
    graph.add_nodes_from(range(len(solved.problem)))
    multipliers = np.abs(solved.row_multipliers["clearance"])
    least = _IN_CONTACT * max(float(np.abs(solved.rows).max(initial=0.0)), 1e-12)
    for pair, row in zip(solved.shape.pairs, multipliers):
        if row.max(initial=0.0) > least:
            graph.add_edge(*pair)
    return [sorted(group) for group in nx.connected_components(graph)]


def _relative(values: np.ndarray, scale: float) -> float:
    """Largest range over the middle axis of values (K, T, C), over the scale."""
    spread = float(np.ptp(values, axis=1).max(initial=0.0)) if values.size else 0.0
    return spread / scale


def _between(nodes: np.ndarray) -> np.ndarray:
    return np.asarray((nodes[1:] + nodes[:-1]) / 2)
