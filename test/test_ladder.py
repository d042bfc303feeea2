# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Steps down when the solver brings no finished plan, and the way back up."""

from __future__ import annotations

import attrs
import fleets
import numpy as np
import pytest

from coord_planner.core import ladder, rules, tick
from coord_planner.core.fast.ticks import TickSolve
from coord_planner.core.messages import State
from coord_planner.core.problem import CURVATURE_COMMAND, SPEED_COMMAND
from coord_planner.core.pursuit import Prepared
from coord_planner.core.stopping import _HARDEST
from coord_planner.errors import SolveError

SETTINGS = fleets.settings()
FAILED = rules.plan_failed(SETTINGS, "no numbers")


def prepared(start=3.0, moved=None, slower=1.0):
    """A tick in the middle of a turn, with the reference as the last plan."""
    made = fleets.corner()
    initial = made.state(start)
    if moved is not None:
        initial[:, :3] += moved
    posed, s, begin = tick.pose_problem(made, made.plan.fleet, SETTINGS, initial, start, 0.0, slower, None, np.zeros(3))
    return Prepared(posed, s, begin, made, 1.0)


def solved(ready):
    return TickSolve(lambda: 0.0)(ready.problem, ready.start, True, 1.0)


def codes(found):
    return [caution.code for caution in found.cautions]


def test_a_finished_plan_is_driven_without_a_word():
    ready = prepared()
    plan = solved(ready)
    found = ladder.find(ready, plan, None, SETTINGS, 0.1)
    assert found.plan is plan and found.fresh and not found.cautions


def test_an_unfinished_one_is_rolled_out_and_driven_where_it_keeps_what_it_must():
    ready = prepared()
    unfinished = attrs.evolve(solved(ready), solved=False, solve_time=SETTINGS.horizon.budget)
    found = ladder.find(ready, unfinished, None, SETTINGS, 0.1)
    assert found.fresh and codes(found) == ["plan unfinished"] and found.plan is not None
    assert found.plan.states == pytest.approx(unfinished.states, abs=1e-3)
    astray = attrs.evolve(unfinished, rates=unfinished.rates - np.array([0.3, 0.0]))
    found = ladder.find(ready, astray, None, SETTINGS, 0.1)
    assert not found.fresh and codes(found) == ["plan late"]  # and the last plan is driven


@pytest.mark.parametrize("without, expected", [
    (0.1, ["plan failed"]), (2.0, ["plan failed"]), (2.1, ["plan failed", "common curvature"]),
    (4.0, ["plan failed", "common curvature"]), (4.1, ["plan failed", "plan failed"]),
])
def test_each_step_has_its_time(without, expected):
    found = ladder.find(prepared(), None, FAILED, SETTINGS, without)
    assert codes(found) == expected and not found.fresh
    assert (found.plan is None) == (without > 4.0)
    assert (rules.response(found.cautions[-1]) is rules.Response.STOP) == (without > 4.0)


def test_the_last_plan_goes_on_from_where_the_robots_are():
    ready = prepared()
    plan = ladder.last_plan(ready)
    assert plan.states[:, 1:] == pytest.approx(ready.reference.states(ready.s[1:]), abs=0.02)
    slower = ladder.last_plan(attrs.evolve(ready, slower=0.5))
    assert slower.states[:, -1, SPEED_COMMAND] == pytest.approx(plan.states[:, -1, SPEED_COMMAND] / 2, abs=1e-6)


def test_a_last_plan_that_no_longer_keeps_clear_is_not_driven():
    """The first has come 0.5 m nearer to the second than planned: the last plan would not have noticed."""
    ready = prepared(moved=np.array([[0.0, 0.0, 0.0], [0.0, 0.35, 0.2], [0.0, 0.0, 0.0]]))
    assert ladder.last_plan(ready).closest(1)[0] < SETTINGS.site_rules.min_clearance
    assert "common curvature" in codes(ladder.find(ready, None, FAILED, SETTINGS, 0.1)) or ladder.find(
        ready, None, FAILED, SETTINGS, 0.1
    ).plan is None


def test_one_curvature_for_all_keeps_limits_and_places():
    ready = prepared()
    plan = ladder.common_curvature(ready)
    commands = plan.states[:, 6:, [CURVATURE_COMMAND, SPEED_COMMAND]]
    assert np.ptp(commands, axis=0).max() < 1e-6  # once everybody is there
    apart = plan.states[1:, :, :2] - plan.states[:1, :, :2]
    assert np.linalg.norm(apart - apart[:, :1], axis=2).max() < 0.15
    fleet, h = plan.fleet, np.diff(plan.times)
    rates = np.diff(plan.states[:, :, [CURVATURE_COMMAND, SPEED_COMMAND]], axis=1) / h[:, None]
    assert (np.abs(rates[..., 0]) <= fleet.limit("max_curvature_rate")[:, None] + 1e-9).all()
    assert (rates[..., 1] >= -fleet.limit("max_braking")[:, None] - 1e-9).all()


# In closed loop


class Flaky:
    """A solver that fails while it is told to."""

    def __init__(self):
        self.fails, self._solve = False, TickSolve(lambda: 0.0)

    def __call__(self, *args):
        if self.fails:
            raise SolveError("it was told to")
        return self._solve(*args)


@pytest.mark.parametrize("seconds, ends", [(1.5, State.ENDED), (3.5, State.ENDED), (6.0, State.HELD)])
def test_the_way_back_up_is_automatic_except_from_the_stop(seconds, ends):
    flaky = Flaky()
    yard = fleets.small_yard(solve=flaky)
    assert yard.begin("corner").ok
    yard.run(2.5)
    flaky.fails = True
    yard.run(seconds)
    flaky.fails = False
    assert yard.run_to(State.ENDED, State.HELD) is ends
    assert max(yard.breaches().values()) < 1e-6
    assert ("common curvature" in yard.codes()) == (seconds > 2.0)
    if ends is State.ENDED:
        assert yard.machines.poses() == pytest.approx(yard.coordinator.ends, abs=0.05)
    else:
        assert yard.standing() and "one curvature for all" in yard.coordinator.decision.reason and _HARDEST < 1.0
