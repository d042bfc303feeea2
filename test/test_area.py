# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Areas of a site: what is no area is refused, and pieces are convex and make up the whole."""

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core.area import Area, area_of
from coord_planner.errors import SettingsError

L_SHAPE = (0, 0, 4, 0, 4, 1, 1, 1, 1, 3, 0, 3)


@pytest.mark.parametrize("numbers, words", [
    ((0, 0, 1, 0), "2 corners"), ((0, 0, 1, 0, 1), "5 numbers"), ((0, 0, 1, 1, 2, 2), "one line"),
    ((0, 0, 2, 2, 2, 0, 0, 2), "crosses or touches itself at (1.00, 1.00)"), ((0, 0, 1, 0, float("nan"), 1), "finite"),
    ((0, 0, 0, 0, 0, 0), "one line or in one place"),
])
def test_what_is_no_area_is_refused_with_a_remedy(numbers, words):
    with pytest.raises(SettingsError) as refused:
        area_of("pond", numbers)
    assert words in str(refused.value) and refused.value.key == "corners" and refused.value.allowed


@pytest.mark.parametrize("numbers, count", [
    ((0, 0, 1, 0, 1, 1, 0, 1), 1), (L_SHAPE, 2), (L_SHAPE[::-1], 2),
    ((0, 0, 2, 0, 4, 0, 4, 2, 0, 2), 1),  # a corner that is none
])
def test_convex_areas_stay_whole_and_others_fall_into_few(numbers, count):
    assert len(area_of("shed", numbers).pieces) == count


@given(st.lists(st.floats(0.5, 5.0), min_size=4, max_size=12), st.booleans())
def test_pieces_are_convex_and_make_up_the_area(radii, clockwise):
    angles = np.linspace(0.0, 2 * np.pi, len(radii), endpoint=False)
    corners = np.array(radii)[:, None] * np.stack([np.cos(angles), np.sin(angles)], axis=1)
    area = Area("star", tuple(map(tuple, corners[::-1] if clockwise else corners)))
    shapes = [shapely.Polygon(piece) for piece in area.pieces]
    assert sum(shape.area for shape in shapes) == pytest.approx(area.polygon.area)
    assert shapely.union_all(shapes).symmetric_difference(area.polygon).area < 1e-6
    for piece, shape in zip(area.pieces, shapes):
        assert shape.convex_hull.area == pytest.approx(shape.area) and shape.exterior.is_ccw and len(piece) >= 3
    assert len(shapes) <= len(radii) - 2
