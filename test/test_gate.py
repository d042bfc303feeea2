# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The last gate: whatever is wished for, what goes out can be driven and keeps the limits."""

import math

import attrs
import numpy as np
import pytest
from fleets import LIMITS, carts
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from coord_planner.core import gate
from coord_planner.core.fleet import Fleet, Robot
from coord_planner.core.settings import SiteRules

SLACK = 1e-9
ANYTHING = hnp.arrays(float, (2, 2), elements=st.floats(allow_nan=True, allow_infinity=True, width=64))
TIMES = st.floats(0.0, 0.5)
# One that may reverse beside one that may not.
BOTH = Fleet((Robot("a", LIMITS), Robot("b", attrs.evolve(LIMITS, min_speed=-0.7, max_turn_rate=0.5))))
RULES = SiteRules(max_speed=1.2, max_lateral_acceleration=0.8)


def inside(speed, curvature, fleet=BOTH, rules=RULES):
    """Commands drawn to the nearest ones within every limit."""
    top = np.minimum(fleet.limit("max_speed"), rules.max_speed)
    speed = np.clip(speed, np.minimum(fleet.limit("min_speed"), 0.0), top)
    fast = np.maximum(np.abs(speed), 1e-9)
    lateral = np.minimum(fleet.limit("max_lateral_acceleration"), rules.max_lateral_acceleration)
    bend = np.minimum.reduce([fleet.limit("max_curvature"), fleet.limit("max_turn_rate") / fast, lateral / fast**2])
    return np.stack([speed, np.clip(curvature, -bend, bend)], axis=1)


def kept(commands, fleet=BOTH, rules=RULES):
    speed, curvature = commands.T
    return inside(speed, curvature, fleet, rules) == pytest.approx(commands, abs=1e-7)


def reachable(commands, last, elapsed, fleet=BOTH):
    """Whether commands can be reached: towards 0 at the braking rate, away from it at the accelerating one."""
    old, new = last[:, 0], commands[:, 0]
    slower = np.where(old * new >= 0, np.maximum(np.abs(old) - np.abs(new), 0.0), np.abs(old))
    faster = np.where(old * new >= 0, np.maximum(np.abs(new) - np.abs(old), 0.0), np.abs(new))
    needed = slower / fleet.limit("max_braking") + faster / fleet.limit("max_acceleration")
    steered = np.abs(commands[:, 1] - last[:, 1]) / fleet.limit("max_curvature_rate")
    return bool((needed <= elapsed + SLACK).all() and (steered <= elapsed + SLACK).all())


@given(ANYTHING, hnp.arrays(float, (2, 2), elements=st.floats(-2.0, 2.0)), TIMES)
def test_from_a_command_within_the_limits_only_such_come_out(wanted, before, elapsed):
    last = inside(*before.T)
    allowed, nonsense = gate.allow(wanted, last, elapsed, BOTH, RULES)
    assert np.isfinite(allowed).all()
    assert kept(allowed) and reachable(allowed, last, elapsed)
    assert (nonsense == ~np.isfinite(wanted).all(axis=1)).all()


@given(ANYTHING, hnp.arrays(float, (2, 2), elements=st.floats(-6.0, 6.0)), TIMES)
def test_from_a_command_outside_the_limits_it_comes_back_at_the_machines_rates(wanted, last, elapsed):
    """A limit was lowered below what is driven: no jump, and nothing beyond the fastest way back."""
    allowed, _ = gate.allow(wanted, last, elapsed, BOTH, RULES)
    assert np.isfinite(allowed).all() and reachable(allowed, last, elapsed)
    top = np.minimum(BOTH.limit("max_speed"), RULES.max_speed)
    braked = np.maximum(np.abs(last[:, 0]) - BOTH.limit("max_braking") * elapsed, 0.0)
    steered = np.maximum(np.abs(last[:, 1]) - BOTH.limit("max_curvature_rate") * elapsed, 0.0)
    assert (np.abs(allowed[:, 0]) <= np.maximum(top, braked) + SLACK).all()
    assert (np.abs(allowed[:, 1]) <= np.maximum(BOTH.limit("max_curvature"), steered) + SLACK).all()
    lateral = np.minimum(BOTH.limit("max_lateral_acceleration"), RULES.max_lateral_acceleration)
    turn = np.abs(allowed[:, 0] * allowed[:, 1])
    assert (turn <= np.maximum(BOTH.limit("max_turn_rate"), braked * steered) + SLACK).all()
    assert (turn * np.abs(allowed[:, 0]) <= np.maximum(lateral, braked**2 * steered) + SLACK).all()


@given(hnp.arrays(float, (2, 2), elements=st.floats(-2.0, 2.0)), TIMES)
def test_what_may_be_sent_is_sent_unchanged(before, elapsed):
    last = inside(*before.T)
    allowed, nonsense = gate.allow(last, last, elapsed, BOTH, RULES)
    assert allowed == pytest.approx(last, abs=1e-9) and not nonsense.any()


def test_nonsense_brakes_along_the_last_curvature():
    last = np.array([[1.0, 0.3], [0.5, -0.2]])
    allowed, nonsense = gate.allow(np.array([[math.nan, 0.0], [0.5, -0.2]]), last, 0.1, carts(2), SiteRules())
    assert allowed == pytest.approx(np.array([[0.9, 0.3], [0.5, -0.2]]))
    assert nonsense.tolist() == [True, False]


def test_a_lowered_cap_is_met_by_braking_down_to_it():
    """From 1.4 m/s to a cap of 1 m/s by 1 m/s^2, then at the cap, whatever the plan still says."""
    last, speeds = np.array([[1.4, 0.0]]), []
    for _ in range(8):
        last, _ = gate.allow(np.array([[1.4, 0.0]]), last, 0.1, carts(1), SiteRules(max_speed=1.0))
        speeds.append(last[0, 0])
    assert speeds == pytest.approx([1.3, 1.2, 1.1, 1.0, 1.0, 1.0, 1.0, 1.0])
