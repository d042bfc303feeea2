# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One robot's speed along its way, with changes of gear."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from coord_planner.core.drive import InStep, along, stretches
from coord_planner.core.profile import speed_profile

RATES = {"acceleration": 0.5, "braking": 1.0, "step": 0.25}


def drive(lengths, wait=0.0, stand=1.0, first=0.0, last=0.0):
    way = stretches([(0.1, length) for length in lengths], stand)
    return along(way, wait=wait, first=first, forward=1.0, backward=0.5, last=last, **RATES)


def test_ahead_and_back_worked_out_by_hand():
    # 4 m ahead: 2 s and 1 m up to 1 m/s, 2.5 m in 2.5 s, 1 s and 0.5 m down: 5.5 s. Back 1 m at 0.5 m/s: 1 s and
    # 0.25 m up, 0.625 m in 1.25 s, 0.5 s and 0.125 m down: 2.75 s.
    made = drive([4.0, -1.0], wait=0.5)
    assert made.times == pytest.approx([0.0, 0.5, 2.5, 5.0, 6.0, 7.0, 8.0, 9.25, 9.75])
    assert made.speeds == pytest.approx([0.0, 0.0, 1.0, 1.0, 0.0, 0.0, -0.5, -0.5, 0.0])
    assert made.gears.tolist() == [0, 1, 1, 1, 0, -1, -1, -1]
    t = np.array([0.0, 0.5, 6.0, 6.5, 9.75, 12.0])
    assert made.distance(t) == pytest.approx([0.0, 0.0, 4.0, 4.0, 5.0, 5.0])
    assert made.advance(t) == pytest.approx([0.0, 0.0, 4.0, 4.0, 3.0, 3.0])
    assert made.gear(np.array([0.2, 0.5, 0.6, 5.9, 6.0, 7.0, 7.1, 20.0])).tolist() == [0, 0, 1, 1, 0, 0, -1, -1]
    assert [made.direction(t) for t in (0.2, 6.5, 7.2, 20.0)] == [1, 1, -1, -1]


@given(
    lengths=st.lists(st.floats(0.2, 20.0), min_size=1, max_size=5), backward_first=st.booleans(),
    wait=st.floats(0.0, 9.0), stand=st.floats(0.5, 3.0),
)
def test_every_way_is_covered_within_the_rates_and_gears_change_at_standstill(lengths, backward_first, wait, stand):
    signs = [(-1.0 if backward_first else 1.0) * (-1.0) ** i for i in range(len(lengths))]
    signed = [sign * length for sign, length in zip(signs, lengths)]
    made = drive(signed, wait=wait, stand=stand)
    assert made.distance(np.array([made.duration]))[0] == pytest.approx(sum(lengths))
    assert made.advance(np.array([made.duration]))[0] == pytest.approx(sum(signed), abs=1e-9)
    assert (np.diff(made.times) > 0.0).all() and made.full <= 1.0 + 1e-9 and made.speeds.min() >= -0.5 - 1e-9
    size, step = np.abs(made.speeds), np.diff(made.times)
    assert (np.diff(size) <= 0.5 * step + 1e-9).all() and (np.diff(size) >= -1.0 * step - 1e-9).all()
    t = np.linspace(0.0, made.duration, 2001)
    gear, speed = made.gear(t), made.speed(t)
    assert (gear * speed >= -1e-9).all() and (np.abs(speed[gear == 0]) < 1e-9).all()
    standing = made.times[1:][made.gears == 0]
    assert standing / 0.25 == pytest.approx(np.round(standing / 0.25))  # each ends on a node of the plan
    assert (np.diff(made.times)[made.gears == 0][1 if wait > 0 else 0:] >= stand - 1e-9).all()


def test_pieces_of_one_gear_are_one_stretch():
    way = stretches([(0.0, 1.0), (0.3, 2.0), (-0.2, -1.5), (0.0, 0.0), (0.1, -0.5), (0.0, 3.0)], 0.7)
    assert [part.length for part in way] == pytest.approx([3.0, -2.0, 3.0])
    assert [part.stand for part in way] == [0.7, 0.7, 0.0]


def test_in_step_all_pass_their_marks_together():
    profile = speed_profile(6.0, 0.0, 1.0, 0.0, 0.5, 1.0)
    common = np.array([0.0, 4.0, 6.0])
    outer, inner = (InStep(profile, common, np.array(metres)) for metres in ([0.0, 4.0, 6.0], [0.0, 1.0, 3.0]))
    t = np.linspace(0.0, profile.duration, 200)
    at_mark = np.interp(4.0, outer.distance(t), t)
    assert inner.distance(np.array([at_mark]))[0] == pytest.approx(1.0, abs=1e-3)
    assert inner.distance(np.array([profile.duration]))[0] == pytest.approx(3.0)
    assert inner.full == pytest.approx(0.5) and inner.gear(t).min() == 1 and inner.direction(3.0) == 1
    middle = at_mark / 2
    assert inner.speed(np.array([middle]))[0] == pytest.approx(outer.speed(np.array([middle]))[0] / 4)
    assert math.isclose(inner.duration, profile.duration)
