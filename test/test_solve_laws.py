# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Laws of the coupled problem, on invented problems: what may change a plan's cost, and what must not.

Sources: shared check values, section 1; they follow from the problem's symmetries and from the cost being linear in
the coupling (envelope theorem).
"""

import itertools

import attrs
import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from posed import driven, edges, posed

from coord_planner.core.direct import planning
from coord_planner.core.graph import NeighbourGraph

SEEDS = st.integers(0, 10**6)
FEW = settings(max_examples=3, deadline=None)
INTERVALS = 40


def solved(problem):
    plan = planning.plan(problem, neighbours=False)
    assert plan.status == "solved" and plan.judgement.check.clean, plan.reason
    return plan


def moved(poses, motion):
    """Poses (K, 3) after a motion of the plane."""
    x, y, turn = motion
    c, s = np.cos(turn), np.sin(turn)
    return np.column_stack([c * poses[:, 0] - s * poses[:, 1] + x, s * poses[:, 0] + c * poses[:, 1] + y,
                            poses[:, 2] + turn])


@FEW
@given(SEEDS, st.integers(0, 2), st.tuples(*[st.floats(-9, 9)] * 3))
def test_moving_one_robot_with_its_end_changes_nothing(seed, robot, motion):
    """Any element of SE(2)."""
    problem = driven(seed, 3, "path", 4.0, 30)
    starts, ends = problem.starts.copy(), problem.ends.copy()
    starts[[robot]], ends[[robot]] = moved(starts[[robot]], motion), moved(ends[[robot]], motion)
    other = solved(attrs.evolve(problem, starts=starts, ends=ends))
    np.testing.assert_allclose(other.cost, solved(problem).cost, rtol=1e-6)


@FEW
@given(SEEDS, st.floats(0.02, 50))
def test_scaling(seed, scale):
    """cost(s * poses, s * T) = cost / s."""
    problem = driven(seed, 2, "path", 2.0, INTERVALS)
    factors = np.array([scale, scale, 1.0])
    larger = attrs.evolve(problem, starts=problem.starts * factors, ends=problem.ends * factors,
                          duration=problem.duration * scale)
    np.testing.assert_allclose(solved(larger).cost * scale, solved(problem).cost, rtol=1e-6)


@FEW
@given(SEEDS)
def test_the_cost_never_falls_with_the_coupling_and_is_concave_in_it(seed):
    """V(chi_i) <= effort_j + chi_i * disagreement_j for the global minimum."""
    couplings = (0.0, 0.3, 3.0, 100.0)
    plans = [solved(driven(seed, 2, "path", chi, INTERVALS)) for chi in couplings]
    for i, j in itertools.product(range(len(plans)), repeat=2):
        assert plans[i].cost <= (plans[j].effort + couplings[i] * plans[j].disagreement) * (1 + 1e-6)
    assert all(after.cost >= before.cost * (1 - 1e-6) for before, after in itertools.pairwise(plans))


@FEW
@given(SEEDS, st.permutations(range(3)))
def test_names_do_not_matter(seed, order):
    problem = driven(seed, 3, "star", 3.0, INTERVALS)
    place = np.argsort(order)
    other = attrs.evolve(problem, starts=problem.starts[order], ends=problem.ends[order], edges=place[problem.edges])
    np.testing.assert_allclose(solved(other).cost, solved(problem).cost, rtol=1e-6)


@FEW
@given(SEEDS, SEEDS)
def test_a_disconnected_graph_splits_into_independent_problems(seed, other):
    first, second = driven(seed, 2, "path", 2.0, INTERVALS), driven(other, 2, "path", 2.0, INTERVALS)
    second = attrs.evolve(second, duration=first.duration, starts=second.starts * 0 + [5, 5, 0],
                          ends=second.ends - second.starts + [5, 5, 0])
    shorter = second.ends[:, :2] - 5
    far = np.maximum(np.hypot(*shorter.T) / (0.8 * first.duration), 1.0)
    second = attrs.evolve(second, ends=np.column_stack([5 + shorter / far[:, None], second.ends[:, 2]]))
    both = posed(np.concatenate([first.starts, second.starts]), np.concatenate([first.ends, second.ends]),
                 [[0, 1], [2, 3]], 2.0, first.duration, INTERVALS)
    np.testing.assert_allclose(solved(both).cost, solved(first).cost + solved(second).cost, rtol=1e-6)


@given(st.integers(1, 8), st.sampled_from(["path", "cycle", "star", "complete"]), st.floats(0, 1e4),
       st.floats(0.01, 100))
def test_what_a_robot_copies_adds_up_to_one(count, kind, coupling, weight):
    """Rows of Psi = (I + chi L)^-1 sum to 1, its entries are positive (shared check values, section 2)."""
    names = tuple("abcdefgh"[:count])
    joined = tuple((names[k], names[j], weight) for k, j in edges(kind, count))
    psi = NeighbourGraph(names, joined).copying(coupling)
    np.testing.assert_allclose(psi.sum(axis=1), 1.0, rtol=1e-9)
    assert (psi >= -1e-12).all()
