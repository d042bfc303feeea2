# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Exact distances: against closed forms for rectangles and against what a separating line must do."""

import math

import numpy as np
import pytest
import shapely
from fleets import carts
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core import outline, rectangles
from coord_planner.core.fleet import Footprint
from coord_planner.core.plan import near_pairs

RECTANGLE = Footprint(1.2, 0.8).corners()
PAIR = np.array([[0, 1]])


def distance(poses, corners=RECTANGLE):
    polygons = outline.outlines(np.stack([corners] * len(poses)), np.array(poses, dtype=float))
    return float(outline.clearances(polygons, PAIR).item())


def test_distances_of_rectangles_worked_out_by_hand():
    assert distance([(0, 0, 0), (3, 0, 0)]) == pytest.approx(1.8)  # nose to tail
    assert distance([(0, 0, 0), (0, 2, 0)]) == pytest.approx(1.2)  # abreast
    assert distance([(0, 0, 0), (3, 0, math.pi / 2)]) == pytest.approx(2.0)  # one across
    assert distance([(0, 0, 0), (1.5, 1.2, 0)]) == pytest.approx(0.5)  # corner to corner: 0.3 and 0.4
    # corner against a side, at 45 degrees: its corner is (0.6 + 0.4)/sqrt(2) off its centre
    assert distance([(0, 0, 0), (2, 0, math.pi / 4)]) == pytest.approx(2 - 0.6 - 1 / math.sqrt(2))
    assert distance([(0, 0, 0), (1.0, 0.5, 0.3)]) == 0.0


def test_offsets_move_the_outline_with_the_heading():
    ahead = Footprint(2.0, 1.0, footprint_offset_x=1.0, footprint_offset_y=-0.5).corners()
    polygon = outline.outlines(ahead[None], np.array([[5.0, 5.0, math.pi / 2]]))[0]
    # 1 m ahead is +y, half a metre to the right is +x
    assert polygon.bounds == pytest.approx((5.0, 5.0, 6.0, 7.0))


def test_closest_names_the_pair_over_all_moments():
    poses = np.zeros((3, 4, 3))
    poses[1, :, 1], poses[2, :, 1] = 5.0, [20.0, 8.0, 7.0, 9.0]
    polygons = outline.outlines(np.stack([RECTANGLE] * 3), poses)
    gap, pair = outline.closest(polygons, outline.all_pairs(3))
    assert gap == pytest.approx(2.0 - 0.8) and pair == (1, 2)
    assert outline.closest(polygons[:1], outline.all_pairs(1)) == (math.inf, (-1, -1))


@given(*[st.floats(-5.0, 5.0)] * 2, *[st.floats(-4.0, 4.0)] * 2)
def test_the_separating_line_shows_the_whole_distance(x, y, first, second):
    corners, poses = np.stack([RECTANGLE] * 2), np.array([(0.0, 0.0, first), (x, y, second)])
    polygons, normal = outline.outlines(corners, poses), rectangles.separating_normals(corners, poses, PAIR)[0]
    assert np.hypot(*normal) == pytest.approx(1.0)
    gap = float(outline.clearances(polygons, PAIR).item())
    if gap > 1e-6:
        shadows = [np.array(polygon.exterior.coords) @ normal for polygon in polygons]
        assert shadows[1].min() - shadows[0].max() == pytest.approx(gap, abs=1e-7)


def test_no_near_pair_is_left_out():
    fleet, rng = carts(6), np.random.default_rng(0)
    poses = rng.uniform(-8.0, 8.0, (6, 5, 3))
    polygons = outline.outlines(fleet.corners(), poses)
    every = outline.all_pairs(6)
    close = outline.clearances(polygons, every).min(axis=1) < 2.0
    near = {tuple(pair) for pair in near_pairs(fleet, poses, 2.0)}
    assert {tuple(pair) for pair in every[close]} <= near
    assert outline.closest(polygons, np.array(sorted(near)))[0] == outline.closest(polygons, every)[0]


def test_rectangles_are_as_far_apart_as_shapely_says():
    rng = np.random.default_rng(3)
    count = 4000
    corners = np.stack([
        Footprint(*size, footprint_offset_x=ahead, footprint_offset_y=left).corners()
        for *size, ahead, left in rng.uniform([0.2, 0.2, -1.0, -1.0], [3.0, 2.0, 1.0, 1.0], (2 * count, 4))
    ]).reshape(2, count, 4, 2)
    poses = rng.uniform([-3.0, -3.0, -7.0], [3.0, 3.0, 7.0], (2, count, 3))
    poses[:, :200, 2] = np.round(poses[:, :200, 2] / (np.pi / 2)) * (np.pi / 2)  # side to side
    corners[1, :20, :, 1] *= 0.1
    corners[0, :20, :, 0] *= 0.1
    poses[1, :20] = poses[0, :20]  # crossed: neither has a corner inside the other
    shapes = [outline.outlines(corners[k], poses[k]) for k in range(2)]
    expected = shapely.distance(*shapes)
    assert 500 < np.count_nonzero(expected == 0.0) < count - 500
    found = rectangles.distances((corners[0], corners[1]), (poses[0], poses[1]))
    assert found == pytest.approx(expected, abs=1e-9)
