# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Shortest forward paths against published values, a reference library and laws."""

import math

import easydubins.dubin_path
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core import dubins

poses = st.tuples(st.floats(-20, 20), st.floats(-20, 20), st.floats(-10, 10))
radii = st.floats(0.05, 8.0)


def end_error(path, end):
    x, y, heading = path.end
    return math.hypot(x - end[0], y - end[1]) + abs(math.remainder(heading - end[2], 2 * math.pi))


# shared check values, section 4, made with the formulas of Shkel & Lumelsky (2001)
@pytest.mark.parametrize(
    ("end", "radius", "length", "word"),
    [
        ((4, 3, 1), 1, 5.053324727308, "LSL"),
        ((4, 4, math.pi), 1, 7.613728608589, "LSL"),
        ((0.5, 0.5, math.pi), 1, 6.660418079530, "RLR"),
        ((1, 0, 0.5), 1, 7.267872154984, "LSR"),
        ((10, -2, -0.7), 2.5, 10.257467905899, "RSR"),
    ],
)
def test_published_values(end, radius, length, word):
    path = dubins.shortest((0, 0, 0), end, radius)
    assert path.word == word
    assert path.length == pytest.approx(length, abs=2e-12)
    assert end_error(path, end) < 1e-12


def test_reference_library():
    """easydubins 1.3.1 (PyPI), an implementation of Shkel & Lumelsky (2001) by others."""
    random = np.random.default_rng(5)
    for _ in range(400):
        start, end = (tuple(random.uniform([-4, -4, -3], [4, 4, 3])) for _ in range(2))
        radius = random.uniform(0.1, 3)
        _, pieces, _ = easydubins.dubin_path.dubins_path(start, end, radius)
        assert dubins.shortest(start, end, radius).length == pytest.approx(sum(pieces), abs=1e-9)


@given(poses, poses, radii)
def test_every_word_arrives(start, end, radius):
    found = dubins.paths(start, end, radius)
    assert {path.word for path in found} >= {"LSL", "RSR"}
    for path in found:
        assert end_error(path, end) < 1e-6 * max(1, radius)
        assert all(length >= 0 for _, length in path.segments)
        assert path.end[2] == pytest.approx(start[2] + path.turning, abs=1e-9)
        if path.word in ("RLR", "LRL"):  # Dubins (1957): the middle arc is above half a turn
            middle = path.segments[1][1]
            assert middle >= math.pi * radius - 1e-9 or middle == 0  # a full turn is left out


@given(poses, poses, radii)
def test_laws(start, end, radius):
    length = dubins.shortest(start, end, radius).length
    assert length >= math.hypot(end[0] - start[0], end[1] - start[1]) - 1e-9
    turned_round = [(x, y, heading + math.pi) for x, y, heading in (end, start)]
    assert dubins.shortest(*turned_round, radius).length == pytest.approx(length, rel=1e-7, abs=1e-6)


@pytest.mark.parametrize("scale", np.logspace(-9, 5, 15))
@pytest.mark.parametrize("heading", [0.0, 0.7, -3.0, 40.0])
def test_straight_ahead_and_along_an_arc(scale, heading):
    """Where whole pieces vanish, rounding must not put a full turn in their place."""
    start = (3.0, -2.0, heading)
    ahead = (3 + scale * math.cos(heading), -2 + scale * math.sin(heading), heading)
    assert dubins.shortest(start, ahead, 1.0).length == pytest.approx(scale, rel=1e-6, abs=1e-7)
    for side in (1, -1):
        turn = side * min(scale, 3.0)
        chord, bearing = scale * np.sinc(turn / 2 / np.pi), heading + turn / 2
        end = (3 + chord * math.cos(bearing), -2 + chord * math.sin(bearing), heading + turn)
        path = dubins.shortest(start, end, scale / abs(turn))
        assert path.length == pytest.approx(scale, rel=1e-6, abs=1e-7)
        assert path.turning == pytest.approx(turn, abs=1e-6)


def test_nowhere_to_go():
    path = dubins.shortest((1, 2, 0.3), (1, 2, 0.3 - 4 * math.pi), 2.0)
    assert path.length == 0 and path.turning == 0
    assert dubins.shortest((0, 0, 0), (0, 0, math.pi), 1.0).length == pytest.approx(7 * math.pi / 3)  # RLR, by hand


def test_samples_follow_the_curvature():
    path = dubins.shortest((0, 0, 0), (0.5, 0.5, math.pi), 1.0)
    distances = np.linspace(-1, path.length + 1, 4001)
    sampled = path.sample(distances)
    steps = np.diff(sampled, axis=0)
    middle = (sampled[:-1, 2] + sampled[1:, 2]) / 2
    along = np.diff(np.clip(distances, 0, path.length))
    np.testing.assert_allclose(steps[:, 0], along * np.cos(middle), atol=1e-6)
    np.testing.assert_allclose(steps[:, 1], along * np.sin(middle), atol=1e-6)
    assert np.abs(steps[:, 2]).max() <= along.max() * (1 + 1e-9)


@pytest.mark.parametrize("bad", [0.0, -1.0, math.nan, math.inf])
def test_bad_radius(bad):
    with pytest.raises(ValueError, match="allowed"):
        dubins.shortest((0, 0, 0), (1, 0, 0), bad)


@pytest.mark.parametrize("bad", [(0, 0), (0, 0, math.nan), (math.inf, 0, 0)])
def test_bad_pose(bad):
    with pytest.raises(ValueError, match="allowed"):
        dubins.shortest((0, 0, 0), bad, 1.0)
