# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Neighbours from poses: who is joined, edges that do not flicker, the graph about to split, in motion."""

import attrs
import fleets
import numpy as np
import pytest
from fleets import LATE, State, abreast, carts, settings
from sites import site

from coord_planner.core.graph import NeighbourGraph, path
from coord_planner.core.manoeuvre import EqualRadius, Form
from coord_planner.core.neighbours import Lookout, from_poses, holding
from coord_planner.core.settings import Neighbours
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

NAMES = ("a", "b", "c", "d", "e")
NEAREST, WITHIN = Neighbours(source="nearest", count=1), Neighbours(source="within_range", range=3.0)
ROW = np.array([[0.0, 0.0], [1.0, 0.0], [3.0, 0.0], [6.0, 0.0], [7.5, 0.0]])


def pairs(graph):
    return {"".join(edge[:2]) for edge in graph.edges}


def test_the_nearest_count_from_both_sides():
    """By hand: a-b, b-a, c-b, d-e, e-d; c is nobody's nearest and is joined all the same."""
    assert pairs(from_poses(NEAREST, NAMES, ROW)) == {"ab", "bc", "de"}
    two = from_poses(attrs.evolve(NEAREST, count=2), NAMES, ROW)
    assert pairs(two) == {"ab", "ac", "bc", "cd", "ce", "de"}
    everybody = from_poses(attrs.evolve(NEAREST, count=99), NAMES, ROW)
    assert len(everybody.edges) == 10


def test_within_range_means_nearer_than_it():
    assert pairs(from_poses(WITHIN, NAMES, ROW)) == {"ab", "bc", "de"}  # a-c and c-d are exactly 3 m
    assert pairs(from_poses(attrs.evolve(WITHIN, range=3.001), NAMES, ROW)) == {"ab", "ac", "bc", "cd", "de"}


@pytest.mark.parametrize("chosen", [NEAREST, WITHIN])
def test_edges_do_not_flicker_where_a_distance_hovers(chosen):
    """b hovers about 3 m from a, and about half way between a and c, by the noise of a pose."""
    random, graph, seen = np.random.default_rng(1), None, []
    for _ in range(200):
        places = np.array([[0.0, 0.0], [3.0, 0.0], [6.0, 0.0]]) + random.normal(0.0, 0.02, (3, 2))
        graph = from_poses(chosen, ("a", "b", "c"), places, graph)
        seen.append(pairs(graph))
    changes = sum(one != other for one, other in zip(seen, seen[1:]))
    assert changes <= 2  # edges appear once; without the hysteresis they come and go some hundred times
    bare = attrs.evolve(chosen, hysteresis=0.0)
    random, graph, came = np.random.default_rng(1), None, []
    for _ in range(200):
        places = np.array([[0.0, 0.0], [3.0, 0.0], [6.0, 0.0]]) + random.normal(0.0, 0.02, (3, 2))
        graph = from_poses(bare, ("a", "b", "c"), places, graph)
        came.append(pairs(graph))
    if chosen is WITHIN:
        assert sum(one != other for one, other in zip(came, came[1:])) > 50


def test_an_edge_parts_when_it_is_really_longer():
    near, far = np.array([[0.0, 0.0], [2.9, 0.0]]), np.array([[0.0, 0.0], [3.7, 0.0]])
    joined = from_poses(WITHIN, ("a", "b"), near)
    assert pairs(from_poses(WITHIN, ("a", "b"), far * [0.95, 1], joined)) == {"ab"}
    assert not from_poses(WITHIN, ("a", "b"), far, joined).edges


def test_how_a_graph_holds_together():
    """Path of six: 2 - 2 cos(pi/6) (shared/checks.md section 2: Fiedler 1973); an edge at its range holds nothing."""
    listed = Neighbours()
    assert holding(listed, path(tuple("abcdef")), np.zeros((6, 2))) == pytest.approx(2 - 2 * np.cos(np.pi / 6))
    assert holding(listed, NeighbourGraph(("a", "b", "c"), (("a", "b", 1.0),)), np.zeros((3, 2))) == pytest.approx(0.0)
    pair = path(("a", "b"))
    held = [holding(WITHIN, pair, np.array([[0.0, 0.0], [x, 0.0]])) for x in (1.0, 3.0, 3.3, 3.59)]
    assert held[0] == pytest.approx(2.0) and np.all(np.diff(held) < 0) and held[-1] < 0.03


def test_the_lookout_looks_every_so_often_and_not_at_robots_that_it_cannot_see():
    lookout, graph = Lookout(), NeighbourGraph(NAMES)
    assert lookout.found(Neighbours(), graph, ROW, 0.0) is None  # as listed
    assert lookout.found(NEAREST, graph, ROW * np.nan, 0.0) is None
    assert pairs(lookout.found(NEAREST, graph, ROW, 0.0)) == {"ab", "bc", "de"}
    assert lookout.found(NEAREST, graph, ROW, 0.5) is None
    assert lookout.found(NEAREST, graph, ROW, 0.5, at_once=True) is not None
    assert lookout.found(NEAREST, from_poses(NEAREST, NAMES, ROW), ROW, 9.0) is None  # nothing new
    assert lookout.found(NEAREST, graph, ROW, 2.0) is not None  # also after the clock has jumped back


def sensing(count, chosen, **manoeuvres):
    """A yard whose graph comes from the poses alone."""
    fleet = carts(count, response=LATE)
    return fleets.Yard(fleet, abreast(count), manoeuvres, settings(neighbours=attrs.asdict(chosen)),
                       NeighbourGraph(fleet.names), pose_noise_xy=0.02)


def test_a_manoeuvre_begins_with_the_neighbours_that_are_there():
    yard = sensing(3, Neighbours(source="nearest", count=1), turn=EqualRadius(angle_deg=60.0, radius=3.0))
    assert yard.begin("turn").ok
    assert pairs(yard.coordinator.graph) == {"cart_1cart_2", "cart_2cart_3"}
    assert yard.coordinator.reference.graph.edges == yard.coordinator.graph.edges
    yard.run_to(State.ENDED)
    assert "graph changed" not in yard.codes()


def test_robots_too_far_apart_are_refused():
    yard = sensing(3, Neighbours(source="within_range", range=2.0), turn=EqualRadius(angle_deg=60.0, radius=3.0))
    answer = yard.begin("turn")
    assert not answer.ok and "falls into parts" in answer.text


def test_neighbours_change_on_the_way_and_the_rest_is_made_for_them():
    """Into a wider line: who was two places away and near goes out of reach. No command jumps."""
    chosen = Neighbours(source="within_range", range=5.5, hysteresis=0.05)
    yard = sensing(3, chosen, form=Form(shape="line", spacing=4.0, heading_deg=0.0, coupling=1.0))
    assert yard.begin("form").ok
    before = pairs(yard.coordinator.graph)
    assert len(before) == 3
    yard.run_to(State.ENDED)
    after = pairs(yard.coordinator.graph)
    assert after == {"cart_1cart_2", "cart_2cart_3"} and after != before
    assert yard.coordinator.reference.graph.edges == yard.coordinator.graph.edges
    assert "graph changed" in yard.codes()
    assert max(yard.breaches().values()) < 1e-6


def test_a_graph_about_to_split_is_warned_of():
    chosen = Neighbours(source="within_range", range=2.6, hysteresis=0.05, warn_below=0.8)
    yard = sensing(2, chosen, turn=EqualRadius(angle_deg=60.0, radius=3.0))
    assert yard.begin("turn").ok
    yard.run(1.0)
    assert "graph about to split" in yard.codes()


def test_rehearsals_and_files_take_neighbours_from_poses():
    chosen = site(abreast(3), {"corner": {"kind": "equal_radius", "radius": 4.0, "angle_deg": 45.0}},
                  neighbours__source="nearest", neighbours__count=1, graph__edges=[])
    assert pairs(chosen.graph) == {"mower_1mower_2", "mower_2mower_3"}
    run = rehearse(chosen, "corner", seed=1)
    assert summary(run)["completed"] and len(run.edges) == 2
