# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The figures of each turn in a recording: who began, how it spread, how well the fleet agreed, how near it came."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import attrs
import networkx as nx
import numpy as np

from ..core.graph import NeighbourGraph
from . import turns
from .nearness import Nearness
from .review_fleet import FleetRecord
from .turns import Onset, Span

_SIGMAS = 2.0  # standard deviations by which one onset must be before the next


@attrs.frozen
class Turn:
    """One turn of the fleet. N robots.

    Attributes:
        span: when, and who turned. onsets: by robot, for those that turned at all.
        heading_changes: radians over the turn, shape (N,); NaN where unknown.
        clearance: the smallest in it, metres (inf without pairs). pair: whose. clearance_at: when, seconds.
        heading_spread: largest difference of two robots' heading changes at equal time, rad.
        curvature_spread: largest difference of two curvatures at equal time, 1/m.
        alignment: smallest length of the mean of all robots' unit vectors, turned by their headings at the beginning;
            1: all alike (the order parameter of Vicsek et al., Phys. Rev. Lett. 75, 1995, from memory).
        first: who turned first, "" where that is within the noise. origin: from whom hops are counted, and ``why``.
        hops: from the origin, by robot, -1 where no way leads there; empty without a graph.
        shares: by robot, the part of the origin's turn rate that it turned with at equal time (least squares); what
            the copying law speaks of. NaN without an origin.
        by_hop: (hop, robots, mean onset, its deviation, mean amplitude, its deviation).
        spread_hops, spread_metres: how the onset grows with them; None where that cannot be asked.
    """

    span: Span
    onsets: Mapping[str, Onset]
    heading_changes: np.ndarray
    clearance: float
    pair: tuple[str, str] | None
    clearance_at: float
    heading_spread: float
    curvature_spread: float
    alignment: float
    first: str
    origin: str
    why: str
    hops: Mapping[str, int]
    shares: np.ndarray
    by_hop: tuple[tuple[int, int, float, float, float, float], ...]
    spread_hops: turns.Spread | None
    spread_metres: turns.Spread | None


def find_turns(record: FleetRecord, near: Nearness) -> list[Turn]:
    """All turns of a recording."""
    run = record.run
    rates = turn_rates(record)
    deviations = [robot.motion.rate_sd for robot in record.robots]
    return [_turn(record, near, rates, span) for span in turns.find(run.times, rates, run.speeds, deviations)]


def turn_rates(record: FleetRecord) -> np.ndarray:
    """Turn rates on the common times, shape (N, S), rad/s."""
    run = record.run
    rates = run.speeds * run.curvatures
    for row, robot in enumerate(record.robots):
        inside = np.interp(run.times, robot.motion.times, robot.motion.rates)
        rates[row] = np.where(np.isfinite(run.poses[row, :, 2]), inside, math.nan)
    return rates


def _turn(record: FleetRecord, near: Nearness, rates: np.ndarray, span: Span) -> Turn:
    run, names = record.run, record.run.fleet.names
    inside = np.flatnonzero((run.times >= span.from_s) & (run.times <= span.to_s))
    onsets = {}
    for row, robot in enumerate(record.robots):
        known = robot.motion.rate_sd if robot.motion.rates_from == "poses" else None
        found = turns.onset(run.times[inside], rates[row, inside], known)
        if found is not None:
            onsets[robot.name] = found
    nearest = int(inside[np.argmin(near.clearance[inside])])
    one, other = (int(k) for k in near.pair[nearest])
    pair = (names[one], names[other]) if one >= 0 else None
    changes, spread = _headings(run.poses[:, inside, 2])
    origin, why = _origin(onsets, _led(record))
    hops, metres = _distances(record, origin, int(inside[0]))
    reached = [name for name in onsets if hops.get(name, -1) >= 0]
    return Turn(
        span, onsets, changes, float(near.clearance[nearest]), pair, float(run.times[nearest]), spread,
        _largest_spread(run.curvatures[:, inside]), _alignment(run.poses[:, inside, 2]), _first(onsets), origin, why,
        hops, _shares(rates[:, inside], names, origin), _by_hop(onsets, hops),
        turns.spread(np.array([float(hops[name]) for name in reached]), [onsets[name] for name in reached]),
        turns.spread(np.array([metres[name] for name in reached]), [onsets[name] for name in reached]),
    )


def _headings(headings: np.ndarray) -> tuple[np.ndarray, float]:
    """Heading change of each robot (N,), and the largest difference of two at equal time."""
    changes, since = np.full(len(headings), math.nan), np.full(headings.shape, math.nan)
    for row, values in enumerate(headings):
        known = values[np.isfinite(values)]
        if len(known):
            changes[row], since[row] = known[-1] - known[0], values - known[0]
    return changes, _largest_spread(since)


def _largest_spread(values: np.ndarray) -> float:
    """Largest difference between two rows at equal time; NaN with fewer than two rows known anywhere."""
    several = np.isfinite(values).sum(axis=0) >= 2
    if not several.any():
        return math.nan
    return float((np.nanmax(values[:, several], axis=0) - np.nanmin(values[:, several], axis=0)).max())


def _alignment(headings: np.ndarray) -> float:
    known = np.isfinite(headings).all(axis=0)
    if not known.any() or len(headings) < 2:
        return math.nan
    since = headings[:, known] - headings[:, known][:, :1]
    return float(np.abs(np.exp(1j * since).mean(axis=0)).min())


def _first(onsets: Mapping[str, Onset]) -> str:
    """Who began, if that is sure."""
    ordered = sorted(onsets, key=lambda name: onsets[name].time)
    if len(ordered) < 2:
        return ordered[0] if ordered else ""
    one, two = onsets[ordered[0]], onsets[ordered[1]]
    return ordered[0] if two.time - one.time > _SIGMAS * math.hypot(one.sd, two.sd) else ""


def _led(record: FleetRecord) -> str:
    """The only robot that was given an end, by the planner's word; "" where there is none or several."""
    asked = np.flatnonzero(np.isfinite(record.run.end_poses[:, 2]))
    return record.run.fleet.names[int(asked[0])] if len(asked) == 1 and len(record.robots) > 1 else ""


def _shares(rates: np.ndarray, names: Sequence[str], origin: str) -> np.ndarray:
    if not origin:
        return np.full(len(rates), math.nan)
    known = np.nan_to_num(rates)
    own = known[list(names).index(origin)]
    return known @ own / max(float(own @ own), 1e-12)


def _origin(onsets: Mapping[str, Onset], led: str) -> tuple[str, str]:
    """From whom hops are counted, and why from there."""
    first = _first(onsets)
    if first:
        return first, "turned first"
    if led in onsets:
        return led, "alone was given an end; who turned first is within the noise"
    ordered = sorted(onsets, key=lambda name: -abs(onsets[name].peak))
    if not ordered:
        return "", "nobody turned"
    one, two = onsets[ordered[0]], onsets[ordered[1]]
    if abs(one.peak) - abs(two.peak) > _SIGMAS * math.hypot(one.peak_sd, two.peak_sd) + 0.05 * abs(one.peak):
        return ordered[0], "turned most strongly; who turned first is within the noise"
    earliest = min(onsets, key=lambda name: onsets[name].time)
    return earliest, "has the earliest onset, which is within the noise of others"


def _distances(record: FleetRecord, origin: str, sample: int) -> tuple[dict[str, int], dict[str, float]]:
    """Hops and metres along the graph from the origin, by robot; -1 where no way leads there, empty without a graph."""
    run = record.run
    if not run.edges or not origin:
        return {}, {}
    graph = NeighbourGraph(run.fleet.names, run.edges).networkx()
    for first, second in graph.edges:
        apart = run.poses[run.fleet.index(first), sample, :2] - run.poses[run.fleet.index(second), sample, :2]
        graph.edges[first, second]["metres"] = float(np.nan_to_num(np.hypot(*apart)))
    hops = nx.single_source_shortest_path_length(graph, origin)
    metres = nx.single_source_dijkstra_path_length(graph, origin, weight="metres")
    return ({name: int(hops.get(name, -1)) for name in run.fleet.names},
            {name: float(metres.get(name, math.nan)) for name in run.fleet.names})


def _by_hop(onsets: Mapping[str, Onset], hops: Mapping[str, int]
            ) -> tuple[tuple[int, int, float, float, float, float], ...]:
    rows = []
    for hop in sorted({hops[name] for name in onsets if hops.get(name, -1) >= 0}):
        here = [onsets[name] for name in onsets if hops[name] == hop]
        rows.append((hop, len(here), *_mean([one.time for one in here], [one.sd for one in here]),
                     *_mean([abs(one.peak) for one in here], [one.peak_sd for one in here])))
    return tuple(rows)


def _mean(values: Sequence[float], deviations: Sequence[float]) -> tuple[float, float]:
    """Mean and its standard deviation, from the values' own noise or their scatter, whichever is larger."""
    own = math.sqrt(sum(sd**2 for sd in deviations)) / len(values)
    scatter = float(np.std(values, ddof=1)) / math.sqrt(len(values)) if len(values) > 1 else 0.0
    return float(np.mean(values)), max(own, scatter)


def as_values(turn: Turn, names: Sequence[str]) -> dict[str, Any]:
    """The figures for JSON. Keys that hold a figure for each robot name every robot; None: it did not turn."""
    def each(figure: str) -> dict[str, Any]:
        return {name: getattr(turn.onsets[name], figure) if name in turn.onsets else None for name in names}

    return {
        "from_s": turn.span.from_s, "to_s": turn.span.to_s,
        "robots": [names[row] for row in turn.span.robots],
        "first": turn.first or None,
        "onset_s": each("time"), "onset_sd_s": each("sd"),
        "amplitude_rad_per_s": each("peak"), "amplitude_sd_rad_per_s": each("peak_sd"),
        "share_of_origin": dict(zip(names, (float(value) for value in turn.shares))),
        "heading_change_rad": dict(zip(names, (float(value) for value in turn.heading_changes))),
        "min_clearance_m": turn.clearance, "min_clearance_pair": list(turn.pair) if turn.pair else None,
        "min_clearance_s": turn.clearance_at if turn.pair else None,
        "heading_spread_max_rad": turn.heading_spread, "curvature_spread_max_per_m": turn.curvature_spread,
        "alignment_min": turn.alignment,
        "hops_from": turn.origin or None, "hops_from_because": turn.why,
        "hops": {name: turn.hops[name] if turn.hops.get(name, -1) >= 0 else None for name in names} or None
        if turn.hops else None,
        "by_hop": [
            {"hop": hop, "robots": count, "onset_s": onset, "onset_sd_s": onset_sd,
             "amplitude_rad_per_s": amplitude, "amplitude_sd_rad_per_s": amplitude_sd}
            for hop, count, onset, onset_sd, amplitude, amplitude_sd in turn.by_hop
        ],
        "spread": _spread_values(turn),
    }


def _spread_values(turn: Turn) -> dict[str, Any] | None:
    """The speed at which the turn spread; None where onsets do not differ by more than the noise."""
    if turn.spread_hops is None or not turn.spread_hops.sure:
        return None
    values = {"delay_s_per_hop": turn.spread_hops.delay, "delay_sd_s_per_hop": turn.spread_hops.delay_sd,
              "hops_per_s": turn.spread_hops.speed, "hops_per_s_sd": turn.spread_hops.speed_sd}
    if turn.spread_metres is not None and turn.spread_metres.sure:
        values |= {"m_per_s": turn.spread_metres.speed, "m_per_s_sd": turn.spread_metres.speed_sd}
    return values
