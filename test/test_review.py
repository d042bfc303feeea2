# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a review finds in recordings of which everything is known: ours, other software's, and a real one."""

import json
import math
from inspect import signature

import attrs
import numpy as np
import pytest
from foreign_bags import EPOCH, ForeignBag, corner
from made_up_run import standing, turn
from typer.testing import CliRunner

from coord_planner import config
from coord_planner.cli import app
from coord_planner.record import bag_messages as messages
from coord_planner.record.bag_write import write_bag
from coord_planner.record.metrics import summary
from coord_planner.record.page import data
from coord_planner.record.review import review

TIMES = np.arange(0.0, 20.0, 0.05)


# Before click 8.2 the two outputs were mixed unless asked otherwise.
APART = {"mix_stderr": False} if "mix_stderr" in signature(CliRunner.__init__).parameters else {}


def command(*arguments):
    return CliRunner(**APART).invoke(app, [str(argument) for argument in arguments])


def abreast(bag, count=3, *, later=0.0, spacing=3.0, noise=(0.0, 0.0), times=TIMES, **how):
    """Carts side by side that turn left, each ``later`` seconds after the one to its left; cart_0 is the leftmost."""
    rng = np.random.default_rng(7)
    for k in range(count):
        poses, speeds, rates = corner(times, begins=5.0 + later * k)
        poses = poses + [0.0, -spacing * k, 0.0]
        poses = poses + rng.normal(0.0, 1.0, poses.shape) * [noise[0], noise[0], noise[1]]
        own = {key: value[k] if isinstance(value, list) else value for key, value in how.items()}
        told = {"speeds": speeds, "rates": rates} if own.pop("twist", True) else {}
        bag.poses(own.pop("topic", "/cart_{}/odom").format(k), times, poses, **told, **own)
    return bag


# ---- our own recordings -------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def rehearsal(tmp_path_factory):
    """Two mowers of the example site through a corner: the run's own figures, and those of its recording."""
    from coord_planner.trial.rehearsal import rehearse

    whole = config.load("config/solar_park.yaml")
    flat = {key: value for key, value in whole.flat.items() if not key.startswith(("manoeuvres.led", "manoeuvres.to_"))}
    flat |= {"robots.names": ["mower_1", "mower_2"], "graph.edges": ["mower_1 mower_2"],
             "manoeuvres.names": ["corner_left"]}
    flat = {key: value for key, value in flat.items()
            if not key.startswith("robots.mower_") or key.split(".")[1] in ("mower_1", "mower_2")}
    configuration = config.from_parameters(flat, "two of them")
    run = rehearse(configuration, "corner_left", seed=3)
    folder = tmp_path_factory.mktemp("rehearsal") / "bag"
    write_bag(run, folder, frame=configuration.frame, parameters=configuration.flat)
    return summary(run), review(folder).figures


def test_a_rehearsal_reviewed_gives_its_own_figures(rehearsal):
    own, seen = rehearsal
    (found,) = seen["turns"]
    for name in ("mower_1", "mower_2"):
        assert found["onset_s"][name] == pytest.approx(own["turn_onset_s"][name], abs=0.05)  # half a tick
        assert found["heading_change_rad"][name] == pytest.approx(own["heading_change_rad"][name],
                                                                  abs=math.radians(0.1))
    assert found["min_clearance_m"] == pytest.approx(own["min_clearance_m"], abs=1e-3)
    assert seen["commands_outside_limits"] == own["limit_violations"] == 0
    assert seen["contacts"] == own["contacts"]
    assert seen["messages_read"] == seen["messages_expected"] and seen["losses"] == [] and seen["notes"] == []


def test_a_graph_that_changes_is_shown_as_it_was_at_each_moment(tmp_path):
    """A link is lost from 3 to 6 s after the motion has begun, and comes back."""
    from coord_planner.trial.faults import Fault
    from coord_planner.trial.rehearsal import rehearse

    site = config.load("config/solar_park.yaml")
    site = config.from_parameters({**site.flat, "coupling.may_split": True})
    fault = Fault("link_lost", "", 3.0, 6.0, edge=("mower_3", "mower_4"))
    run = rehearse(site, "corner_left", seed=1, faults=[fault])
    whole, lost = set(run.edges), {("mower_3", "mower_4", 1.0)}
    assert [set(edges) for _, edges in run.edge_changes] == [whole - lost, whole]
    assert run.edge_changes[0][0] == pytest.approx(run.began + 3.0, abs=0.2)
    write_bag(run, tmp_path / "bag")
    again = review(tmp_path / "bag").record.run
    assert [set(edges) for _, edges in again.edge_changes] == [set(edges) for _, edges in run.edge_changes]
    begun = run.edge_changes[0][0] - run.times[0]
    assert again.edge_changes[0][0] - again.times[0] == pytest.approx(begun, abs=0.06)
    shown = data(again)["edge_changes"]
    assert len(shown) == len(run.edge_changes) and len(shown[0][1]) == len(run.edges) - 1


def test_limits_and_plans_of_a_rehearsal(rehearsal):
    _, seen = rehearsal
    assert all(0.0 < row["used"] < 1.02 for row in seen["limits"]), "what was driven kept the limits"
    driven = seen["planned_against_driven"]["mower_1"]
    assert driven["plans"] > 30
    assert 0.0 < driven["error_m"]["1"] < 0.1 and driven["beside_max_m"] < 0.1


def test_warnings_ends_and_spread_of_a_recorded_run(tmp_path):
    run = turn(later=0.3, slowed="mower_3")
    write_bag(run, tmp_path / "bag")
    own, found = summary(run), review(tmp_path / "bag")
    (first,) = found.figures["turns"]
    assert first["first"] == "mower_1" and first["hops"]["mower_6"] == 5
    onsets = {name: onset - 0.0 for name, onset in first["onset_s"].items()}
    assert onsets == {name: pytest.approx(own["turn_onset_s"][name], abs=0.05) for name in onsets}
    assert first["spread"]["hops_per_s"] == pytest.approx(1 / 0.3, rel=0.03)
    assert first["spread"]["m_per_s"] == pytest.approx(2.5 / 0.3, rel=0.03)
    assert [row["hop"] for row in first["by_hop"]] == list(range(6))
    assert first["share_of_origin"]["mower_1"] == pytest.approx(1.0)
    keys = ("code", "robot", "text")
    assert [{key: warning[key] for key in keys} for warning in found.figures["warnings"]] == [
        {key: warning[key] for key in keys} for warning in own["warnings"]]
    assert found.figures["warnings"][0]["first_s"] == pytest.approx(own["warnings"][0]["first_s"], abs=1e-3)
    assert found.record.run.end_poses == pytest.approx(run.end_poses)


def test_shares_of_robots_that_copy(tmp_path):
    """Each turns with half of the turn rate of the one before it: a copying law with that fraction."""
    run = turn(count=3, later=0.0)
    curvatures = run.curvatures[:1] * np.array([[1.0], [0.5], [0.25]])
    rates = run.speeds * curvatures
    headings = np.cumsum(rates, axis=1) * 0.05
    way = np.cumsum(run.speeds[..., None] * np.stack([np.cos(headings), np.sin(headings)], axis=-1), axis=1) * 0.05
    poses = np.concatenate([way + np.array([[[0, 0]], [[0, -9]], [[0, -18]]]), headings[..., None]], axis=2)
    ends = np.full((3, 3), np.nan)
    ends[0] = poses[0, -1]
    write_bag(attrs.evolve(run, poses=poses, curvatures=curvatures, end_poses=ends, cautions=()), tmp_path / "bag")
    (found,) = review(tmp_path / "bag").figures["turns"]
    assert found["hops_from"] == "mower_1" and found["hops_from_because"].startswith("alone was given an end")
    assert list(found["share_of_origin"].values()) == pytest.approx([1.0, 0.5, 0.25], abs=0.01)
    assert found["spread"] is None, "they turn at the same time: nothing spreads"


# ---- recordings of other software ---------------------------------------------------------------------------


@pytest.mark.parametrize("plugin", ["mcap", "sqlite3"])
def test_a_foreign_recording_of_noisy_odometry(tmp_path, plugin):
    folder = abreast(ForeignBag(), later=0.8, noise=(0.01, 0.005), twist=False).write(tmp_path / "bag", plugin)
    figures = review(folder).figures
    robot = figures["robots"]["cart_0"]
    assert robot["poses_from"] == "/cart_0/odom" and robot["rates_from"] == "poses" and robot["smoothing_s"] > 0.2
    (found,) = figures["turns"]
    for k in range(3):
        # five deviations of the noise are more than the tenth of the linear ramp of 1 s
        assert found["onset_s"][f"cart_{k}"] == pytest.approx(5.0 + 5 * robot["rate_sd_rad_per_s"] / 0.25 + 0.8 * k,
                                                              abs=0.2)
        assert found["heading_change_rad"][f"cart_{k}"] == pytest.approx(math.pi / 2, abs=0.03)
        assert found["amplitude_rad_per_s"][f"cart_{k}"] == pytest.approx(0.25, abs=0.05)
    assert found["first"] == "cart_0" and found["hops"] is None and found["spread"] is None
    assert figures["clearance_between"] == "reported points" and figures["contacts"] is None


def test_a_twist_that_agrees_is_taken_and_one_that_is_empty_is_not(tmp_path):
    bag = abreast(ForeignBag(), 2, twist=[True, False])
    figures = review(bag.write(tmp_path / "bag")).figures
    assert [figures["robots"][f"cart_{k}"]["rates_from"] for k in (0, 1)] == ["twist", "poses"]
    onsets = figures["turns"][0]["onset_s"]
    assert onsets["cart_0"] == pytest.approx(5.1, abs=1e-3) and onsets["cart_1"] == pytest.approx(5.1, abs=0.05)


def test_positions_without_orientation_on_uneven_stamps(tmp_path):
    """The way's shape gives the curvature, although stamps are rounded to whole seconds, as by many trackers."""
    rng = np.random.default_rng(3)
    true = np.cumsum(rng.uniform(0.8, 1.25, 120))
    poses, *_ = corner(true, speed=8.0, radius=50.0, begins=40.0, ramp=2.0)
    poses[:, :2] += rng.normal(0.0, 0.5, (120, 2))
    poses[:, 2] = 0.0
    bag = ForeignBag()
    stamps, first = np.unique(np.round(true), return_index=True)
    bag.poses("/plane/position", stamps, poses[first], kind="pose")
    figures = review(bag.write(tmp_path / "bag")).figures
    robot = figures["robots"]["plane"]
    assert robot["headings_from"] == "path" and "shape of the way" in robot["motion"]
    (found,) = figures["turns"]
    assert found["heading_change_rad"]["plane"] == pytest.approx(math.pi / 2, abs=0.1)
    curvature = next(row for row in figures["limits"] if row["limit"] == "max_curvature")
    assert curvature["value"] == pytest.approx(1 / 50, abs=3.0 * robot["rate_sd_rad_per_s"] / 8.0)


def test_transforms_are_followed_to_their_root(tmp_path):
    bag, times = ForeignBag(), TIMES
    for k in range(2):
        poses, *_ = corner(times)
        # the localisation shifts and turns the odometry's frame: map -> odom -> base
        bag.transforms("map", f"cart_{k}/odom", [0.0], [(2.0, -4.0 * k, math.pi / 2)], topic="/tf_static")
        bag.transforms(f"cart_{k}/odom", f"cart_{k}/base_link", times, poses)
        bag.transforms(f"cart_{k}/base_link", f"cart_{k}/laser", [0.0], [(0.3, 0.0, 0.0)], topic="/tf_static")
    found = review(bag.write(tmp_path / "bag"))
    assert found.figures["robots"]["cart_1"]["poses_from"] == "tf:cart_1/base_link"
    x, y, heading = found.record.run.poses[1, 0]
    assert (x, y, heading) == pytest.approx((2.0, -4.0, math.pi / 2), abs=1e-3)
    assert found.figures["turns"][0]["heading_change_rad"]["cart_1"] == pytest.approx(math.pi / 2, abs=0.01)


def test_the_guess_can_be_corrected(tmp_path):
    bag = abreast(ForeignBag(), 2)
    abreast(bag, 2, topic="/cart_{}/localised_pose", kind="pose", twist=False)
    folder = bag.write(tmp_path / "bag")
    assert review(folder).figures["robots"]["cart_1"]["not_taken"] == ["/cart_1/localised_pose"]
    done = command("review", folder, "--json", "--robot", "left=/cart_0/localised_pose")
    assert done.exit_code == 0, done.output
    assert json.loads(done.stdout)["robots"]["left"]["poses_from"] == "/cart_0/localised_pose"
    wrong = command("review", folder, "--robot", "left=/cart_7/odom")
    assert wrong.exit_code == 2 and "/cart_0/odom" in wrong.stderr


def test_own_odometry_frames_are_no_common_ground(tmp_path):
    bag = abreast(ForeignBag(), 2, frame=["cart_0/odom", "cart_1/odom"])
    assert any("distances between them mean nothing" in note
               for note in review(bag.write(tmp_path / "one")).figures["notes"])
    abreast(bag, 2, topic="/cart_{}/pose", kind="pose", twist=False)
    figures = review(bag.write(tmp_path / "two")).figures
    assert figures["robots"]["cart_0"]["poses_from"] == "/cart_0/pose", "poses in a common frame are preferred"
    assert figures["notes"][0].startswith("no footprints")


def test_diagnostics_of_any_robot_are_warnings(tmp_path):
    bag = abreast(ForeignBag(), 2)
    for second in range(4, 9):
        low = messages.status("battery: cart_1", "cart_1", 1, "21 % left", {})
        head = messages.header("", EPOCH + second * 10**9)
        bag.add(float(second), "/diagnostics", messages.diagnostics(head, [low]))
    (warning,) = review(bag.write(tmp_path / "bag")).figures["warnings"]
    assert (warning["robot"], warning["text"]) == ("cart_1", "21 % left")
    assert (warning["first_s"], warning["last_s"]) == pytest.approx((4.0, 8.0), abs=0.02)


# ---- clocks, gaps, stops ------------------------------------------------------------------------------------


def test_lateness_is_told_and_does_not_shift_anything(tmp_path):
    bag = abreast(ForeignBag(), 2, late=[np.full(len(TIMES), 0.02), np.where(TIMES > 10.0, 1.5, 0.02)])
    figures = review(bag.write(tmp_path / "bag")).figures
    assert figures["lateness"]["cart_0"]["poses"]["late_max_s"] == pytest.approx(0.02, abs=1e-6)
    assert figures["lateness"]["cart_1"]["poses"]["late_max_s"] == pytest.approx(1.5, abs=1e-6)
    onsets = figures["turns"][0]["onset_s"]
    assert onsets["cart_0"] == pytest.approx(onsets["cart_1"], abs=1e-6)


def test_a_robot_with_another_clock_is_placed_by_receipt(tmp_path):
    bag = abreast(ForeignBag(), 3, offset=[0.0, 0.0, 3600.0])
    figures = review(bag.write(tmp_path / "bag")).figures
    assert any("/cart_2/odom is stamped by a clock that is +3600.0 s beside" in note for note in figures["notes"])
    assert figures["lateness"]["cart_2"]["poses"]["late_median_s"] is None
    onsets = figures["turns"][0]["onset_s"]
    assert onsets["cart_2"] == pytest.approx(onsets["cart_0"], abs=0.03)


def test_simulated_time_that_runs_at_another_pace(tmp_path):
    """Stamps from a simulation that runs at twice real time: what happened is told in its time."""
    bag = ForeignBag()
    for k in range(2):
        poses, speeds, rates = corner(TIMES)
        bag.poses(f"/cart_{k}/odom", TIMES, poses + [0, 3.0 * k, 0], late=-TIMES / 2, offset=-1.6e9, speeds=speeds,
                  rates=rates)
    figures = review(bag.write(tmp_path / "bag")).figures
    assert figures["turns"][0]["onset_s"]["cart_0"] == pytest.approx(5.1, abs=0.3)
    assert figures["turns"][0]["heading_change_rad"]["cart_0"] == pytest.approx(math.pi / 2, abs=0.01)
    assert not any("jump" in note for note in figures["notes"])


def test_time_that_jumps_back_is_split_and_not_smeared(tmp_path):
    """A simulation is begun anew in the middle of the recording."""
    bag = ForeignBag()
    for k in range(2):
        poses, speeds, rates = corner(TIMES)
        for again in (0.0, 20.0):
            bag.poses(f"/cart_{k}/odom", TIMES + again, poses + [0, 3.0 * k, 0], offset=-again, speeds=speeds,
                      rates=rates)
    found = review(bag.write(tmp_path / "bag"))
    first, second = found.figures["turns"]
    assert second["onset_s"]["cart_0"] - first["onset_s"]["cart_0"] == pytest.approx(20.0, abs=1.1)
    for one in (first, second):
        assert one["heading_change_rad"]["cart_1"] == pytest.approx(math.pi / 2, abs=0.01)
    assert any("jumped by -20.0 s" in note for note in found.figures["notes"])
    assert np.abs(found.record.run.speeds[np.isfinite(found.record.run.speeds)]).max() < 1.01


def test_a_topic_that_pauses_and_one_that_stops(tmp_path):
    bag = ForeignBag()
    poses, speeds, rates = corner(TIMES)
    heard = [(TIMES < 6.0) | (TIMES > 9.0), TIMES < 12.0]
    for k, kept in enumerate(heard):
        bag.poses(f"/cart_{k}/odom", TIMES[kept], poses[kept] + [0, 3.0 * k, 0], speeds=speeds[kept], rates=rates[kept])
    found = review(bag.write(tmp_path / "bag"))
    gaps = [(gap["robot"], round(gap["from_s"]), round(gap["to_s"])) for gap in found.figures["gaps"]]
    assert gaps == [("cart_0", 6, 9), ("cart_1", 12, 20)]
    run = found.record.run
    assert np.isnan(run.poses[0, (run.times > 6.2) & (run.times < 8.8)]).all(), "nothing is made up within a gap"


def test_stops_between_drives(tmp_path):
    bag = ForeignBag()
    poses, _, rates = corner(TIMES)
    pause = np.where((TIMES > 12.0) & (TIMES < 15.0), 0.0, 1.0)
    way = np.concatenate([[0.0], np.cumsum(pause[:-1]) * 0.05])
    bag.poses("/cart/odom", TIMES, np.column_stack([way, 0 * way, 0 * way]), speeds=pause + 1e-12)
    (stop,) = review(bag.write(tmp_path / "bag")).figures["stops"]
    assert stop["robot"] is None and stop["to_s"] - stop["from_s"] == pytest.approx(3.0, abs=0.5)


# ---- the command --------------------------------------------------------------------------------------------


def test_exit_status_tells_whether_everything_was_read(tmp_path):
    folder = abreast(ForeignBag(), 2).write(tmp_path / "bag")
    assert command("review", folder).exit_code == 0
    (folder / "metadata.yaml").unlink()
    damaged = command("review", folder, "--json")
    assert damaged.exit_code == 1 and "is not whole" in damaged.stderr
    assert json.loads(damaged.stdout)["losses"]
    assert command("review", tmp_path / "nowhere").exit_code == 2
    assert command("review", folder, "--from", 5, "--to", 4).exit_code == 2
    assert command("review", folder, folder, folder).exit_code == 2


def test_nothing_to_follow_is_said_with_what_is_there(tmp_path):
    bag = ForeignBag()
    bag.add(1.0, "/chatter", messages.text("hello"))
    done = command("review", bag.write(tmp_path / "bag"))
    assert done.exit_code == 2 and "/chatter (std_msgs/msg/String)" in done.stderr


def test_promised_keys_and_plain_values(tmp_path):
    figures = json.loads(command("review", abreast(ForeignBag(), 2).write(tmp_path / "bag"), "--json").stdout)
    assert {"robots", "turns", "limits", "gaps", "warnings", "messages_read", "messages_expected"} <= set(figures)
    assert {"from_s", "to_s", "onset_s", "heading_change_rad", "min_clearance_m", "min_clearance_pair"} <= set(
        figures["turns"][0])


def test_parameters_give_footprints_limits_and_the_point_that_turns(tmp_path):
    """The ploughs' poses mean points between their axles or on the rear one; lengths as in the example file."""
    params = config.load("config/snow_yard.yaml")
    bag = ForeignBag()
    poses, *_ = corner(TIMES, radius=9.0)
    for k, name in enumerate(("plough_1", "plough_3")):
        at = np.array([params.connections[name].reported_pose(*pose) for pose in poses + [0, -6.0 * k, 0]])
        bag.poses(f"/{name}/pose", TIMES, at, kind="pose")
    folder = bag.write(tmp_path / "bag")
    figures = json.loads(command("review", folder, "--json", "--params", "config/snow_yard.yaml").stdout)
    assert list(figures["robots"]) == ["plough_1", "plough_3"] and figures["clearance_between"] == "footprints"
    # straight on abreast: 6 m less half of each width, 2.5 and 2.2 m
    assert figures["min_clearance_m"] <= 6.0 - 1.25 - 1.1
    for row in figures["limits"]:
        if row["limit"] == "max_curvature":
            assert row["value"] == pytest.approx(1 / 9, rel=0.02)
            assert row["allowed"] == pytest.approx(params.fleet.limit("max_curvature")[
                params.fleet.index(row["robot"])])
    none = command("review", folder, "--params", "config/solar_park.yaml")
    assert none.exit_code == 2 and "none of its robots" in none.stderr


def test_two_recordings_side_by_side(tmp_path):
    before = abreast(ForeignBag(), 3, later=0.6).write(tmp_path / "before")
    after = abreast(ForeignBag(), 3, later=0.2).write(tmp_path / "after")
    both = json.loads(command("review", before, after, "--json").stdout)
    assert set(both) == {"first", "second", "differences", "notes"}
    lag = next(row for row in both["differences"] if "last onset" in row["figure"])
    assert (lag["first"], lag["second"], lag["change"]) == pytest.approx((1.2, 0.4, -0.8), abs=0.01)
    words = command("review", before, after).stdout
    assert "Compared" in words and "last onset after the first" in words


def test_robots_that_only_stand(tmp_path):
    write_bag(standing([[0, 0, 0], [0, 3, 0]], count=50), tmp_path / "bag")
    figures = review(tmp_path / "bag").figures
    assert figures["turns"] == [] and figures["min_clearance_m"] == pytest.approx(3.0)


def test_a_long_recording_of_many_turns(tmp_path):
    run = turn(count=2, seconds=16.0)
    twice = attrs.evolve(run, times=np.concatenate([run.times, run.times + 16.0]),
                         poses=np.concatenate([run.poses, run.poses + run.poses[:, -1:] - run.poses[:, :1]], axis=1),
                         speeds=np.tile(run.speeds, 2), curvatures=np.tile(run.curvatures, 2))
    write_bag(twice, tmp_path / "bag")
    assert len(review(tmp_path / "bag").figures["turns"]) == 2
    assert len(review(tmp_path / "bag", from_s=16.0).figures["turns"]) == 1
