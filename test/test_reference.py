# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Plans of whole manoeuvres: what they promise, what the coupling does to them, and what cannot be kept."""

import math

import attrs
import fleets
import numpy as np
import pytest
from fleets import HARDLY_ANY, LIMITS, abreast, carts, settings

from coord_planner.core import dubins, outline, reference, se2, solver
from coord_planner.core import graph as graphs
from coord_planner.core.graph import NeighbourGraph
from coord_planner.core.manoeuvre import EqualRadius, ToEnds
from coord_planner.core.problem import CURVATURE, CURVATURE_COMMAND, SPEED, SPEED_COMMAND
from coord_planner.errors import RefusedError

BETWEEN_NODES = 1e-3  # where two commands run straight from node to node, their product does not


def tight():
    """A turn in which lateral acceleration binds most of the way."""
    limits = attrs.evolve(LIMITS, max_turn_rate=0.35, max_lateral_acceleration=0.3)
    ends = ("cart_1 pose 6 6.5 90", "cart_2 pose 9 6.5 90")
    return fleets.solve(ToEnds(ends_deg=ends, speed=1.2), carts(2, limits), abreast(2), settings())


MADE = {"corner": fleets.corner, "late": lambda: fleets.corner(late=True), "wheel": fleets.wheel, "tight": tight}


@pytest.fixture(scope="module", params=MADE)
def made(request):
    return MADE[request.param]()


# What every reference promises


def test_ends_are_met_standing(made):
    last = made.plan.states[:, -1]
    assert last[:, :3] == pytest.approx(made.task.ends, abs=1e-6)
    assert np.abs(last[:, [SPEED_COMMAND, CURVATURE_COMMAND]]).max() < 1e-6
    assert np.abs(last[:, [SPEED, CURVATURE]]).max() < 1e-3  # late machines have settled


def test_every_limit_is_kept_at_the_nodes_and_between(made):
    states = fleets.dense(made)
    times = np.linspace(0.0, 1.0, states.shape[1])  # only the levels are judged here
    levels = fleets.excess(made.plan.fleet, times, states[:, :, [SPEED_COMMAND, CURVATURE_COMMAND]])
    for name in ("max_speed", "max_curvature", "max_turn_rate", "max_lateral_acceleration"):
        assert levels[name] <= BETWEEN_NODES, name
    at_nodes = made.plan.states[:, :, [SPEED_COMMAND, CURVATURE_COMMAND]]
    for name, value in fleets.excess(made.plan.fleet, made.plan.times, at_nodes).items():
        assert value <= 1e-6, name
    assert states[:, :, SPEED_COMMAND].min() >= -1e-6


def test_clearance_is_the_exact_one_and_the_sites_is_kept(made):
    fleet, poses = made.plan.fleet, fleets.dense(made)[:, :, :3]
    polygons = outline.outlines(fleet.corners(), poses)
    smallest = min(
        first.distance(second) for k in range(len(fleet)) for j in range(k) for first, second in zip(*polygons[[k, j]])
    )
    assert smallest >= 0.85 - 2e-3
    assert made.clearance == pytest.approx(smallest, abs=2e-3)


def test_the_limit_that_was_to_bind_does():
    made = tight()
    levels = fleets.excess(made.plan.fleet, made.plan.times, made.plan.states[:, :, [SPEED_COMMAND, CURVATURE_COMMAND]])
    assert levels["max_lateral_acceleration"] == pytest.approx(0.0, abs=1e-6)
    assert fleets.wheel().plan.closest()[0] < 1.05  # the smallest clearance and its margin are 0.99 m


def test_after_its_end_a_reference_goes_straight_on():
    made = attrs.evolve(fleets.corner(), task=attrs.evolve(fleets.corner().task, end_speed=0.5))
    before, after = made.state(made.end), made.state(made.end + 2.0)
    heading = before[:, 2]
    assert after[:, :2] == pytest.approx(before[:, :2] + np.stack([np.cos(heading), np.sin(heading)], axis=1))
    assert (after[:, SPEED] == 0.5).all() and (after[:, CURVATURE] == 0.0).all()


def test_before_its_first_node_everyone_came_along_as_it_drives_there():
    fleet = carts(1)
    start = np.array([[0.0, 0.0, 0.0, 0.2, 0.8, 0.2, 0.8]])  # a bend of 5 m radius at 0.8 m/s
    made = fleets.solve(ToEnds(ends_deg=("cart_1 pose 6 3 60",)), fleet, abreast(1), settings())
    made = attrs.evolve(made, plan=attrs.evolve(made.plan, states=made.plan.states - made.plan.states[:, :1]
                                                + start[:, None]))
    x, y, heading = made.state(-0.5)[0, :3]
    assert (x, y, heading) == pytest.approx((-5.0 * math.sin(0.08), 5.0 * (1.0 - math.cos(0.08)), -0.08))
    assert made.state(-0.5)[0, 3:] == pytest.approx(start[0, 3:])


def test_what_is_left_of_the_ways_is_measured_from_where_each_robot_stands():
    made = fleets.corner()
    poses = np.stack([made.state(s)[k, :3] for k, s in enumerate((5.0, 6.0, 7.5))])
    poses[2, :2] += [1.0, -1.0]  # not on its way any more
    left = reference.ways_left(made, poses, 4.5)
    assert left[2] is None
    for k, s in ((0, 5.0), (1, 6.0)):
        curve = made.states(np.linspace(s, made.end, 2001))[k, :, :2]
        assert left[k].length == pytest.approx(np.linalg.norm(np.diff(curve, axis=0), axis=1).sum(), abs=0.03)
        assert left[k].start == tuple(poses[k]) and left[k].end == pytest.approx(made.task.ends[k], abs=0.03)


# Bounds and symmetries


@pytest.mark.parametrize("end, radius, shortest", [
    # Dubins 1957; Shkel & Lumelsky 2001; values of shared/checks.md section 4
    ((4.0, 3.0, 1.0), 1.0, 5.053324727308),
    ((0.5, 0.5, math.pi), 1.0, 6.660418079530),
    ((1.0, 0.0, 0.5), 1.0, 7.267872154984),
    ((10.0, -2.0, -0.7), 2.5, 10.257467905899),
])
def test_no_plan_is_shorter_than_the_dubins_path(end, radius, shortest):
    limits = attrs.evolve(LIMITS, max_curvature=1.0 / radius, max_curvature_rate=5.0)
    wanted = ToEnds(ends_deg=(f"cart_1 pose {end[0]} {end[1]} {math.degrees(end[2])}",), speed=1.0)
    made = fleets.solve(wanted, carts(1, limits), np.zeros((1, 3)), settings())
    assert dubins.shortest((0.0, 0.0, 0.0), end, radius).length == pytest.approx(shortest, abs=1e-9)
    assert shortest - 1e-3 <= fleets.length(made, 0) <= 1.3 * shortest


def mirrored(states):
    """States of the same drive seen in a mirror along the x axis."""
    return states * np.array([1.0, -1.0, -1.0, -1.0, 1.0, -1.0, 1.0])


def test_a_mirrored_task_has_the_mirrored_plan():
    left, right = fleets.wheel(), fleets.wheel(mirrored=True)
    assert right.plan.states == pytest.approx(mirrored(left.plan.states), abs=1e-4)
    assert right.clearance == pytest.approx(left.clearance, abs=1e-4)


@pytest.mark.parametrize("coupling, edges", [(0.0, ()), (5.0, (("cart_1", "cart_3", 2.0), ("cart_2", "cart_3", 1.0)))])
def test_equal_displacements_are_driven_alike_whatever_the_graph_and_coupling(coupling, edges):
    """Each robot moved by an element of SE(2) of its own: shared/checks.md section 1, exact family 2."""
    poses = np.array([[0.0, 0.0, 0.0], [50.0, 10.0, 2.0], [-30.0, 40.0, -1.0]])
    fleet = carts(3)
    graph = NeighbourGraph(fleet.names, edges)
    wanted = EqualRadius(angle_deg=90.0, radius=4.0)
    made = fleets.solve(wanted, fleet, poses, settings(coupling={"strength": coupling}), graph)
    alone = fleets.solve(wanted, carts(1), poses[:1], settings())
    for k in range(3):
        assert made.plan.states[k, :, 3:] == pytest.approx(alone.plan.states[0, :, 3:], abs=1e-4)
        moved = np.stack(se2.compose(tuple(poses[k]), tuple(alone.plan.poses[0].T)), axis=1)
        assert made.plan.poses[k] == pytest.approx(moved, abs=1e-3)


# Copying: one robot is led, the others have no end (classical form: shared/design.md, shared/checks.md sections 1, 2)


def led(count, coupling, alignment=0.0):
    """Far apart, fast enough from the start, with limits and prices that hardly count beside the turning."""
    poses = abreast(count, 40.0)
    chosen = settings(
        coupling={"strength": coupling, "alignment": alignment}, site_rules={"min_clearance": 0.0},
        prices={"curvature_rate": 1e-6, "acceleration": 1.0, "speed": 1e3},
    )
    wanted = ToEnds(ends_deg=(f"cart_1 pose 8 {poses[0, 1] + 3.0} 60",), speed=1.0, end_speed=1.0)
    return fleets.solve(wanted, carts(count, HARDLY_ANY), poses, chosen, speed=1.0)


def turning(made):
    """Turn rates in the intervals, shape (N, M)."""
    speed, curvature = made.plan.states[:, :, SPEED], made.plan.states[:, :, CURVATURE]
    return (speed[:, 1:] + speed[:, :-1]) * (curvature[:, 1:] + curvature[:, :-1]) / 4


def test_amplitudes_fall_from_hop_to_hop_as_the_copying_law_says():
    u = turning(led(6, 1.0))
    # a path of six, chi = 1, led from one end
    law = np.array([1.0, 34 / 89, 13 / 89, 5 / 89, 2 / 89, 1 / 89])
    assert graphs.path(carts(6).names).copying(1.0)[:, 0] == pytest.approx(law * 89 / 144)
    # at every instant, to a thousandth of the led robot's largest (the rest is the price on sigma, 1e-6)
    assert np.abs(u - law[:, None] * u[0]).max() < 1e-3 * np.abs(u[0]).max()
    assert np.abs(u[0]).max() > 0.3


def test_without_coupling_nobody_copies():
    u = turning(led(3, 0.0, alignment=10.0))
    assert np.abs(u[0]).max() > 0.3 and np.abs(u[1:]).max() < 1e-6


def test_alignment_brings_those_who_copy_nearer_to_the_led_robots_heading():
    without, with_it = (
        np.abs(np.diff(led(3, 2.0, alignment).plan.poses[:, -1, 2])).sum() for alignment in (0.0, 10.0)
    )
    assert with_it < 0.3 * without


# Requests that cannot be kept


REFUSED = {
    "tighter than the machine turns": (EqualRadius(radius=1.0), {}, ("radius of 1 m", "0.25 m tighter", "1.25 m")),
    "too fast for the machine": (EqualRadius(speed=1.5), {}, ("1.5 m/s", "cart_1", "1.4 m/s")),
    "too fast for the site": (EqualRadius(speed=1.2), {"site_rules": {"max_speed": 1.1}}, ("1.2 m/s", "1.1 m/s")),
    "too fast round the bend": (EqualRadius(radius=1.3, speed=1.3), {}, ("1.30 m/s^2", "1 m/s^2", "1.14 m/s")),
    "lateral rule of the site": (
        EqualRadius(radius=3.0), {"site_rules": {"max_lateral_acceleration": 0.2}}, ("0.33 m/s^2", "0.2 m/s^2", "0.77"),
    ),
    "faster at the end": (EqualRadius(speed=0.5, end_speed=0.8), {}, ("0.8 m/s", "0.5 m/s")),
    "ends on each other": (
        ToEnds(ends_deg=("cart_1 pose 6 6 90", "cart_2 pose 6.5 6 90")), {}, ("cart_1 and cart_2", "0.00 m", "0.85 m"),
    ),
    # 1.75 m between centres, 0.8 m wide; a margin of 2 (0.05 + 0.02 * 1) m
    "ends within the margin": (
        ToEnds(ends_deg=("cart_1 pose 6 6.5 90", "cart_2 pose 7.75 6.5 90")), {}, ("0.95 m", "0.85 m", "0.14 m"),
    ),
    "turned onto each other": (EqualRadius(radius=4.0), {"poses": 1.7}, ("would end 0.50 m apart", "0.85 m")),
    "standing too close": (EqualRadius(radius=4.0), {"poses": 1.6}, ("stand 0.80 m apart", "0.05 m short", "0.85 m")),
    "too little time": (
        ToEnds(ends_deg=("cart_1 pose 6 6 90", "cart_2 pose 9 6 90"), duration=5.0), {},
        ("5 s are given", "cart_1", "7.22 m", "7.0 s"),
    ),
    "no such robot": (ToEnds(ends_deg=("cart_9 pose 6 6 90",)), {}, ("'cart_9'", "cart_1, cart_2")),
    "nobody has an end": (ToEnds(ends_deg=()), {}, ("no robot has an end",)),
    "nothing to do": (ToEnds(ends_deg=("cart_1 heading 0",)), {}, ("where it is to end already",)),
    "no angle": (EqualRadius(angle_deg=0.0), {}, ("where it is to end already",)),
}


@pytest.mark.parametrize("wanted, given, words", REFUSED.values(), ids=REFUSED)
def test_what_cannot_be_kept_is_refused_with_figures_and_a_remedy(wanted, given, words):
    poses = abreast(2, given.get("poses", fleets.SPACING))
    chosen = settings(**{name: values for name, values in given.items() if name != "poses"})
    with pytest.raises(RefusedError) as refused:
        fleets.solve(wanted, carts(2), poses, chosen)
    assert all(word in refused.value.reason + refused.value.remedy for word in words), refused.value
    assert refused.value.remedy


def test_the_asked_radius_is_named_where_it_stands_in_the_way():
    """A fleet that was pushed aside: back to its end only by tighter bends than were asked for."""
    made = fleets.corner()
    aside = fleets.states(made.state(6.0)[:, :3] + [0.0, 0.8, 0.0])
    with pytest.raises(RefusedError, match="the radius of 4 m that is asked"):
        reference.make(made.task, made.plan.fleet, made.graph, settings(), aside, start=6.0)


def test_a_plan_that_the_solver_did_not_finish_and_that_jumps_is_refused(monkeypatch):
    whole = solver.solve
    monkeypatch.setattr(reference, "knows", lambda _problem: False)
    monkeypatch.setattr(solver, "finish", lambda problem, near: near)
    monkeypatch.setattr(solver, "solve", lambda problem, start, **_: whole(problem, start, budget=1e-3))
    with pytest.raises(RefusedError, match="no plan was found in"):
        fleets.solve(EqualRadius(radius=4.0), carts(3), abreast(3), settings())


def test_a_wall_of_robots_that_cannot_be_passed_is_refused_with_the_clearance():
    """cart_2 stands between cart_1 and its end, and its own end is where it stands."""
    straight = attrs.evolve(LIMITS, max_curvature=0.05)
    poses = np.array([[0.0, 0.0, 0.0], [6.0, 0.0, 0.0]])
    wanted = ToEnds(ends_deg=("cart_1 pose 12 0 0", "cart_2 pose 6.0 0 0"), speed=1.0)
    with pytest.raises(RefusedError, match=r"cart_1|cart_2") as refused:
        fleets.solve(wanted, carts(2, straight), poses, settings())
    assert " m" in refused.value.reason
