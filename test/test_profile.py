# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Speed along a way."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core.profile import speed_profile


def test_a_trapezoid_worked_out_by_hand():
    # 10 m from 0 over 1 m/s to 0 at 0.5 and 1 m/s^2: 1 m in 2 s, 8.5 m in 8.5 s, 0.5 m in 1 s
    profile = speed_profile(10.0, 0.0, 1.0, 0.0, 0.5, 1.0)
    assert profile.durations == pytest.approx((2.0, 8.5, 1.0)) and profile.duration == pytest.approx(11.5)
    assert profile.speed(np.array([1.0, 5.0, 11.0])) == pytest.approx([0.5, 1.0, 0.5])
    assert profile.distance(np.array([0.0, 1.0, 2.0, 10.5, 11.5])) == pytest.approx([0.0, 0.25, 1.0, 9.5, 10.0])


def test_a_short_way_never_reaches_the_asked_speed():
    # 1.5 m at 0.5 and 1 m/s^2: the peak p has p^2 + p^2/2 = 1.5, so 1 m/s
    assert speed_profile(1.5, 0.0, 3.0, 0.0, 0.5, 1.0).speeds == pytest.approx((0.0, 1.0, 0.0))


@given(
    distance=st.floats(0.5, 100.0), asked=st.floats(0.2, 3.0), first=st.floats(0.0, 1.0), last=st.floats(0.0, 1.0),
    up=st.floats(0.1, 2.0), down=st.floats(0.1, 2.0),
)
def test_a_profile_covers_its_way_within_its_rates(distance, asked, first, last, up, down):
    first, last = first * asked, last * asked
    profile = speed_profile(distance, first, asked, last, up, down)
    knots = np.cumsum([0.0, *profile.durations])
    t = np.unique(np.concatenate([np.linspace(0.0, knots[-1], 50), knots]))
    speed, along = profile.speed(t), profile.distance(t)
    assert speed.max() <= asked + 1e-9 and speed[0] == pytest.approx(first) and speed[-1] == pytest.approx(last)
    change, step = np.diff(speed), np.diff(t)
    assert (change <= up * step + 1e-9).all() and (change >= -down * step - 1e-9).all()
    trapezia = np.concatenate([[0.0], np.cumsum((speed[1:] + speed[:-1]) / 2 * step)])
    assert along == pytest.approx(trapezia, rel=1e-9, abs=1e-9)
    # Longer than asked only where it cannot come from the first speed to the last on so short a way.
    needed = max(first**2 - last**2, 0.0) / (2 * down) + max(last**2 - first**2, 0.0) / (2 * up)
    assert along[-1] == pytest.approx(max(distance, needed), rel=1e-9)
    assert profile.distance(np.array([profile.duration + 2.0]))[0] == pytest.approx(along[-1] + 2.0 * last)
