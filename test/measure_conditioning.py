# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Measures from which coupling on ticks suffer, for the threshold in core/advice/strength.py; no test collects it.

    OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_conditioning.py [ROBOTS [COUPLING ...]]

The benchmark's quiet corner, robots in a line, at each coupling: the condition of I + chi L, steps of a tick (mean,
p99), ticks that were not solved, and by how much controls cost more than converged ones, rolled out (p95, largest).
"""

from __future__ import annotations

import sys

import attrs
import numpy as np

from coord_planner.core.fast.solver import TickSolver
from coord_planner.core.graph import NeighbourGraph
from coord_planner.trial.bench import _plain, exact_cost
from coord_planner.trial.bench_set import Course

COUPLINGS = (1.0, 10.0, 50.0, 200.0, 500.0, 1e3, 2e3, 1e4, 1e5, 1e6)
SEEDS = range(2)


def row(robots, coupling):
    """Steps of each tick, how many were not solved, gaps of every third."""
    steps, unsolved, gaps = [], 0, []
    for seed in SEEDS:
        course, fast = Course("quiet", robots, "abreast", "path", seed), TickSolver()
        for tick in range(course.ticks):
            posed = course.pose()
            posed = attrs.evolve(posed, problem=attrs.evolve(posed.problem, coupling=coupling))
            plan = fast.solve(posed.problem, posed.start)
            steps.append(plan.iterations)
            unsolved += not plan.solved
            if tick % 3 == 0:
                best = exact_cost(posed.problem, _plain(posed)[0])
                gaps.append((exact_cost(posed.problem, plan.rates) - best) / best)
            course.drive(posed, plan)
    return steps, unsolved, gaps


def main(robots=6, *couplings):
    """A table."""
    names = tuple(f"r{k}" for k in range(robots))
    graph = NeighbourGraph(names, tuple((a, b, 1.0) for a, b in zip(names, names[1:])))
    largest = float(graph.spectrum()[-1])
    sys.stdout.write("  coupling  condition  steps mean  p99  unsolved   gap p95   largest\n")
    for coupling in couplings or COUPLINGS:
        steps, unsolved, gaps = row(robots, coupling)
        sys.stdout.write(
            f"{coupling:10g} {1 + coupling * largest:10.4g} {np.mean(steps):11.2f} {np.percentile(steps, 99):4.0f}"
            f" {unsolved:4d}/{len(steps)} {np.percentile(gaps, 95):9.1e} {max(gaps):9.1e}\n"
        )
        sys.stdout.flush()


if __name__ == "__main__":
    main(*(int(each) if k == 0 else float(each) for k, each in enumerate(sys.argv[1:])))
