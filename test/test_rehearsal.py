# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Closed-loop rehearsals of the example site: what the shipped file promises, seed by seed."""

from pathlib import Path

import numpy as np
import pytest
import sites

from coord_planner import config
from coord_planner.core import manoeuvre, reference
from coord_planner.core.fleet import Fleet
from coord_planner.core.problem import POSE
from coord_planner.errors import RefusedError
from coord_planner.record.metrics import summary
from coord_planner.trial.faults import Fault
from coord_planner.trial.rehearsal import rehearse

SITE = Path(__file__).parent.parent / "config" / "solar_park.yaml"
SLOWED = Fault("robot_slow", "mower_3", 4.0, 7.0, 0.3)


@pytest.fixture(scope="module")
def site():
    return config.load(SITE)


def perfect(configuration):
    """The same site with machines that answer at once, seen without noise."""
    flat = dict(configuration.flat)
    for key in ("pose_noise_xy", "pose_noise_heading_deg", "pose_delay"):
        flat[f"simulation.{key}"] = 0.0
    for key in ("speed_lag", "curvature_lag", "command_delay"):
        flat[f"robot_defaults.{key}"], flat[f"simulation.{key}"] = 0.0, -1.0
    return config.from_parameters(flat)


def plan_of(configuration, name):
    """The undisturbed plan of a manoeuvre from the starts in the file."""
    settings, fleet, graph = configuration.settings, configuration.fleet, configuration.graph
    poses = np.array([configuration.starts[robot] for robot in fleet.names])
    task = manoeuvre.work_out(name, configuration.manoeuvres[name], fleet, settings, poses, 0.0, graph.hops())
    states = np.concatenate([poses, np.zeros((len(fleet), 4))], axis=1)
    return reference.make(task, fleet, graph, settings, states)


@pytest.mark.parametrize("faults", [(), (SLOWED,)], ids=["sound", "mower_3 slowed to 30 %"])
def test_the_corner_is_turned_as_promised(site, faults):
    run = rehearse(site, "corner_left", seed=1, faults=faults)
    figures = summary(run)
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert max(figures["end_error_m"].values()) <= 0.10
    assert np.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0
    assert figures["min_clearance_m"] >= site.settings.site_rules.min_clearance
    if faults:  # it did matter: the group waited
        assert figures["duration_s"] > 1.05 * plan_of(site, "corner_left").end
        assert "robot not following" in {warning["code"] for warning in figures["warnings"]}


def test_the_turn_must_mind_the_sites_smallest_clearance(site):
    allowed = site.settings.site_rules.min_clearance
    assert allowed <= plan_of(site, "corner_left").clearance <= allowed + 0.3


def test_coupling_makes_the_led_turn(site):
    """Without it nobody copies; with the shipped value everybody ends within 5 degrees of the led robot."""
    alone = plan_of(config.changed(site, {"coupling.strength": 0.0}), "led_left").plan.poses
    assert np.degrees(alone[:, -1, 2]) == pytest.approx([90.0, 0.0, 0.0, 0.0, 0.0, 0.0], abs=0.5)
    figures = summary(rehearse(site, "led_left", seed=1))
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    together = np.degrees(list(figures["heading_change_rad"].values()))
    assert together[0] == pytest.approx(90.0, abs=3.0) and np.abs(together - together[0]).max() < 5.0


def test_without_lag_delay_and_noise_the_reference_is_driven_to_a_centimetre(site):
    run = rehearse(perfect(site), "corner_left", seed=1)
    made = plan_of(perfect(site), "corner_left")
    driven = run.poses[:, :, :2]
    curve = made.states(np.linspace(0.0, made.end, 4001))[:, :, POSE][:, :, :2]
    for k in range(len(run.fleet)):
        off = np.linalg.norm(driven[k, :, None] - curve[k, None, ::4], axis=2).min(axis=1)
        assert off.max() < 0.01
    figures = summary(run)
    assert max(figures["end_error_m"].values()) < 0.01 and not figures["warnings"]
    assert figures["min_clearance_m"] == pytest.approx(made.clearance, abs=0.01)


def test_the_same_seed_has_the_same_figures(site):
    """Two robots of the same site, for speed."""
    small = config.from_parameters(_only(site, ["mower_1", "mower_2"]))
    runs = [rehearse(small, "corner_left", seed=seed) for seed in (3, 3)]
    assert np.array_equal(runs[0].poses, runs[1].poses) and np.array_equal(runs[0].commanded, runs[1].commanded)
    figures = [{key: value for key, value in summary(run).items() if key not in ("tick_ms", "real_time_factor")}
               for run in runs]
    assert figures[0] == figures[1]


def _only(configuration, names):
    """The flat parameters without the other robots."""
    flat = {
        key: value for key, value in configuration.flat.items()
        if not (key.startswith("robots.mower") and key.split(".")[1] not in names)
    }
    flat["robots.names"] = names
    flat["graph.edges"] = ["mower_1 mower_2"]
    flat["manoeuvres.names"] = ["corner_left"]
    return {key: value for key, value in flat.items() if not key.startswith(("manoeuvres.led", "manoeuvres.to_places"))}


def test_a_manoeuvre_that_is_refused_moves_nothing(site):
    with pytest.raises(RefusedError, match="radius of 1 m"):
        rehearse(site, "corner_left", seed=1, overrides={"radius": 1.0})


def test_a_robot_that_is_not_enabled_joins_on_the_way_and_another_leaves():
    starts = np.array([[0.0, 9.0, 0.0], [0.0, 4.5, 0.0], [0.0, 0.0, 0.0]])
    corner = {"kind": "equal_radius", "angle_deg": 45.0, "radius": 14.0, "speed": 1.0}
    site = sites.site(starts, {"corner": corner}, robots__mower_3__enabled=False)
    done = []

    def watch(coordinator, now):
        for at, names in ((3.0, (0, 1, 2)), (6.0, (1, 2))):
            if now >= at and at not in done:
                fleet = Fleet(tuple(site.fleet.robots[k] for k in names))
                assert coordinator.cannot_join(fleet, site.graph) == ""
                coordinator.change(now, fleet=fleet, graph=site.graph)
                done.append(at)

    run = rehearse(site, "corner", seed=2, watch=watch)
    figures = summary(run)
    assert done == [3.0, 6.0] and run.fleet.names == site.fleet.names
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert np.isnan(run.end_poses[[0, 2]]).all() and figures["end_error_m"]["mower_2"] <= 0.10
    before, joined, left = (int(np.searchsorted(run.times, at)) for at in (3.0, 6.0, 10.0))
    assert np.abs(run.speeds[2, :before]).max() == 0.0 and run.speeds[2, joined] > 0.3
    assert np.abs(run.speeds[0, left:]).max() < 0.01 and run.speeds[1, left] > 0.5
    assert all(frame.poses.shape[0] == 3 for frame in run.frames)


def test_a_robot_that_stays_out_is_no_part_of_the_run():
    starts = np.array([[0.0, 4.5, 0.0], [0.0, 0.0, 0.0]])
    site = sites.site(starts, {"on": {"kind": "equal_radius", "angle_deg": 10.0}}, robots__mower_2__enabled=False)
    run = rehearse(site, "on", seed=1)
    assert run.fleet.names == ("mower_1",) and run.poses.shape[0] == run.commanded.shape[0] == 1 and run.completed
