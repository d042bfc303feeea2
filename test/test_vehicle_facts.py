# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Facts about vehicles: shared/checks.md section 6, common practice unless a source is named beside it."""

import math
from types import SimpleNamespace

import numpy as np
import pytest
from fleets import PERFECT, carts

from coord_planner.core import gate
from coord_planner.core.fleet import Limits, Response, car_like_limits
from coord_planner.core.manoeuvre import eased_turn
from coord_planner.core.messages import Command
from coord_planner.core.settings import SiteRules
from coord_planner.trial.vehicle import SimulatedFleet


def test_bicycle_model():
    curvature, _ = car_like_limits(1.2, math.radians(35.0), 0.5)
    assert curvature == pytest.approx(0.583506281841, abs=1e-9)
    assert 1.0 / curvature == pytest.approx(1.713777608091, abs=1e-9)


def test_the_curvature_rate_of_a_steered_axle_is_the_one_it_has_at_every_angle():
    """sec^2(delta) delta' / wheelbase, 0.471864304763 at 20 degrees and 0.5 rad/s: least where it steers straight."""
    _, rate = car_like_limits(1.2, math.radians(35.0), 0.5)
    at = [0.5 / (math.cos(math.radians(angle)) ** 2 * 1.2) for angle in (0.0, 10.0, 20.0, 35.0)]
    assert at[2] == pytest.approx(0.471864304763, abs=1e-9)
    assert rate == pytest.approx(min(at), abs=1e-12)


def test_stopping_distance_of_a_machine_that_hears_nothing_more():
    """v t_r + v^2/(2a): 1.5 m/s, 0.3 s, 1 m/s^2 give 1.575 m."""
    fleet = carts(1, Limits(max_braking=1.0, max_speed=1.5), Response())
    machines = SimulatedFleet(
        fleet, {"cart_1": (0.0, 0.0, 0.0)}, SimpleNamespace(**PERFECT), {"cart_1": 0.3}, np.random.default_rng(0)
    )
    machines.command("cart_1", Command(1.5, 0.0), 0.0)
    machines.advance(5.0)
    assert machines.poses()[0, 0] == pytest.approx(1.575, abs=1e-9)
    assert machines.speeds()[0] == 0.0


def test_lateral_acceleration():
    """1 m/s^2 at a curvature of 0.5: at most sqrt(2) m/s."""
    limits = Limits(
        max_curvature=0.5, max_speed=5.0, max_acceleration=20.0, max_turn_rate=20.0, max_lateral_acceleration=1.0
    )
    last = np.array([[1.0, 0.5]])
    allowed, _ = gate.allow(np.array([[5.0, 0.5]]), last, 0.2, carts(1, limits), SiteRules())
    assert allowed[0] == pytest.approx([math.sqrt(2.0), 0.5], abs=1e-9)
    assert Command(*allowed[0]).turn_rate * allowed[0, 0] == pytest.approx(1.0, abs=1e-9)


def test_the_way_into_a_turn_is_a_clothoid():
    """kappa = pi s ends at (0.779893400377, 0.438259147390) after 1 m: Fresnel integrals, DLMF 7.2."""
    # Half of a turn by pi that eases in for 1 m and out again; short arcs come near it with the square of their length.
    errors = []
    for pieces in (100, 200, 400):
        way = eased_turn(math.pi, 1.0 / math.pi, math.pi, np.zeros(3), pieces)
        assert way.length == pytest.approx(2.0) and way.turning == pytest.approx(math.pi)
        x, y, heading = way.sample([1.0])[0]
        assert heading == pytest.approx(math.pi / 2, abs=1e-9)
        errors.append(math.hypot(x - 0.779893400377, y - 0.438259147390))
    assert errors[-1] < 2e-6 and 1.9 < math.log2(errors[0] / errors[1]) < 2.1
