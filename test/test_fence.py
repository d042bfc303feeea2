# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Fences: lines that hold footprints off areas and behind strips, from exact geometry, kept by reference and ticks."""

import json

import attrs
import fleets
import numpy as np
import pytest
from fleets import abreast, carts, settings

from coord_planner.config import problem_file
from coord_planner.core import fence, manoeuvre, ocp, reference, tick
from coord_planner.core import graph as graphs
from coord_planner.core.area import Area, area_of
from coord_planner.core.case import PlannerCase
from coord_planner.core.manoeuvre import ToEnds
from coord_planner.errors import RefusedError

POND = area_of("pond", (5.0, 0.2, 7.0, 0.2, 7.0, 3.0, 5.0, 3.0))


def with_areas(*areas, **rules):
    return settings(site_rules={"keep_outs": areas, **rules}, clearance={"pose_uncertainty": 0.05})


def poses_along(*poses):
    return np.array(poses, dtype=float)[None]


@pytest.mark.parametrize("pose, spare", [
    ((0.0, 1.0, 0.0), 5.0 - 0.6), ((6.0, -1.0, 0.0), 1.2 - 0.4), ((4.0, -1.0, 0.0), np.hypot(0.4, 0.8)),
    ((4.6, 1.0, 0.0), -0.2), ((6.0, 3.1, np.pi / 2), -0.5),
])
def test_distances_are_exact_also_inside(pose, spare):
    """Worked out by hand: footprint 1.2 m by 0.8 m; where it overlaps, the way out of it."""
    fenced = fence.fencing(with_areas(POND))
    assert fenced.spare(carts(1), poses_along(pose))[0, 0, 0] == pytest.approx(spare)
    least, robot, name = fence.fencing(with_areas(POND, keep_out_clearance=0.3)).least(carts(1), poses_along(pose))
    assert (least, robot, name) == (pytest.approx(spare - 0.3), 0, "pond")


def test_a_line_kept_keeps_the_distance():
    """Rows of the program at many poses: whoever stays behind the line of his own pose is as far off as he shall be."""
    rng, fleet, chosen = np.random.default_rng(3), carts(1), with_areas(POND, keep_out_clearance=0.3)
    poses = np.concatenate([rng.uniform(0, 10, (200, 2)), rng.uniform(-3, 3, (200, 1))], axis=1)[None]
    fenced = fence.fencing(chosen).watching(fleet, chosen, poses)
    rows = fenced.rows(fleet, chosen, poses, 0.0)
    corners = fence._footprints(fleet, poses[:, 1:])[0][0]
    left = rows.reaches[0] - np.einsum("kij,kj->ki", corners, rows.normals[0]).max(axis=1)
    spare = fenced.spare(fleet, poses[:, 1:])[0, 0]
    kept = fence._between(fleet, np.array([0]), poses)[0] + 0.05
    assert left == pytest.approx(spare - kept, abs=1e-6)


def test_only_what_comes_near_is_watched():
    chosen, far = with_areas(POND, Area("far", ((90, 90), (91, 90), (91, 91)))), poses_along((0, 1, 0), (3, 1, 0))
    fenced = fence.fencing(chosen, [((0.0, 1.0), 4.0), ((0.0, -1.0), 50.0)]).watching(carts(1), chosen, far)
    assert fenced.bound.tolist() == [[0, 0], [0, 2]]
    again = attrs.evolve(fenced, bound=np.array([[0, 1]]))
    assert fenced.joined(again).bound.tolist() == [[0, 0], [0, 1], [0, 2]] and not fenced.covers(again)


def led(areas=(), strip=(), ends="cart_1 pose 12 1.2 0"):
    fleet, chosen = carts(1), with_areas(*areas)
    task = manoeuvre.work_out("pass", ToEnds(ends_deg=(ends,)), fleet, chosen, abreast(1), 0.0, np.zeros((1, 1)))
    return reference.make(attrs.evolve(task, strip=strip), fleet, graphs.path(fleet.names), chosen,
                          fleets.states(abreast(1)))


def test_a_reference_keeps_out_and_its_ticks_have_the_same_rows():
    made = led([area_of("bed", (5.0, 0.5, 7.0, 0.5, 7.0, 3.0, 5.0, 3.0))])
    assert made.fencing.bound.tolist() == [[0, 0]]
    spare = made.fencing.least(made.plan.fleet, made.plan.dense(5))[0]
    assert 0.0 < spare < 0.2
    problem, _, start = tick.pose_problem(
        made, made.plan.fleet, settings(), made.state(3.0), 3.0, 3.0, 1.0, None, np.zeros(1))
    assert problem.shape.fenced == (0,) and problem.fences.normals.shape == (1, 24, 2)
    assert start.vector.shape == (ocp.variable_blocks(problem.shape).size,)


def test_a_strip_given_with_a_task_holds_every_robot():
    free, held = led(ends="cart_1 pose 0 4 180"), led(ends="cart_1 pose 0 4 180", strip=(((1.0, 0.0), 2.35),))
    assert free.fencing.bound.size == 0 and len(held.plan.fenced) == 1
    reach = fence._footprints(held.plan.fleet, held.plan.dense(3))[0][..., 0].max()
    assert fence._footprints(free.plan.fleet, free.plan.dense(3))[0][..., 0].max() > 2.35 + 0.1
    assert 2.2 < reach <= 2.35


def test_what_cannot_be_kept_is_refused_with_the_missing_metres():
    with pytest.raises(RefusedError, match=r"too near to pond|too little room"):
        led([area_of("pond", (5.0, -90.0, 7.0, -90.0, 7.0, 90.0, 5.0, 90.0))])


def test_fences_survive_the_file(tmp_path):
    made = led([area_of("bed", (5.0, 0.5, 7.0, 0.5, 7.0, 3.0, 5.0, 3.0))])
    problem, _, _ = tick.pose_problem(
        made, made.plan.fleet, settings(), made.state(3.0), 3.0, 3.0, 1.0, None, np.zeros(1))
    open_ended = attrs.evolve(problem.fences, reaches=np.where(np.arange(24) % 2, np.inf, problem.fences.reaches))
    problem = attrs.evolve(problem, fences=open_ended)
    file = tmp_path / "case.json"
    file.write_text(json.dumps(problem_file.to_problem_file(PlannerCase(problem))))
    again = problem_file.load(file).problem.fences
    for name in ("robots", "normals", "reaches"):
        assert np.array_equal(getattr(again, name), getattr(problem.fences, name)), name
