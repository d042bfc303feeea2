# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Robots that turn one after the other at the same place: neighbours compared at equal path coordinate.

Everybody drives the same way, ``behind`` metres apart, and at the same speed at the same moment; so who is d metres
further back is at a place of the way when the fleet has driven d metres more. What a follower's turning in one
interval is compared with is then a mean of its leader's turnings in earlier ones, with weights that the asked
speeds fix beforehand. Ticks make the same comparisons as the reference; what lies outside the horizon is known.
"""

from __future__ import annotations

from typing import Optional

import attrs
import numpy as np

from .manoeuvre import Task
from .problem import Comparison

_SHORT = 1e-6  # metres driven in an interval below which nothing is compared in it
_LATER = 2  # horizons behind this one in which followers may come to where their leaders are in it


@attrs.frozen(eq=False)
class Steps:
    """A function that is constant between bounds, shape (K + 1,), increasing; values (K,); 0 outside."""

    bounds: np.ndarray
    values: np.ndarray

    def integral(self, begin: np.ndarray, end: np.ndarray) -> np.ndarray:
        """Over stretches of any shape."""
        whole = np.concatenate([[0.0], np.cumsum(self.values * np.diff(self.bounds))])
        return np.asarray(np.interp(end, self.bounds, whole) - np.interp(begin, self.bounds, whole))


def shares(bounds: np.ndarray, begin: np.ndarray, end: np.ndarray) -> np.ndarray:
    """Part of each stretch from begin to end, shape (R,), that lies in each piece between bounds, shape (R, K)."""
    overlap = np.minimum(bounds[1:], end[:, None]) - np.maximum(bounds[:-1], begin[:, None])
    return np.asarray(np.maximum(overlap, 0.0) / np.maximum(end - begin, 1e-12)[:, None])


def comparison(task: Task, edges: np.ndarray, s: np.ndarray) -> Comparison:
    """Comparisons in a reference whose nodes lie at seconds s of the manoeuvre, shape (M + 1,).

    What leaders did before its beginning is taken to be what the followers' ways do there.
    """
    passed, before, count = task.passed(s), _ways(task), len(s) - 1
    rows = _joined([_within(e, edge, task, s, passed, before, None) for e, edge in enumerate(edges)], count)
    used = [_used(part) for part in (rows.first, rows.second)]
    width = min(max(1, *(int((last - first + 1).max(initial=1)) for first, last in used)), count)
    return _narrowed(rows, [first for first, _ in used], width)


def comparison_of_tick(
    task: Task, edges: np.ndarray, s: np.ndarray, step: float, made_s: np.ndarray, made: np.ndarray
) -> Comparison:
    """The comparisons of a reference that a horizon with nodes at s has a part in, (1 + _LATER) M for each edge.

    Args:
        made_s: nodes of the reference, shape (K + 1,). made: its turnings, shape (N, K), 1/m.
    """
    passed, before, count = task.passed(s), _ways(task), len(s) - 1
    bounds = task.passed(made_s)
    known = [Steps(bounds, values) for values in made]
    rows = []
    for e, edge in enumerate(edges):
        now = _within(e, edge, task, s, passed, before, known)
        rows.append(_padded(now, e, count, count))
        rows.append(_padded(_later(e, edge, task, s, step, passed, before, known), e, _LATER * count, count))
    return _narrowed(_joined(rows, count), [np.zeros(0, dtype=int)] * 2, count)


def _within(
    e: int, edge: np.ndarray, task: Task, s: np.ndarray, passed: np.ndarray, before: list[Steps],
    known: Optional[list[Steps]],
) -> Comparison:
    """A row for each interval in which the fleet drives: the follower there, its leader where it was before."""
    follower, leader, apart = _order(edge, task)
    m = np.flatnonzero(np.diff(passed) > _SHORT)
    begin, end = passed[m] - apart, passed[m + 1] - apart
    past = _past(begin, end, float(passed[0]), apart, before[follower], known[leader] if known else None)
    own = np.zeros((len(m), len(s) - 1))
    own[np.arange(len(m)), m] = 1.0
    return _rows(e, follower == edge[0], own, shares(passed, begin, end), -past, np.diff(s)[m])


def _later(
    e: int, edge: np.ndarray, task: Task, s: np.ndarray, step: float, passed: np.ndarray, before: list[Steps],
    known: list[Steps],
) -> Comparison:
    """A row for each interval after the horizon in which the follower comes to where the leader is in it."""
    follower, leader, apart = _order(edge, task)
    there = task.passed(np.arange(s[-1], max(task.duration, s[-1]) + step / 2, step))
    began, ended = there[:-1], there[1:]
    inside = (ended - began > _SHORT) & (ended - apart > passed[0]) & (began - apart < passed[-1])
    began, ended = began[inside], ended[inside]
    begin, end = began - apart, ended - apart
    past = _past(begin, end, float(passed[0]), apart, before[follower], known[leader])
    past = past + known[leader].integral(np.maximum(begin, passed[-1]), np.maximum(end, passed[-1])) / (end - begin)
    own = known[follower].integral(began, ended) / (ended - began)
    nothing = np.zeros((len(began), len(s) - 1))
    return _rows(e, follower == edge[0], nothing, shares(passed, begin, end), own - past, np.full(len(began), step))


def _order(edge: np.ndarray, task: Task) -> tuple[int, int, float]:
    """Follower, leader, and metres between them."""
    assert task.behind is not None
    k, j = int(edge[0]), int(edge[1])
    apart = float(task.behind[k] - task.behind[j])
    return (k, j, apart) if apart >= 0 else (j, k, -apart)


def _rows(
    e: int, forward: bool, own: np.ndarray, other: np.ndarray, known: np.ndarray, seconds: np.ndarray
) -> Comparison:
    """Rows over all intervals; ``own`` of the follower, ``other`` of its leader, in the order of the edge."""
    nowhere = np.zeros(len(own), dtype=int)
    first, second, sign = (own, other, 1.0) if forward else (other, own, -1.0)
    return Comparison(nowhere + e, nowhere, nowhere, first, second, sign * known, seconds)


def _past(
    begin: np.ndarray, end: np.ndarray, horizon: float, apart: float, follower: Steps, leader: Optional[Steps]
) -> np.ndarray:
    """The part of the leader's mean turning that lies before the horizon, weighted with its share."""
    planned = horizon if leader is None else float(leader.bounds[0])
    total = follower.integral(np.minimum(begin, planned) + apart, np.minimum(end, planned) + apart)
    if leader is not None:
        total = total + leader.integral(np.clip(begin, planned, horizon), np.clip(end, planned, horizon))
    return np.asarray(total / (end - begin))


def _ways(task: Task) -> list[Steps]:
    """Curvature of each way over the metres that the fleet has driven."""
    found = []
    for way in task.ways:
        bends, lengths = (np.array(column) for column in zip(*way.segments))
        found.append(Steps(np.concatenate([[0.0], np.cumsum(lengths)]), bends))
    return found


def _joined(parts: list[Comparison], count: int) -> Comparison:
    if not parts:
        return _rows(0, True, np.zeros((0, count)), np.zeros((0, count)), np.zeros(0), np.zeros(0))
    names = [field.name for field in attrs.fields(Comparison)]
    return Comparison(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))


def _padded(rows: Comparison, e: int, wanted: int, count: int) -> Comparison:
    """As many rows as wanted, those that are missing without weight."""
    missing = max(wanted - len(rows.edges), 0)
    nothing = np.zeros((missing, count))
    filled = _joined([rows, _rows(e, True, nothing, nothing, np.zeros(missing), np.zeros(missing))], count)
    return Comparison(*(getattr(filled, field.name)[:wanted] for field in attrs.fields(Comparison)))


def _used(weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """First and last interval with a weight in each row, shape (R,) each; 0 where there is none."""
    some = weights != 0.0
    last = weights.shape[1] - 1 - np.argmax(some[:, ::-1], axis=1)
    return np.argmax(some, axis=1), np.where(some.any(axis=1), last, 0)


def _narrowed(rows: Comparison, begins: list[np.ndarray], width: int) -> Comparison:
    """The same rows with weights for ``width`` intervals only, from where they begin."""
    count = rows.first.shape[1]
    if width == count:
        return rows
    steps = np.arange(width)
    at = [np.minimum(begin, count - width) for begin in begins]
    parts = [np.take_along_axis(part, begin[:, None] + steps, axis=1)
             for part, begin in zip((rows.first, rows.second), at)]
    return attrs.evolve(rows, first_at=at[0], second_at=at[1], first=parts[0], second=parts[1])
