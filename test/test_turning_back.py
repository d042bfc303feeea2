# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Ways back into a row beside: where they end, how deep they reach, how tightly they bend."""

import math

import numpy as np
import pytest
from fleets import SMALL

from coord_planner.core.dubins import ArcPath, shortest
from coord_planner.core.manoeuvre.turning_back import bend, turns_back

AT_ONCE = 1e7  # 1/m^2: the curvature is there at once, as in the closed forms


def kinds(shift, radius, rate=AT_ONCE, reverse=True):
    found = {}
    for turn in turns_back(shift, radius, rate, reverse):
        found.setdefault(turn.kind, turn)
    return found


@pytest.mark.parametrize("rate", [AT_ONCE, 1.0, 0.3])
@pytest.mark.parametrize("shift", [0.8, 2.5, 3.9, 5.0, 12.0])
def test_every_kind_ends_on_the_other_line_heading_back(shift, rate):
    radius = 1.6
    turns = list(turns_back(shift, radius, rate, True))
    assert turns and turns[0].changes == 0
    for turn in turns:
        x, y, heading = ArcPath((0.0, 0.0, 0.0), turn.kind, turn.segments).end
        assert (y, heading, x) == pytest.approx((shift, math.pi, turn.ahead), abs=1e-6), turn.kind
        assert max(abs(curvature) for curvature, _ in turn.segments) <= 1 / radius + 1e-9
        assert (turn.changes > 0) == any(length < 0.0 for _, length in turn.segments)
    assert not any(turn.changes for turn in turns_back(shift, radius, rate, False))


@pytest.mark.parametrize("radius", [1.0, 1.7])
@pytest.mark.parametrize("shift", [0.5, 1.5, 1.9])
def test_a_bulb_is_the_shortest_way_back_for_who_cannot_reverse(shift, radius):
    """Dubins 1957: three arcs of the smallest radius; which way round is one of two mirrored ones."""
    least = shortest((0.0, 0.0, 0.0), (0.0, shift, math.pi), radius)
    turn = kinds(shift, radius)["bulb"]
    assert least.word in ("RLR", "LRL") and turn.length == pytest.approx(least.length, rel=1e-6)


def test_a_wide_loop_is_the_shortest_too():
    assert kinds(9.0, 2.0)["loop"].length == pytest.approx(shortest((0, 0, 0), (0, 9, math.pi), 2.0).length, rel=1e-6)


@pytest.mark.parametrize("shift", [0.0, 1.0, 2.0])
def test_the_depth_of_three_points(shift):
    """Two arcs of angle a about centres 2 r apart and one between: cos a = (1 - shift / (2 r)) / 2, depth r sin a."""
    radius = 2.0
    turn = kinds(shift, radius)["three points"]
    angle = math.acos((1.0 - shift / (2.0 * radius)) / 2.0)
    assert turn.depth(np.zeros((4, 2))) == pytest.approx(radius * math.sin(angle), abs=5e-3)
    assert turn.changes == 2 and turn.length == pytest.approx(math.pi * radius, rel=1e-6)


def test_changes_of_gear_need_less_depth_and_five_points_the_least():
    found = kinds(2.5, 2.0, 0.8)
    corners = SMALL.corners()
    deep = {kind: turn.depth(corners) for kind, turn in found.items()}
    assert deep["bulb"] > deep["back between"] + 1.0 and deep["bulb"] > deep["three points"] + 1.0
    least = min(turn.depth(corners) for turn in turns_back(2.5, 2.0, 0.8, True) if turn.kind == "five points")
    assert least < min(deep["three points"], deep["back between"])


def test_curvature_changes_no_faster_than_asked_where_it_drives():
    segments = bend(math.pi, 2.0, 0.25)
    curvature, length = np.array(segments).T
    assert float(curvature @ length) == pytest.approx(math.pi)
    rates = np.diff(curvature) / ((length[1:] + length[:-1]) / 2)
    assert np.abs(rates[np.abs(np.diff(curvature)) > 1e-12][1:-1]).max() <= 0.25 * 1.2  # steps stand for a ramp
    assert curvature.max() == pytest.approx(0.5)
    small = bend(0.2, 2.0, 0.25)  # too short to reach the radius
    assert max(each for each, _ in small) < 0.5
    assert sum(each * metres for each, metres in small) == pytest.approx(0.2)
