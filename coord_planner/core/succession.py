"""Robots that turn one after the other at the same place: neighbours compared at equal path coordinate.

Everybody drives the same way, ``behind`` metres apart, and at the same speed at the same moment; so who is d metres
further back is at a place of the way when the fleet has driven d metres more. What a follower's turning in one
interval is compared with is then a mean of its leader's turnings in earlier ones, with weights that the asked
speeds fix beforehand. Ticks make the same comparisons as the reference; what lies outside the horizon is known.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Optional

import attrs
import numpy as np

from .manoeuvre import Task
from .problem import Comparison

_SHORT = 1e-6  # metres driven in an interval below which nothing is compared in it
_LATER = 2  # horizons behind this one in which followers may come to where their leaders are in it

Mean = Callable[[int, float, float], float]  # a robot's mean turning between metres that the fleet has driven


@attrs.frozen(eq=False)
class Steps:
    """A function that is constant between bounds, shape (K + 1,), increasing; values (K,); 0 outside."""

    bounds: np.ndarray
    values: np.ndarray

    def mean(self, begin: float, end: float) -> float:
        """Mean over a stretch that is not empty."""
        return float(shares(self.bounds, begin, end) @ self.values)


def shares(bounds: np.ndarray, begin: float, end: float) -> np.ndarray:
    """Part of the stretch from begin to end that lies in each piece between bounds, shape (K,)."""
    overlap = np.minimum(bounds[1:], end) - np.maximum(bounds[:-1], begin)
    return np.asarray(np.maximum(overlap, 0.0) / max(end - begin, 1e-12))


def comparison(task: Task, edges: np.ndarray, s: np.ndarray) -> Comparison:
    """Comparisons in a reference whose nodes lie at seconds s of the manoeuvre, shape (M + 1,).

    What leaders did before its beginning is taken to be what the followers' ways do there.
    """
    passed, before = task.passed(s), _ways(task)
    rows = [row for e in range(len(edges)) for row in _within(e, edges[e], task, s, passed, before, None)]
    width = max((len(np.trim_zeros(part)) for row in rows for part in (row.first, row.second)), default=1)
    return _packed(rows, min(width, len(s) - 1))


def comparison_of_tick(
    task: Task, edges: np.ndarray, s: np.ndarray, step: float, made_s: np.ndarray, made: np.ndarray
) -> Comparison:
    """The comparisons of a reference that a horizon with nodes at s has a part in, (1 + _LATER) M for each edge.

    Args:
        made_s: nodes of the reference, shape (K + 1,). made: its turnings, shape (N, K), 1/m.
    """
    passed, before, count = task.passed(s), _ways(task), len(s) - 1
    known = [Steps(task.passed(made_s), values) for values in made]
    rows = []
    for e, edge in enumerate(edges):
        of_edge = _within(e, edge, task, s, passed, before, known)
        of_edge += _later(e, edge, task, s, step, passed, before, known)[: _LATER * count]
        rows += of_edge + [_nothing(e, count)] * ((1 + _LATER) * count - len(of_edge))
    return _packed(rows, count)


@attrs.frozen(eq=False)
class _Row:
    edge: int
    first: np.ndarray
    second: np.ndarray
    known: float
    seconds: float


def _within(
    e: int, edge: np.ndarray, task: Task, s: np.ndarray, passed: np.ndarray, before: list[Steps],
    known: Optional[list[Steps]],
) -> list[_Row]:
    """A row for each interval in which the fleet drives: the follower there, its leader where it was before."""
    follower, leader, apart = _order(edge, task)
    rows = []
    for m in np.flatnonzero(np.diff(passed) > _SHORT):
        begin, end = passed[m] - apart, passed[m + 1] - apart
        of_leader = shares(passed, begin, end)
        past = _past(begin, end, float(passed[0]), apart, before[follower], known[leader] if known else None)
        own = np.zeros(len(s) - 1)
        own[m] = 1.0
        rows.append(_row(e, follower == edge[0], own, of_leader, -past, float(s[m + 1] - s[m])))
    return rows


def _later(
    e: int, edge: np.ndarray, task: Task, s: np.ndarray, step: float, passed: np.ndarray, before: list[Steps],
    known: list[Steps],
) -> list[_Row]:
    """A row for each interval after the horizon in which the follower comes to where the leader is in it."""
    follower, leader, apart = _order(edge, task)
    moments = np.arange(s[-1], max(task.duration, s[-1]) + step / 2, step)
    there, rows = task.passed(moments), []
    for i in np.flatnonzero(np.diff(there) > _SHORT):
        begin, end = there[i] - apart, there[i + 1] - apart
        of_leader = shares(passed, begin, end)
        if not of_leader.any():
            continue
        past = _past(begin, end, float(passed[0]), apart, before[follower], known[leader])
        past += known[leader].mean(max(begin, passed[-1]), end) * _part(begin, end, float(passed[-1]), np.inf)
        own = known[follower].mean(there[i], there[i + 1])
        rows.append(_row(e, follower == edge[0], np.zeros(len(s) - 1), of_leader, own - past, step))
    return rows


def _order(edge: np.ndarray, task: Task) -> tuple[int, int, float]:
    """Follower, leader, and metres between them."""
    assert task.behind is not None
    k, j = int(edge[0]), int(edge[1])
    apart = float(task.behind[k] - task.behind[j])
    return (k, j, apart) if apart >= 0 else (j, k, -apart)


def _row(e: int, forward: bool, own: np.ndarray, other: np.ndarray, known: float, seconds: float) -> _Row:
    return _Row(e, own, other, known, seconds) if forward else _Row(e, other, own, -known, seconds)


def _nothing(e: int, count: int) -> _Row:
    return _Row(e, np.zeros(count), np.zeros(count), 0.0, 0.0)


def _past(
    begin: float, end: float, horizon: float, apart: float, follower: Steps, leader: Optional[Steps]
) -> float:
    """The part of the leader's mean turning that lies before the horizon, weighted with its share."""
    planned = horizon if leader is None else float(leader.bounds[0])
    total = follower.mean(begin + apart, min(end, planned) + apart) * _part(begin, end, -np.inf, planned)
    if leader is not None:
        total += leader.mean(max(begin, planned), min(end, horizon)) * _part(begin, end, planned, horizon)
    return total


def _part(begin: float, end: float, lowest: float, highest: float) -> float:
    return max(min(end, highest) - max(begin, lowest), 0.0) / (end - begin)


def _ways(task: Task) -> list[Steps]:
    """Curvature of each way over the metres that the fleet has driven."""
    found = []
    for way in task.ways:
        bends, lengths = (np.array(column) for column in zip(*way.segments))
        found.append(Steps(np.concatenate([[0.0], np.cumsum(lengths)]), bends))
    return found


def _packed(rows: list[_Row], width: int) -> Comparison:
    """Rows with as many places of each as are needed."""
    at, parts = [], []
    for row in rows:
        for part in (row.first, row.second):
            used = np.flatnonzero(part)
            begin = min(int(used[0]) if len(used) else 0, len(part) - width)
            at.append(begin)
            parts.append(part[begin : begin + width])
    placed = np.array(at, dtype=int).reshape(-1, 2)
    weighted = np.array(parts).reshape(-1, 2, width)
    return Comparison(
        np.array([row.edge for row in rows], dtype=int), placed[:, 0], placed[:, 1], weighted[:, 0], weighted[:, 1],
        np.array([row.known for row in rows]), np.array([row.seconds for row in rows]),
    )
