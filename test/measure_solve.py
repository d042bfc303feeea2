# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Measures what ``coord-planner solve`` promises on problems it has not seen; takes minutes, so no test collects it.

    OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_solve.py [COUNT [FIRST_SEED]]
    OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_solve.py --order

"Best known" is the cheapest of what the plan itself and an independent search (other seeds, more first guesses) lead
to: by shooting (core/theory) for up to three robots, and where shooting does not arrive or would take long by
extrapolation from 100 and 200 intervals, (4 J_200 - J_100)/3, which is good to about 1/M^4.
"""

from __future__ import annotations

import contextlib
import itertools
import sys
import time

import numpy as np
from posed import anywhere, classical, driven

from coord_planner.core.direct import planning
from coord_planner.core.theory import search, shooting
from coord_planner.core.theory.coarse import minimise
from coord_planner.errors import SolveError

COUPLINGS = (0.0, 0.1, 1.0, 10.0, 100.0, 1000.0)
KINDS = ("path", "cycle", "star", "complete")


def say(text):
    sys.stdout.write(f"{text}\n")
    sys.stdout.flush()


def best_known(problem, plan, searches=1):
    """The lowest cost that is known, and how it is known."""
    relaxed = classical(problem)
    starts = [plan.curvature * problem.duration]
    for seed in range(1, 1 + searches):
        with contextlib.suppress(SolveError):
            starts += [found.curvature for found in search.minima(relaxed, seed=seed, hops=30).minima[:2]]
    plans = [minimise(relaxed, search.resampled(start, 100)) for start in starts]
    best = min((found for found in plans if found.converged), key=lambda found: found.cost)
    if len(problem) <= 3:
        try:
            return shooting.shoot(relaxed, best).cost, "shooting"
        except SolveError:
            pass
    finer = minimise(relaxed, search.resampled(best.curvature, 200))
    return (4 * finer.cost - best.cost) / 3 / problem.duration, "extrapolation"


def measure(count, first):
    worst, slowest = [-np.inf, np.inf], {}
    misses = 0
    order = np.random.default_rng(0).permutation(6 * len(COUPLINGS) * len(KINDS))
    cases = [list(itertools.product(range(1, 7), COUPLINGS, KINDS))[i] for i in order]
    for i in range(count):
        robots, coupling, kind = cases[i % len(cases)]
        problem = (driven if i % 3 else anywhere)(first + i, robots, kind, coupling)
        began, wall = time.process_time(), time.perf_counter()
        plan = planning.plan(problem)
        took, wall = time.process_time() - began, time.perf_counter() - wall
        slowest[robots] = max(slowest.get(robots, 0.0), took)
        if plan.solved is None:
            misses += 1
            say(f"{first + i}: {robots} {kind} {coupling:g}: {plan.status} {plan.reason}")
            continue
        best, known_by = best_known(problem, plan)
        scaled = (plan.cost / best - 1) * problem.intervals**2
        good = plan.judgement.check.clean and -1e-8 * problem.intervals**2 <= scaled <= 30
        misses += not good
        worst = [max(worst[0], scaled), min(worst[1], scaled)]
        say(f"{first + i}: {robots} {kind} {coupling:g} cost {plan.cost:.6g} gap M^2 {scaled:.3g} ({known_by}) "
            f"sharpest {np.abs(plan.curvature).max() * problem.duration:.0f} tried {plan.tried} cpu {took:.1f} s "
            f"wall {wall:.1f} s {plan.judgement.check.words} H {plan.judgement.drifts.hamiltonian:.0e} "
            f"{'' if good else '<<<'}")
    say(f"{count} problems: {misses} misses; gap times M^2 from {worst[1]:.3g} to "
        f"{worst[0]:.3g}; largest CPU seconds by robots {({k: round(v, 1) for k, v in sorted(slowest.items())})}")
    return misses


def order(seeds=range(8)):
    counts = np.array([50, 100, 200, 400])
    for seed in seeds:
        robots = 1 + seed % 3
        errors, best = [], np.nan
        for intervals in counts[::-1]:
            problem = driven(1000 + seed, robots, KINDS[seed % 4], (0.0, 1.0, 30.0)[seed % 3], intervals=int(intervals))
            plan = planning.plan(problem, neighbours=False)
            best = best_known(problem, plan, 0)[0] if np.isnan(best) else best
            errors.append(plan.cost / best - 1)
        slope = -np.polyfit(np.log(counts[::-1]), np.log(errors), 1)[0]
        say(f"seed {seed}, {robots} robots: errors {np.array(errors[::-1])}, order {slope:.3f}")


if __name__ == "__main__":
    if sys.argv[1:] == ["--order"]:
        order()
    else:
        numbers = [int(word) for word in sys.argv[1:]]
        sys.exit(bool(measure(*(numbers + [48, 5000][len(numbers):]))))
