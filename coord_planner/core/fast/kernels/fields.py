# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Names for the rows of the arrays that kernels take. N robots, M intervals, P pairs and fences, E edges.

Indices ``i`` of arrays of shape (.., M): interval i, or the node at its end.
"""

# roll, shape (14, N, M + 1): what commands lead to; X, Y, THETA at nodes 0 .. M, the rest in intervals or at their ends
K, V, MEAN_K, MEAN_V, TURNING, COS, SIN, CHORD, STRETCH, NODE_COS, NODE_SIN, X, Y, THETA = range(14)
ROLL = 14

# field, shape (4, N, M): asked speed; speeds that turn rates are divided by; part of the first state in the means
ASKED, TURN_SPEED, FROM_K, FROM_V = range(4)

# span, shape (3, M): length of the intervals, as the cost counts it, price of a metre of missing clearance
H, COST_H, SHORT_PRICE = range(3)

# robot, shape (8, N): asked speed; part of the first state in what is reached last; the first state
FULL_SPEED, LAST_K, LAST_V, X0, Y0, THETA0, K0, V0 = range(8)

# foot, shape (9, P): footprints of the two robots of a pair, and 0 where there is no second (a fence)
LENGTH, WIDTH, OFFSET_X, OFFSET_Y, SECOND = 0, 2, 4, 6, 8

# prices, shape (3,): of curvature rate, acceleration, leaving the asked speed
STEER, SPEED_UP, LEAVE = range(3)
