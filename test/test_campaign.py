# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Faults at random moments: how a campaign draws and judges them, and what hindsight can excuse."""

from __future__ import annotations

from pathlib import Path

import attrs
import numpy as np
import pytest
from made_up_run import turn

from coord_planner import config
from coord_planner.commands import campaign
from coord_planner.trial.faults import KINDS, Fault, check_targets
from coord_planner.trial.hindsight import unavoidable

TOLD_AT_ONCE = ("pose_lost", "pose_jump", "pose_noise", "not_ready", "link_lost", "planner_late", "planner_fails")
SITES = [str(Path(__file__).parent.parent / "config" / name) for name in ("solar_park.yaml", "snow_yard.yaml")]


def test_every_kind_is_drawn_as_often_as_the_others_and_the_same_for_the_same_seed() -> None:
    drawn = list(campaign.cases(SITES, 24, 1))
    assert [case.faults[0].kind for case in drawn] == [*KINDS, *KINDS]
    assert drawn == list(campaign.cases(SITES, 24, 1)) != list(campaign.cases(SITES, 24, 2))
    for case in drawn:
        assert 1 <= len(case.faults) <= 3
        check_targets(case.faults, config.load(case.file).graph)


def test_a_fault_that_stops_a_robot_is_warned_of_and_ends_defined() -> None:
    fault = Fault("not_ready", "plough_2", 3.0, 5.0)
    result = campaign.play(campaign.Case(0, SITES[1], "lead_right", 3, (fault,)))
    assert result.ended == "held" and result.kept
    assert result.owed == (True,) and result.told_after[0] <= 0.2
    assert result.contacts == 0 and result.outside == 0


def test_a_late_warning_a_contact_and_an_open_end_are_not_kept() -> None:
    fault = Fault("not_ready", "plough_2", 3.0, 5.0)
    case = campaign.Case(0, SITES[1], "lead_right", 3, (fault,))
    good = campaign.Result(case, 0, False, 1.6, 0, "held", (0.1,), (True,))
    assert good.kept
    for change in ({"told_after": (0.7,)}, {"contacts": 1}, {"outside": 1}, {"ended": "moving"}):
        assert not attrs.evolve(good, **change).kept
    assert attrs.evolve(good, contacts=1, excused=True).kept
    assert attrs.evolve(good, told_after=(np.inf,), owed=(False,)).kept


@pytest.mark.parametrize("apart, excused", [(5.0, False), (3.2, True)])
def test_hindsight_excuses_only_what_full_braking_could_not_avoid(apart: float, excused: bool) -> None:
    """Head on at 1 m/s each, 1.2 m long, 0.7 s until they brake, 1 m/s^2: v t_r + v^2/(2a) each (checks.md 6)."""
    run = turn(2, later=0.0)
    onset = int(np.searchsorted(run.times, run.began + 4.0))
    assert run.speeds[:, onset] == pytest.approx([1.0, 1.0], abs=0.05)
    poses = run.poses.copy()
    poses[:, onset] = [[0.0, 0.0, 0.0], [apart, 0.0, np.pi]]
    met = attrs.evolve(run, poses=poses, curvatures=np.zeros_like(run.curvatures))
    assert 3.2 < 2 * (0.7 + 0.5) + 1.2 < 5.0
    assert unavoidable(met, (Fault("robot_stuck", "mower_1", 4.0, 6.0),)) is excused


@pytest.mark.parametrize("case", list(campaign.cases(SITES, 12, 7)), ids=lambda case: case.faults[0].kind)
def test_a_dozen_with_every_kind_of_fault_break_nothing(case: campaign.Case) -> None:
    """No contact, no command outside a limit, a defined end, and what the planner is told of is told on in time.

    ``make campaign`` plays 500 of them over all sites, and also counts how soon the others are found out.
    """
    result = campaign.play(case)
    assert result.contacts == 0 and result.outside == 0 and result.ended in ("ended", "held"), result
    for fault, after, owed in zip(case.faults, result.told_after, result.owed):
        if owed and fault.kind in TOLD_AT_ONCE:
            assert after <= 0.5, (fault, after)


def test_lost_commands_count_from_when_the_machine_misses_them() -> None:
    configuration = config.load(SITES[1])
    timeout = configuration.connections["plough_1"].command_timeout
    run = turn(2, later=0.0)
    assert campaign._hidden(Fault("command_lost", "plough_1", 2.0, 4.0), configuration, run) == timeout > 0.0
    assert campaign._hidden(Fault("robot_stuck", "plough_1", 2.0, 4.0), configuration, run) == 0.0


def test_late_commands_count_from_when_they_tell_something_else() -> None:
    run, configuration = turn(2, later=0.0), config.load(SITES[0])
    told = np.zeros((2, 400, 2))
    told[:, :, 0] = 1.0
    told[0, 200:, 1] = 0.25  # from 10 s on it is to turn
    run = attrs.evolve(run, command_times=0.05 * np.arange(400), commanded=told, began=0.0)
    late = Fault("command_delay", "mower_1", 8.0, 14.0, 0.9)
    assert campaign._hidden(late, configuration, run) == pytest.approx(2.0)
    assert campaign._hidden(attrs.evolve(late, robot="mower_2"), configuration, run) == np.inf
    assert "round_corner" not in campaign.begun_from_starts(config.load(Path(SITES[0]).with_name("orchard.yaml")))
