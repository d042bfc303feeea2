# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The tick solver's steps as compiled kernels (numba): the same steps as the numpy modules beside this folder state.

What makes them quick besides being compiled: every row that depends on poses is a wrench at a node times the motion of
that node, and every interval's arc moves all later nodes as one rigid body. Sums over rows are then sums of wrenches
from the last node backward, and blocks of the matrix are products of 3 x 2 levers with running sums of 3 x 3 matrices
(a semiseparable matrix), instead of products of dense rows. Kernels take plain arrays; ``fields`` names their rows.
"""
