# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Measures what a whole turn costs when ticks are solved fast, and when they are converged; no test collects it.

    OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_closed_loop.py [ROBOTS [SEEDS]]

The benchmark's corner, driven twice with the same pose noise: by the tick solver, and by IPOPT to the end. What counts
is what was driven: 1/2 integral u'(I + chi L)u, steering, accelerating and leaving the asked speed, as the program
prices them, from the states that the robots really went through.
"""

from __future__ import annotations

import sys

import numpy as np

from coord_planner.core import solver
from coord_planner.core.fast.solver import TickSolver
from coord_planner.core.problem import CURVATURE, CURVATURE_COMMAND, SPEED, SPEED_COMMAND
from coord_planner.trial.bench_set import EVERY, FORMATIONS, GRAPHS, SPACINGS, Course


def driven_cost(course, solve):
    """Cost of a course from end to end, each tick solved by ``solve``."""
    total = 0.0
    for _ in range(course.ticks):
        posed = course.pose()
        problem, before = posed.problem, posed.predicted.initial
        course.drive(posed, solve(posed))
        after = course.states
        mean = (before + after) / 2
        speed, asked = mean[:, SPEED], problem.asked_speed[:, 0]
        turning = speed * mean[:, CURVATURE] / problem.turn_speed[:, 0]
        differing = turning[problem.edges[:, 0]] - turning[problem.edges[:, 1]]
        rates = (after - before)[:, [CURVATURE_COMMAND, SPEED_COMMAND]] / EVERY
        prices = problem.prices
        total += EVERY / 2 * (
            np.sum(turning**2) + problem.coupling * np.sum(problem.weights * differing**2)
            + prices.curvature_rate * np.sum(rates[:, 0] ** 2) + prices.acceleration * np.sum(rates[:, 1] ** 2)
            + prices.speed * np.sum(((speed - asked) / problem.full_speed) ** 2)
        )
    return total


def converged(posed):
    """The tick's problem solved to the end."""
    return solver.solve(posed.problem, posed.start)


def main(robots=6, seeds=2):
    """A table."""
    for case in SPACINGS:
        for formation in FORMATIONS:
            for graph in GRAPHS:
                for seed in range(seeds):
                    fast = TickSolver()
                    costs = [
                        driven_cost(Course(case, robots, formation, graph, seed), solve)
                        for solve in (lambda posed, fast=fast: fast.solve(posed.problem, posed.start), converged)
                    ]
                    dearer = 100 * (costs[0] / costs[1] - 1)
                    sys.stdout.write(f"{case:9} {formation:8} {graph:8} seed {seed}: {costs[0]:.4f} fast, "
                                     f"{costs[1]:.4f} converged, {dearer:+.2f} %\n")
                    sys.stdout.flush()


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
