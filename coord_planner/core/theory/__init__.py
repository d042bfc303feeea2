# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The classical form of the coupled problem, which published results know: what the checks stand on.

Every robot drives at unit speed for the same time from one pose to another (to a heading, or it only copies);
the curvatures u, one a robot, minimise 1/2 integral u'(I + chi L)u; there are no limits. By the maximum principle
and Lie-Poisson reduction on SE(2) (Jurdjevic, *Geometric Control Theory*, 1997; Sachkov & Sachkova,
arXiv:1303.1746) every solution has u = (I + chi L)^-1 mu_1 with

    mu_1' = -mu_3,  mu_2' = u mu_3,  mu_3' = -u mu_2        for each robot,

where mu_2 and mu_3 are the components, along and across the robot, of a vector p that is constant in the map.

    classical.py         the problem as data
    elastica.py          one robot: closed forms
    reduced.py           the reduced equations, integrated; what they conserve
    shooting.py          the boundary-value problem, by shooting
    coarse.py, search.py minima on few intervals from many first guesses: where shooting starts
    common_curvature.py  one curvature for the whole fleet: the strong-coupling limit, a first guess, a last resort
    copying.py           one led robot, the others copy
    lie_poisson.py       the same flow on any Lie algebra given by structure constants
    heisenberg.py        the driftless problem on the Heisenberg group: closed forms
"""
