# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Planner time, and what else goes by the steady clock: readiness, other planners, allowances."""

from __future__ import annotations

import pytest

from coord_planner.ros.allowance import Allowance
from coord_planner.ros.messages import Beat
from coord_planner.ros.others import OtherPlanners
from coord_planner.ros.readiness import Readiness
from coord_planner.ros.timekeeper import Timekeeper


class Clocks:
    """A steady clock, and one that is set now and then."""

    def __init__(self, simulated: bool) -> None:
        self.steady, self.stamp = 100.0, 0.0 if simulated else 1000.0
        self.keeper = Timekeeper(lambda: self.stamp, simulated, lambda: self.steady)

    def go(self, seconds: float, *, by_stamp: float | None = None) -> float:
        """Let time pass and look; what the look finds."""
        self.steady += seconds
        self.stamp += seconds if by_stamp is None else by_stamp
        return self.keeper.look()


@pytest.mark.parametrize("jump", [5.0, -5.0, 0.2, -0.2, 1e8])
def test_in_the_field_planner_time_runs_on_when_the_clock_is_set(jump: float) -> None:
    clocks = Clocks(simulated=False)
    assert clocks.go(1.0) == 0.0
    before = clocks.keeper.time()
    assert clocks.go(0.05, by_stamp=0.05 + jump) == pytest.approx(jump)
    assert clocks.keeper.time() == pytest.approx(before + 0.05)
    assert clocks.keeper.stamp_of(clocks.keeper.time()) == pytest.approx(clocks.stamp), "stamps go with the clock"
    assert clocks.go(0.05) == 0.0, "told once"


def test_a_clock_that_is_slewed_is_followed_without_a_word() -> None:
    """500 parts in a million are the fastest that Linux slews its clock by (from memory: adjtimex)."""
    clocks = Clocks(simulated=False)
    for _ in range(20_000):
        assert clocks.go(0.05, by_stamp=0.05 * (1.0 + 5e-4)) == 0.0
    assert clocks.keeper.stamp_of(clocks.keeper.time()) == pytest.approx(clocks.stamp, abs=1e-3)


def test_a_simulated_clock_that_is_waited_for_and_runs_fast_has_not_jumped() -> None:
    clocks = Clocks(simulated=True)
    assert clocks.keeper.time() == 0.0
    assert clocks.go(3.0, by_stamp=1.7e9) == 0.0, "its beginning"
    assert clocks.go(0.05, by_stamp=1.0) == 0.0, "twenty times as fast"
    assert clocks.go(60.0, by_stamp=0.0) == 0.0, "paused"
    for _ in range(10):
        assert clocks.go(0.2, by_stamp=0.0) == 0.0
    assert clocks.go(0.01, by_stamp=4.0) == 0.0, "whoever sends it was held up, and is again where it should be"
    assert clocks.go(0.05, by_stamp=-0.04) == 0.0, "jitter"
    assert clocks.keeper.time() == clocks.stamp


@pytest.mark.parametrize("jump", [3.0, -0.1, -1e9])
def test_a_simulated_clock_that_jumps_is_told(jump: float) -> None:
    clocks = Clocks(simulated=True)
    clocks.go(1.0, by_stamp=2e9)
    assert clocks.go(0.05, by_stamp=jump) == pytest.approx(jump)
    assert clocks.keeper.time() == clocks.stamp


def test_robots_that_say_no_and_robots_that_say_nothing() -> None:
    now = [0.0]
    readiness = Readiness({"a": 1.0, "b": 2.0}, lambda: now[0])
    assert readiness.silent() == {"a", "b"}, "never heard"
    readiness.say("a", True)
    readiness.say("b", False)
    assert (readiness.silent(), readiness.not_ready()) == (frozenset(), {"b"})
    now[0] = 1.5
    assert (readiness.silent(), readiness.not_ready()) == ({"a"}, {"b"})
    readiness.say("a", True)
    readiness.say("b", True)
    assert readiness.silent() | readiness.not_ready() == frozenset()


def test_another_planner_is_heard_while_it_beats() -> None:
    now = [0.0]
    own = Beat("yard", "1", "/planner", frozenset({"/a/cmd_vel", "/b/cmd_vel"}))
    others = OtherPlanners(own, lambda: now[0])
    others.hear(own)
    others.hear(Beat("yard", "2", "/north/planner", frozenset({"/north/a/cmd_vel"})))
    others.hear(Beat("elsewhere", "3"))
    assert others.newest == "", "itself, one of other robots, one of another fleet"
    others.hear(Beat("of another name", "4", "/second", frozenset({"/b/cmd_vel"})))
    assert "/second" in others.newest
    now[0] = 0.9
    others.hear(Beat("yard", "5"))
    assert "run 5" in others.newest
    now[0] = 1.1
    assert "run 5" in others.newest
    now[0] = 2.0
    assert others.newest == ""


def test_so_many_invented_planners_fill_no_memory() -> None:
    others = OtherPlanners(Beat("yard", "own"), lambda: 0.0)
    for run in range(10_000):
        others.hear(Beat("yard", str(run)))
    assert len(others._heard) < 100


def test_a_burst_is_let_through_and_a_flood_is_not() -> None:
    now = [0.0]
    allowance = Allowance(20, 2.0, lambda: now[0])
    assert [allowance.take() for _ in range(25)] == [True] * 20 + [False] * 5
    now[0] = 1.0
    assert [allowance.take() for _ in range(4)] == [True, True, False, False]
    now[0] = 1000.0
    assert sum(allowance.take() for _ in range(100)) == 20
