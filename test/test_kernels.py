# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The compiled kernels against the same steps in numpy, on random problems; and how they are loaded."""

from __future__ import annotations

import subprocess
import sys

import attrs
import numpy as np
import pytest
from random_problems import problem

from coord_planner.core import motion, solver
from coord_planner.core.fast import engine, vectors
from coord_planner.core.fast.compiled import CompiledEngine
from coord_planner.core.fast.interior import BARRIER
from coord_planner.core.fast.margins import LEAST
from coord_planner.core.fast.numbers import fleet_numbers, numbers
from coord_planner.core.fast.plain import PlainEngine
from coord_planner.core.fast.point import Forces
from coord_planner.core.fast.solver import TickSolver
from coord_planner.core.fast.structure import structure
from coord_planner.core.problem import Problem
from coord_planner.core.schedule import Schedule

KINDS = {"quiet": (False, False), "contact": (True, False), "contact and fences": (True, True)}
COMPILED = pytest.mark.skipif(engine.kernels() is None, reason="numba is not installed")


@attrs.frozen(eq=False)
class Both:
    """The plain and the compiled engine of a problem, and where they start."""

    plain: PlainEngine
    compiled: CompiledEngine
    curvature: np.ndarray
    speed: np.ndarray
    nothing: Forces


def both(posed: Problem, guess: np.ndarray) -> Both:
    known = numbers(posed, fleet_numbers(posed.fleet))
    order = structure(len(posed.fleet), posed.edges, posed.watch.pairs)
    start = vectors.commands(vectors.sizes(posed), solver.start_from_states(posed, guess).vector)
    n, m = start[0].shape
    nothing = Forces(np.zeros((6, n, m)), np.zeros((n, 7)), np.zeros((len(known.pairs), m)))
    compiled = CompiledEngine(engine.kernels(), known, order)
    return Both(PlainEngine(known, order), compiled, *start, nothing)


def assert_near(plain, compiled, within: float) -> None:
    for one, other in zip(plain.commands, compiled.commands):
        assert other == pytest.approx(one, rel=within, abs=within)
    assert compiled.cost == pytest.approx(plain.cost, rel=within, abs=within)
    assert compiled.excess == pytest.approx(plain.excess, rel=within, abs=within)


@COMPILED
@pytest.mark.parametrize("kind", KINDS.values(), ids=KINDS)
def test_interior_steps_are_those_of_numpy(kind):
    """The plain engine takes derivatives anew only where a point is far from the last one: first steps are long."""
    for seed in range(12):
        two = both(*problem(seed, *kind))
        x, y = (steps.open(steps.point(two.curvature, two.speed), two.nothing, BARRIER, LEAST)
                for steps in (two.plain, two.compiled))
        for _ in range(2):
            x, y = two.plain.interior_step(x), two.compiled.interior_step(y)
            assert_near(x.point, y.point, 1e-8)
            assert y.margins == pytest.approx(x.iterate.margins, rel=1e-6, abs=1e-9)
            assert y.pushes == pytest.approx(x.iterate.pushes, rel=1e-6, abs=1e-9)
            assert y.open == pytest.approx(x.open, rel=1e-7)


@COMPILED
@pytest.mark.parametrize("kind", KINDS.values(), ids=KINDS)
def test_active_steps_are_those_of_numpy(kind):
    """From where interior-point steps have come, with the rows that are met there; met rows give way by 1e-6 a push."""
    for seed in range(12):
        two = both(*problem(seed, *kind))
        x = two.plain.open(two.plain.point(two.curvature, two.speed), two.nothing, BARRIER, LEAST)
        for _ in range(6):
            x = two.plain.interior_step(x)
        forces = two.plain.forces(x)
        trials = [steps.trial(steps.point(*x.point.commands), forces) for steps in (two.plain, two.compiled)]
        held = [None, None]
        for _ in range(2):
            for i, steps in enumerate((two.plain, two.compiled)):
                held[i] = steps.hold(held[i], trials[i], 3e-3)
                trials[i] = steps.active_step(held[i], trials[i])
            plain, compiled = trials
            if plain.changed > 6 * len(two.speed):
                break  # the sets are lost, and the solver would stop here
            assert_near(plain.point, compiled.point, 1e-4)
            assert compiled.changed == plain.changed
            assert compiled.forces.limits == pytest.approx(plain.forces.limits, rel=1e-4, abs=1e-4)
            assert compiled.forces.clearances == pytest.approx(plain.forces.clearances, rel=1e-4, abs=1e-4)


@COMPILED
def test_what_pulls_on_the_poses_bends_the_same():
    for seed in range(6):
        two = both(*problem(seed, contact=True))
        x, y = (steps.open(steps.point(two.curvature, two.speed), two.nothing, BARRIER, LEAST)
                for steps in (two.plain, two.compiled))
        two.plain._interior._bending, y = True, attrs.evolve(y, bending=True)
        assert_near(two.plain.interior_step(x).point, two.compiled.interior_step(y).point, 1e-9)


@COMPILED
def test_the_number_of_intervals_need_not_suit_the_kernels():
    """Blocks are padded to four rows, and rows are taken four at a time: what is left over counts too."""
    posed, guess = problem(4, contact=True)
    for intervals in (13, 14, 15):
        cut = shortened(posed, intervals)
        two = both(cut, guess[:, : intervals + 1])
        x, y = (steps.open(steps.point(two.curvature, two.speed), two.nothing, BARRIER, LEAST)
                for steps in (two.plain, two.compiled))
        assert_near(two.plain.interior_step(x).point, two.compiled.interior_step(y).point, 1e-9)


def shortened(posed: Problem, m: int) -> Problem:
    bounds, watch, fences = posed.bounds, posed.watch, posed.fences
    return attrs.evolve(
        posed, times=posed.times[: m + 1], asked_speed=posed.asked_speed[:, :m], turn_speed=posed.turn_speed[:, :m],
        bounds=attrs.evolve(bounds, **{
            field.name: getattr(bounds, field.name)[:, :m] for field in attrs.fields(type(bounds))
        }),
        watch=attrs.evolve(watch, normals=watch.normals[:, :m], gaps=watch.gaps[:, :m]),
        fences=attrs.evolve(fences, normals=fences.normals[:, :m], reaches=fences.reaches[:, :m]), compared=None,
    )


@pytest.mark.parametrize("kind", KINDS.values(), ids=KINDS)
def test_without_numba_the_same_problems_are_solved(kind, monkeypatch):
    monkeypatch.setattr(engine, "kernels", lambda: None)
    posed, guess = problem(2, *kind)
    plan = TickSolver().solve(posed, solver.start_from_states(posed, guess))
    monkeypatch.undo()
    again = TickSolver().solve(posed, solver.start_from_states(posed, guess))
    assert plan.solved and again.cost == pytest.approx(plan.cost, rel=5e-3, abs=1e-4)


@COMPILED
def test_other_types_are_refused_and_not_compiled_for():
    """A compilation takes seconds; there is no time for one in a tick."""
    compiled = engine.kernels()
    with pytest.raises(TypeError):
        compiled.stiffen(np.zeros(2), np.zeros(2), 0, np.zeros(8), np.zeros(8), np.zeros(2))


def test_where_numba_is_missing_it_is_told():
    program = "import sys; sys.modules['numba'] = None; from coord_planner.core.fast.engine import told; print(told())"
    found = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, timeout=60, check=True)
    assert "numba is not installed" in found.stdout


@COMPILED
def test_commands_over_time_and_machines_that_follow_them_are_the_plain_ones():
    rng = np.random.default_rng(8)
    for count, pieces in ((1, 1), (3, 2), (4, 9)):
        times = np.sort(rng.uniform(0.0, 5.0, pieces))
        times[-1] = times[-2] if pieces > 2 else times[-1]  # two moments are one
        held = Schedule(times, rng.normal(size=(count, pieces, 3))[:, :, 1:])  # part of a larger array
        moments = rng.uniform(-1.0, 6.0, (count, 7))
        moments[0, :2] = times[0], times[-1]
        assert held.at(moments) == pytest.approx(held._at(moments), abs=1e-12)
        assert held.at(moments[:, 0]) == pytest.approx(held._at(moments[:, 0]), abs=1e-12)
        moments[-1, -1] = np.nan
        assert pieces == 1 or np.isnan(held.at(moments)[-1, -1]).all()  # the last gate finds it
    poses, reached, commands = (rng.normal(size=size) for size in ((5, 3), (5, 2), (5, 6, 2)))
    lag, h, factor = rng.uniform(0.0, 0.5, (5, 2)), rng.uniform(0.0, 0.2, 5), rng.uniform(0.2, 1.2, 5)
    lag[0], reached[1, 1], commands[1, :, 1] = 0.0, 0.0, 0.0  # no lag; straight on
    found, expected = (each(poses, reached, commands, h, lag, factor) for each in (motion.drive, motion._drive))
    assert found[0] == pytest.approx(expected[0], abs=1e-12) and found[1] == pytest.approx(expected[1], abs=1e-12)
