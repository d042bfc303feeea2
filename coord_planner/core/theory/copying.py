# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One led robot, the others only copy: their turning is a fixed fraction of its turning, at every instant.

With no end of its own a robot has mu_1 = 0, so u = Psi mu_1 is the column of Psi = (I + chi L)^-1 that belongs to the
led robot. In the limit of strong coupling Psi is 1/n within each group of n joined robots: all turn as the led one
does, at n times its cost.
"""

from __future__ import annotations

import attrs
import numpy as np

from .classical import ClassicalProblem


def ratios(problem: ClassicalProblem, led: int) -> np.ndarray:
    """u_k / u_led = Psi_k,led / Psi_led,led for every robot k, shape (N,)."""
    column = np.linalg.solve(problem.weight, np.eye(len(problem))[led])
    return column / column[led]


def cost(problem: ClassicalProblem, led: int, alone: float) -> float:
    """Cost of the fleet: ``alone``, the cost of the led robot without neighbours, over Psi_led,led."""
    return float(alone / np.linalg.solve(problem.weight, np.eye(len(problem))[led])[led])


def led_alone(problem: ClassicalProblem) -> tuple[int, ClassicalProblem]:
    """The led robot, and its problem without neighbours.

    Raises:
        ValueError: not exactly one robot has an end.
    """
    led = np.flatnonzero(problem.headed)
    if len(led) != 1:
        raise ValueError(f"{len(led)} robots have an end; the copying law is for exactly one")
    single = attrs.evolve(problem, starts=problem.starts[led], ends=problem.ends[led], laplacian=np.zeros((1, 1)))
    return int(led[0]), single
