# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One plan from one problem: the curvature itself (and the speed, where it is free) is the control, constant in
each interval.

This is the classical form of the coupled problem, and the same with limits and clearance: what published results know,
and what a person poses by hand. A tick's and a reference's problem, with lags and commands, is in core/ocp.py; the
terms of the cost and the rows of the clearance are the same functions.

    problem.py     the problem as data, and its units
    program.py     problem -> nonlinear program
    solution.py    program -> plan, or what stands in the way
    impossible.py  what can be seen to be impossible before anything is solved
    heisenberg.py  the driftless problem on the Heisenberg group
"""
