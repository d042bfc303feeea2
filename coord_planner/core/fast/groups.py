# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parts of a fleet that neither copy each other nor could meet: each is a problem of its own."""

from __future__ import annotations

from typing import Optional

import attrs
import networkx as nx
import numpy as np

from .. import ocp
from ..blocks import Blocks
from ..fleet import Fleet
from ..plan import Plan
from ..problem import Bounds, Fences, Problem, Watch
from ..solver import Start

_OF_PAIRS, _OF_FENCES = ("short", "clearance"), ("outside", "fence")  # blocks whose rows are no robots


@attrs.frozen(eq=False)
class Group:
    """Positions of its robots, edges, pairs and fences in the whole, each increasing."""

    robots: np.ndarray
    edges: np.ndarray
    pairs: np.ndarray
    fences: np.ndarray


def groups(problem: Problem) -> list[Group]:
    """The parts, by their first robots; one when all hang together."""
    joined: nx.Graph = nx.Graph()
    joined.add_nodes_from(range(len(problem.fleet)))
    joined.add_edges_from(problem.edges.tolist())
    joined.add_edges_from(problem.watch.pairs.tolist())
    found = []
    for part in sorted(map(sorted, nx.connected_components(joined)), key=lambda robots: robots[0]):
        robots = np.array(part)
        found.append(Group(robots, *(
            np.flatnonzero(np.isin(firsts, robots))
            for firsts in (problem.edges[:, 0], problem.watch.pairs[:, 0], problem.fences.robots)
        )))
    return found


def part_of(problem: Problem, group: Group) -> Problem:
    """The problem of one group."""
    place = np.full(len(problem.fleet), -1)
    place[group.robots] = np.arange(len(group.robots))
    robots, bounds, watch, fences = group.robots, problem.bounds, problem.watch, problem.fences
    return attrs.evolve(
        problem, fleet=Fleet(tuple(problem.fleet.robots[k] for k in robots)),
        edges=place[problem.edges[group.edges]], weights=problem.weights[group.edges],
        initial=problem.initial[robots], asked_speed=problem.asked_speed[robots],
        turn_speed=problem.turn_speed[robots], full_speed=problem.full_speed[robots], target=problem.target[robots],
        bounds=Bounds(*(getattr(bounds, field.name)[robots] for field in attrs.fields(Bounds))),
        watch=Watch(place[watch.pairs[group.pairs]], watch.normals[group.pairs], watch.gaps[group.pairs]),
        fences=Fences(
            place[fences.robots[group.fences]], fences.normals[group.fences], fences.reaches[group.fences]
        ),
    )


def start_of(problem: Problem, start: Start, group: Group, part: Problem) -> Start:
    """Where the solve of one group starts."""
    variables, rows = ocp.variable_blocks(problem.shape), ocp.row_blocks(problem.shape)
    own, own_rows = ocp.variable_blocks(part.shape), ocp.row_blocks(part.shape)
    multipliers: Optional[tuple[np.ndarray, np.ndarray]] = None
    if start.multipliers is not None:
        of_bounds, of_rows = start.multipliers
        multipliers = _taken(variables, own, of_bounds, group), _taken(rows, own_rows, of_rows, group)
    return Start(_taken(variables, own, start.vector, group), multipliers)


def whole(problem: Problem, parts: list[tuple[Group, Problem, Plan]]) -> Plan:
    """One plan from the plans of all groups."""
    variables, rows = ocp.variable_blocks(problem.shape), ocp.row_blocks(problem.shape)
    vectors = np.zeros(variables.size), np.zeros(variables.size), np.zeros(rows.size)
    for group, part, plan in parts:
        own, own_rows = ocp.variable_blocks(part.shape), ocp.row_blocks(part.shape)
        bounds, row_forces = plan.multipliers
        pieces = (variables, own, plan.vector), (variables, own, bounds), (rows, own_rows, row_forces)
        for vector, (layout, small, piece) in zip(vectors, pieces):
            _put(layout, small, piece, group, vector)
    plans = [plan for _, _, plan in parts]
    return Plan(
        fleet=problem.fleet, times=problem.times,
        states=_gathered([(group.robots, plan.states) for group, _, plan in parts]),
        rates=_gathered([(group.robots, plan.rates) for group, _, plan in parts]),
        cost=sum(plan.cost for plan in plans),
        short=_gathered([(group.pairs, plan.short) for group, _, plan in parts]), pairs=problem.watch.pairs,
        outside=_gathered([(group.fences, plan.outside) for group, _, plan in parts]), fenced=problem.fences.robots,
        missed=_gathered([(group.robots, plan.missed) for group, _, plan in parts]),
        solved=all(plan.solved for plan in plans), solve_time=sum(plan.solve_time for plan in plans),
        iterations=max(plan.iterations for plan in plans), vector=vectors[0], multipliers=(vectors[1], vectors[2]),
    )


def _which(name: str, group: Group) -> np.ndarray:
    """Rows of a block that are the group's."""
    return group.pairs if name in _OF_PAIRS else group.fences if name in _OF_FENCES else group.robots


def _taken(layout: Blocks, own: Blocks, vector: np.ndarray, group: Group) -> np.ndarray:
    blocks = layout.unpack(vector)
    return own.pack({name: block[_which(name, group)] if len(block) else block for name, block in blocks.items()})


def _put(layout: Blocks, own: Blocks, piece: np.ndarray, group: Group, vector: np.ndarray) -> None:
    for name, block in own.unpack(piece).items():
        if block.size:
            view = vector[layout.slices[name]].reshape(layout.shapes[name], order="F")
            view[_which(name, group)] = block


def _gathered(pieces: list[tuple[np.ndarray, np.ndarray]]) -> np.ndarray:
    """Rows of all groups, each in its place."""
    found = np.zeros((sum(len(where) for where, _ in pieces),) + pieces[0][1].shape[1:])
    for where, rows in pieces:
        found[where] = rows
    return found
