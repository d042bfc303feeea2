# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parts of the fleet that neither copy each other nor could meet are solved apart, and nothing else changes."""

from __future__ import annotations

import attrs
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from random_problems import problem

from coord_planner.core import ocp, solver
from coord_planner.core.fast.groups import groups, part_of, start_of
from coord_planner.core.fast.solver import TickSolver
from coord_planner.core.fast.ticks import TickSolve
from coord_planner.core.problem import Problem


def apart(seed: int, fenced: bool = True) -> tuple[Problem, np.ndarray]:
    """A random problem of which only robots 0 and 2 hang together: by a pair, not by an edge."""
    for more in range(100):
        posed, guess = problem(seed + 1000 * more, contact=True, fenced=fenced)
        if len(posed.fleet) >= 3:
            break
    kept = [i for i, pair in enumerate(posed.watch.pairs.tolist()) if pair == [0, 2]]
    watch = attrs.evolve(
        posed.watch, pairs=posed.watch.pairs[kept], normals=posed.watch.normals[kept], gaps=posed.watch.gaps[kept]
    )
    return attrs.evolve(
        posed, watch=watch, edges=np.zeros((0, 2), dtype=int), weights=np.zeros(0), compared=None
    ), guess


def test_who_hangs_together():
    posed, _ = apart(1)
    found = groups(posed)
    assert [group.robots.tolist() for group in found] == [[0, 2], [1], [3]][: len(posed.fleet) - 1]
    assert found[0].pairs.tolist() == [0] and found[1].fences.tolist() == [1]
    assert part_of(posed, found[0]).watch.pairs.tolist() == [[0, 1]]
    whole, _ = problem(5, contact=False)
    assert len(groups(whole)) == 1


@given(seed=st.integers(0, 999))
@settings(max_examples=25, deadline=None)
def test_solved_apart_they_are_what_they_are_together(seed):
    posed, guess = apart(seed)
    start = solver.start_from_states(posed, guess)
    plan, together = TickSolve(lambda: 0.0)(posed, start, True, 1.0), TickSolver().solve(posed, start)
    assert ocp.violation(posed, plan.vector) < 1e-3
    if plan.solved and together.solved:
        assert plan.cost == pytest.approx(together.cost, rel=3e-2, abs=1e-3)
    layout = ocp.variable_blocks(posed.shape).unpack(plan.vector)
    assert layout["theta"] == pytest.approx(plan.states[:, :, 2]) and layout["short"] == pytest.approx(plan.short)


def test_multipliers_find_their_way_into_parts_and_back():
    posed, guess = apart(2)
    solve = TickSolve(lambda: 0.0)
    plan = solve(posed, solver.start_from_states(posed, guess), True, 1.0)
    again = solve(posed, solver.Start(plan.vector, plan.multipliers), True, 1.0)
    assert again.iterations <= plan.iterations and again.cost == pytest.approx(plan.cost, rel=2e-2)
    for group in groups(posed):
        part = part_of(posed, group)
        own = start_of(posed, solver.Start(plan.vector, plan.multipliers), group, part)
        ends = ocp.row_blocks(part.shape).unpack(own.multipliers[1])["end"]
        assert (ends == ocp.row_blocks(posed.shape).unpack(plan.multipliers[1])["end"][group.robots]).all()


def test_a_budget_is_shared_and_what_one_leaves_others_have():
    """On a clock that runs on by one second a look."""
    posed, guess = apart(3)
    ticking = iter(range(10_000))
    plan = TickSolve(lambda: float(next(ticking)))(posed, solver.start_from_states(posed, guess), True, 6.0)
    assert not plan.solved and plan.iterations <= 3 and np.isfinite(plan.states).all()
