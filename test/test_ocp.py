# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The optimisation problem, term by term: against hand-computed numbers, numpy, fine integration and exact polygons."""

import math

import casadi as ca
import numpy as np
import pytest
from fleets import abreast, carts, corner, settings, states
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy.integrate import solve_ivp

from coord_planner.core import ocp, outline, se2
from coord_planner.core.blocks import Blocks
from coord_planner.core.fleet import Fleet, Response, Robot
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.problem import STATES, Problem, Shape, bounds_in_force
from coord_planner.core.rectangles import separating_normals
from coord_planner.core.watch import watch

SHAPE = Shape(robots=3, intervals=4, edges=((0, 1), (1, 2)), pairs=((0, 1), (0, 2)))


def problem(lags=(0.0, 0.3)):
    """Three robots, four intervals, one of the machines late: everything that can stand in a problem is in it."""
    fleet = Fleet(tuple(
        Robot(robot.name, robot.limits, robot.footprint, Response(speed_lag=lag, curvature_lag=lag))
        for robot, lag in zip(carts(3).robots, (*lags, 0.1))
    ))
    times = np.array([0.0, 0.1, 0.35, 0.6, 0.85])
    start = states(abreast(3), 1.0)
    target = np.full((3, len(STATES)), np.nan)
    target[0, :3] = [0.8, 5.1, 0.3]
    pairs = np.array(SHAPE.pairs)
    poses = np.repeat(start[:, None, :3], 5, axis=1)
    return Problem(
        fleet=fleet, edges=np.array(SHAPE.edges), weights=np.array([1.0, 0.5]), coupling=2.0, alignment=3.0,
        prices=settings().prices, times=times, pace=0.5, initial=start, asked_speed=np.full((3, 4), 0.9),
        turn_speed=np.full((3, 4), 0.8), full_speed=np.array([1.0, 0.9, 0.8]), target=target,
        bounds=bounds_in_force(fleet, start, times, 99.0, 0.0, 9.0, 9.0),
        watch=watch(fleet, settings(), pairs, poses, 1.0),
    )


def random_vector(seed=0):
    """Variables that are anything but special, save that robot 0 drives straight on: there quotients are 0/0."""
    rng = np.random.default_rng(seed)
    layout = ocp.variable_blocks(SHAPE)
    blocks = layout.unpack(rng.uniform(0.1, 1.0, layout.size))
    for name in ("curvature", "curvature_command", "curvature_rate"):
        blocks[name][0] = 0.0
    return layout.pack(blocks)


# Derivatives


def test_first_and_second_derivatives_agree_with_finite_differences():
    program, given_numbers = ocp.build(SHAPE), ocp.numbers(problem())
    weights = np.random.default_rng(1).normal(size=program.rows.size)
    lagrangian = program.f + ca.dot(ca.DM(weights), program.g)
    gradient = ca.gradient(lagrangian, program.x)
    value = ca.Function("value", [program.x, program.p], [lagrangian])
    slope = ca.Function("slope", [program.x, program.p], [gradient])
    curving = ca.Function("curving", [program.x, program.p], [ca.hessian(lagrangian, program.x)[0]])
    x, step = random_vector(), 1e-6
    first = np.array(slope(x, given_numbers)).ravel()
    second = np.array(curving(x, given_numbers))
    assert np.isfinite(first).all() and np.isfinite(second).all()
    for direction in np.random.default_rng(2).normal(size=(5, len(x))):
        ends = [np.array(value(x + side * step * direction, given_numbers)).item() for side in (1, -1)]
        assert (ends[0] - ends[1]) / (2 * step) == pytest.approx(first @ direction, rel=1e-6, abs=1e-4)
        slopes = [np.array(slope(x + side * step * direction, given_numbers)).ravel() for side in (1, -1)]
        assert (slopes[0] - slopes[1]) / (2 * step) == pytest.approx(second @ direction, rel=1e-6, abs=1e-4)


# Motion


def respond(lag, start, command, rate, h):
    """A first-order machine whose command runs straight: reached at the end, and its mean, by fine integration."""
    def change(t, state):
        reached = state[0]
        return [(command + rate * t - reached) / lag, reached]

    end = solve_ivp(change, (0.0, h), [start, 0.0], method="DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
    return end[0], end[1] / h


@pytest.mark.parametrize("lag", [0.05, 0.3, 2.0])
def test_lag_step_and_mean_over_an_interval_are_exact(lag):
    h, start, command, rate = 0.25, 0.2, 0.9, -1.3
    after, mean = respond(lag, start, command, rate, h)
    commands, reached = ca.DM([[command, command + rate * h]]), ca.DM([[start, after]])
    row, lag_column = ca.DM([[h]]), ca.DM([[lag]])
    assert float(ocp.lag_residual(commands, reached, ca.DM([[rate]]), lag_column, row)) == pytest.approx(0.0, abs=1e-11)
    assert float(ocp.mean_over_interval(commands, reached, lag_column, row)) == pytest.approx(mean, abs=1e-11)


def test_a_machine_without_lag_reaches_its_command_at_once():
    commands, h, none = ca.DM([[0.9, 0.5]]), ca.DM([[0.2]]), ca.DM([[0.0]])
    assert float(ocp.lag_residual(commands, commands, ca.DM([[-2.0]]), none, h)) == 0.0
    assert float(ocp.mean_over_interval(commands, commands, none, h)) == pytest.approx(0.7)


def steps_of_the_program(speed, curvature, steps, duration):
    """The pose that the program's motion leads to when speed and curvature run as functions of time."""
    t = np.linspace(0.0, duration, steps + 1)
    nodes = [ca.DM(values[None, :]) for values in (speed(t), curvature(t))]
    h, none = ca.DM(np.diff(t)[None, :]), ca.DM([[0.0]])
    mean_speed, mean_curvature = (np.array(ocp.mean_over_interval(row, row, none, h)) for row in nodes)
    distance = mean_speed * np.diff(t)
    return se2.rollout(np.zeros((1, 3)), distance, distance * mean_curvature)[0, -1]


def test_the_arc_step_converges_with_second_order_and_is_exact_at_constant_curvature():
    def speed(t):
        return 1.0 + 0.4 * np.sin(t)

    def curvature(t):
        return 0.5 * np.cos(0.7 * t)

    def change(t, pose):
        return [speed(t) * math.cos(pose[2]), speed(t) * math.sin(pose[2]), speed(t) * curvature(t)]

    want = solve_ivp(change, (0.0, 4.0), np.zeros(3), method="DOP853", rtol=1e-12, atol=1e-13).y[:, -1]
    counts = np.array([8, 16, 32, 64])
    errors = [np.abs(steps_of_the_program(speed, curvature, count, 4.0) - want).max() for count in counts]
    order = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    assert 1.9 < order < 2.2
    # Constant speed and curvature: a quarter of a circle of 2 m in a single step.
    pose = steps_of_the_program(lambda t: 0.0 * t + 1.0, lambda t: 0.0 * t + 0.5, 1, math.pi)
    assert pose == pytest.approx([2.0, 2.0, math.pi / 2], abs=1e-14)


def test_clothoid_steps_approach_the_fresnel_integrals():
    # kappa = pi s at unit speed, at s = 1: DLMF 7.2, from shared/checks.md section 6
    pose = steps_of_the_program(lambda t: 0.0 * t + 1.0, lambda t: math.pi * t, 4000, 1.0)
    assert pose == pytest.approx([0.779893400377, 0.438259147390, math.pi / 2], abs=2e-7)


# Cost


@given(
    turning=hnp.arrays(float, (4, 3), elements=st.floats(-3, 3)),
    weights=hnp.arrays(float, 3, elements=st.floats(0.01, 5)),
    coupling=st.floats(0, 20),
    edges=st.lists(st.sampled_from([(0, 1), (0, 2), (0, 3), (1, 2), (1, 3), (2, 3)]), unique=True, max_size=3),
)
def test_coupled_cost_is_the_quadratic_form_of_the_laplacian(turning, weights, coupling, edges):
    names, h = ("a", "b", "c", "d"), np.array([0.2, 0.3, 0.1])
    weights = weights[: len(edges)]
    graph = NeighbourGraph(names, tuple((names[k], names[j], w) for (k, j), w in zip(edges, weights)))
    form = np.eye(4) + coupling * graph.laplacian()
    want = 0.5 * sum(step * u @ form @ u for step, u in zip(h, turning.T))
    got = ocp.turning_cost(ca.DM(turning), ca.DM(coupling * weights), tuple(edges), ca.DM(h[None, :]))
    assert float(got) == pytest.approx(want, rel=1e-12, abs=1e-12)


def test_cost_terms_against_numbers_worked_out_by_hand():
    h = ca.DM([[0.5, 0.25]])
    # turning 1, 2 and 3, 1 of two robots, edge priced 2: half of (1 + 9 + 2*4)*0.5 + (4 + 1 + 2*1)*0.25
    turning = ca.DM([[1.0, 2.0], [3.0, 1.0]])
    assert float(ocp.turning_cost(turning, ca.DM([2.0]), ((0, 1),), h)) == pytest.approx(5.375)
    # headings at nodes 1 and 2 differ by 0 and by 60 degrees: 2 sin^2(30 degrees) = 0.5, priced 3, for 0.25 s
    theta = ca.DM([[9.0, 0.4, math.pi / 3], [0.0, 0.4, 0.0]])
    assert float(ocp.alignment_cost(theta, ca.DM([3.0]), ((0, 1),), h)) == pytest.approx(3 * 0.5 * 0.25)
    # One robot: sigma 2, 0; a 1, -1; 10 % and 0 % off its full speed of 2, asked 1 and 0.5.
    v = {"curvature_rate": ca.DM([[2.0, 0.0]]), "acceleration": ca.DM([[1.0, -1.0]])}
    p = {
        "asked_speed": ca.DM([[1.0, 0.5]]), "full_speed": ca.DM([[2.0]]), "price_curvature_rate": 0.1,
        "price_acceleration": 0.2, "price_speed": 4.0, "cost_h": h,
    }
    want = 0.5 * ((0.1 * 4 + 0.2 * 1 + 4 * 0.01) * 0.5 + 0.2 * 1 * 0.25)
    assert float(ocp.small_prices(v, p, ca.DM([[1.2, 0.5]]))) == pytest.approx(want)
    # 2 cm short and 3 cm behind a fence for 0.5 s at 100; an end missed by 3 cm one way, by 1 the other way, at 50
    v = {"short": ca.DM([[0.02, 0.0]]), "outside": ca.DM([[0.03, 0.0]])}
    v |= {"over": ca.DM([[0.03, 0.0]]), "under": ca.DM([[0.0, 0.01]])}
    p = {"price_clearance": 100.0, "price_end": ca.DM([[50.0, 50.0]]), "h": h}
    assert float(ocp.steep_prices(v, p)) == pytest.approx(100 * 0.05 * 0.5 + 50 * 0.04)


# Clearance

ANGLES = st.floats(-7.0, 7.0)
PLACES = st.floats(-6.0, 6.0)
SIZES = st.floats(0.2, 3.0)
OFFSETS = st.floats(-1.0, 1.0)


@st.composite
def two_robots(draw):
    """Footprints (length, width, offset x, offset y) and poses of two robots."""
    prints = np.array([[draw(SIZES), draw(SIZES), draw(OFFSETS), draw(OFFSETS)] for _ in range(2)])
    poses = np.array([[draw(PLACES), draw(PLACES), draw(ANGLES)] for _ in range(2)])
    return prints, poses


def exact(prints, poses):
    """Line from the exact geometry of two robots, and their distance."""
    signs = np.array([[1, 1], [-1, 1], [-1, -1], [1, -1]]) / 2
    corners = np.stack([offset + signs * size for size, offset in zip(prints[:, :2], prints[:, 2:])])
    pair, polygons = np.array([[0, 1]]), outline.outlines(corners, poses[:, None])
    normal = separating_normals(corners, poses[:, None], pair)[0, 0]
    return normal, float(outline.clearances(polygons, pair).item())


def row_of_the_program(prints, poses, normal):
    """What the optimisation takes for the clearance of two robots, along a line."""
    theta = ca.DM(np.repeat(poses[:, 2:], 2, axis=1))
    v = {"x": ca.DM(np.repeat(poses[:, :1], 2, axis=1)), "y": ca.DM(np.repeat(poses[:, 1:2], 2, axis=1)),
         "theta": theta, "short": ca.DM(1, 1)}
    p = {
        "offset_x": ca.DM(prints[:, 2]), "offset_y": ca.DM(prints[:, 3]), "half_length": ca.DM(prints[:, 0] / 2),
        "half_width": ca.DM(prints[:, 1] / 2), "normal_x": ca.DM([[normal[0]]]), "normal_y": ca.DM([[normal[1]]]),
        "gap": ca.DM(1, 1),
    }
    v["centre_x"], v["centre_y"] = ocp.footprint_centres(v, p)
    return float(ocp.clearance_rows(v, p, ((0, 1),)))


@given(two_robots(), ANGLES)
def test_the_clearance_row_never_claims_more_than_the_exact_distance(robots, bearing):
    claimed = row_of_the_program(*robots, (math.cos(bearing), math.sin(bearing)))
    assert claimed <= exact(*robots)[1] + 1e-9


@given(two_robots())
def test_the_clearance_row_is_tight_on_the_line_from_the_exact_geometry(robots):
    normal, distance = exact(*robots)
    if distance < 1e-3:
        return  # overlapping: there is no separating line
    lost = distance - row_of_the_program(*robots, normal)
    rounded = 0.02 * robots[0][:, :2].sum() / 2  # the shadows are rounded off by at most a fiftieth of each half size
    assert -1e-9 <= lost <= rounded + 1e-6


# Layouts


def test_layouts_pack_and_unpack_each_other():
    layout = ocp.variable_blocks(SHAPE)
    vector = np.arange(layout.size, dtype=float)
    assert np.array_equal(layout.pack(layout.unpack(vector)), vector)
    symbol, parts = layout.symbols()
    number = ca.Function("number", [symbol], [parts["y"]])(vector)
    assert np.array_equal(np.array(number), layout.unpack(vector)["y"])  # the same order as CasADi's
    blocks = Blocks({"a": (2, 3), "b": (0, 3), "c": (1, 1)})
    packed = blocks.unpack(blocks.pack({"a": [[1.0], [2.0]], "b": 0.0, "c": 5.0}))
    assert packed["a"].tolist() == [[1.0] * 3, [2.0] * 3] and packed["b"].shape == (0, 3)
    with pytest.raises(ValueError, match="block a"):
        blocks.stack({"a": ca.SX(3, 2), "b": ca.SX(0, 3), "c": ca.SX(1, 1)})


# A plan's own residual


def test_a_broken_limit_is_seen_with_its_size():
    given_problem = problem()
    layout = ocp.variable_blocks(SHAPE)
    vector = np.zeros(layout.size)
    blocks = layout.unpack(vector)
    blocks["speed_command"][:] = 1.0
    blocks["speed_command"][1, 2] = 1.4 + 7.0
    assert ocp.violation(given_problem, layout.pack(blocks)) > 6.9
    blocks["curvature_rate"][0, 0] = 0.6 + 30.0
    assert ocp.violation(given_problem, layout.pack(blocks)) == pytest.approx(30.0, rel=1e-9)


def test_a_solved_plan_keeps_its_own_equations():
    made = corner()
    names = {name: made.plan.states[:, :, i] for i, name in enumerate(STATES)}
    h = np.diff(made.plan.times)
    assert np.diff(names["curvature_command"], axis=1) == pytest.approx(made.plan.rates[:, :, 0] * h, abs=1e-7)
    distance = (names["speed"][:, 1:] + names["speed"][:, :-1]) / 2 * h
    turn = distance * (names["curvature"][:, 1:] + names["curvature"][:, :-1]) / 2
    assert se2.rollout(made.plan.poses[:, 0], distance, turn) == pytest.approx(made.plan.poses, abs=1e-6)
