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
from coord_planner.trial.rehearsal import rehearse

YARD = """\
/**:
  ros__parameters:
    robots:
      names: [a, b, c]
      a: {start_x: 0.0, start_y: 5.0}
      b: {start_x: 0.0, start_y: 2.5}
      c: {start_x: 0.0, start_y: 0.0}
    graph:
      edges: ["a b", "b c"]
    coupling: {strength: 2.0}
    horizon: {intervals: 12}
    site_rules: {min_clearance: 0.8}
    manoeuvres:
      names: [corner, aside]
      corner: {kind: equal_radius, angle_deg: 90.0, radius: 5.0, speed: 1.0}
      aside: {kind: to_ends, ends_deg: ["a pose 12 6.5 0", "b pose 12 4 0", "c pose 12 1.5 0"], speed: 1.0}
"""
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
    good = campaign.Result(case, 0, False, 1.6, 0, "held", (0.1,), (True,), (0.5,))
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
    """No contact, no command outside a limit, a defined end, and every warning that is owed comes in time.

    ``make campaign`` plays 500 of them over all sites.
    """
    result = campaign.play(case)
    assert result.contacts == 0 and result.kept, result


@pytest.mark.parametrize("kind", KINDS)
def test_four_more_of_each_kind_on_a_small_yard_break_nothing(kind: str, tmp_path: Path) -> None:
    """With the dozen above 60 in all; three robots, so that a rehearsal takes a second."""
    file = tmp_path / "yard.yaml"
    file.write_text(YARD, encoding="utf-8")
    drawn = [case for case in campaign.cases([str(file)], 48, 3) if case.faults[0].kind == kind]
    assert len(drawn) == 4
    for case in drawn:
        result = campaign.play(case)
        assert result.contacts == 0 and result.kept, result


@pytest.mark.parametrize("seed", range(10))
def test_without_faults_nothing_is_warned_of(seed: int, tmp_path: Path) -> None:
    """``test/measure_calm.py`` looks at every manoeuvre of every site."""
    file = tmp_path / "yard.yaml"
    file.write_text(YARD, encoding="utf-8")
    for manoeuvre in ("corner", "aside"):
        run = rehearse(config.load(file), manoeuvre, seed=seed)
        assert run.completed and [caution for *_, caution in run.cautions if caution.code != "plan unfinished"] == []


def test_poses_two_and_a_half_times_as_noisy_as_the_file_says_stop_nobody() -> None:
    """5 cm; taken for slow machines they once had the fleet stopped for a free way that was predicted short."""
    flat = {**config.load(SITES[0]).flat, "simulation.pose_noise_xy": 0.05}
    run = rehearse(config.from_parameters(flat), "corner_left", seed=1)
    assert run.completed and not [text for _, text in run.events if text.startswith("stopping")]


def test_lost_commands_count_from_when_the_machine_misses_them() -> None:
    configuration = config.load(SITES[1])
    timeout = configuration.connections["plough_1"].command_timeout
    run = turn(2, later=0.0)
    assert campaign._hidden(Fault("command_lost", "plough_1", 2.0, 4.0), configuration, run) == timeout > 0.0
    assert campaign._hidden(Fault("robot_stuck", "plough_1", 2.0, 4.0), configuration, run) == 0.0


def test_late_commands_count_from_when_the_machine_moves_otherwise() -> None:
    """Told from 10 s on to turn, the first one turns from 10.4 s on; the second one is not told anything else."""
    run, configuration = turn(2, later=0.0), config.load(SITES[0])
    times, told, bends = 0.05 * np.arange(400), np.zeros((2, 400, 2)), np.zeros((2, 400))
    told[:, :, 0] = 1.0
    told[0, 200:, 1] = bends[0, 208:] = 0.25
    run = attrs.evolve(run, times=times, command_times=times, commanded=told, began=0.0,
                       speeds=np.ones((2, 400)), curvatures=bends)
    late = Fault("command_delay", "mower_1", 8.0, 14.0, 0.4)
    assert campaign._hidden(late, configuration, run) == np.inf  # 0.4 s are over before a warning is due
    slow = attrs.evolve(run, curvatures=np.where(times < 11.0, 0.0, bends))
    lag = configuration.fleet.robots[0].response
    at = campaign._hidden(late, configuration, slow)
    # a lag of first order reaches 0.1 of 0.25 rad/s after lag * ln(0.25 / 0.15)
    expected = 2.0 + lag.command_delay + lag.curvature_lag * np.log(0.25 / 0.15)
    assert at == pytest.approx(expected, abs=0.06)
    assert campaign._hidden(attrs.evolve(late, robot="mower_2"), configuration, slow) == np.inf
    braked = attrs.evolve(run, speeds=np.where((times > 8.8) & (times < 9.6), 0.5, np.ones((2, 400))))
    assert campaign._hidden(attrs.evolve(late, value=1.6), configuration, braked) == 0.5  # its time-out
    assert "round_corner" not in campaign.begun_from_starts(config.load(Path(SITES[0]).with_name("orchard.yaml")))


def test_a_frozen_pose_counts_from_when_its_robot_has_moved() -> None:
    run = turn(2, later=0.0)
    fault = Fault("pose_frozen", "mower_1", 2.0, 4.0)
    configuration = config.load(SITES[0])
    assert campaign._hidden(fault, configuration, run) == pytest.approx(0.1, abs=0.06)
    still = attrs.evolve(run, poses=np.zeros_like(run.poses))
    assert campaign._hidden(fault, configuration, still) == np.inf


def test_only_a_warning_of_the_robot_that_was_struck_counts() -> None:
    assert campaign._names("mower_1", "mower_1") and campaign._names("mower_3 and mower_1", "mower_1")
    assert campaign._names("", "") and not campaign._names("mower_2", "mower_1")
