# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where the robots are: from noisy, late and missing poses, and from what they were sent."""

import math
from types import SimpleNamespace

import attrs
import numpy as np
import pytest
from fleets import LATE, PERFECT, abreast, carts, settings

from coord_planner.core import se2
from coord_planner.core.history import CommandHistory
from coord_planner.core.messages import Command, PoseSample
from coord_planner.core.observer import Observer
from coord_planner.core.problem import CURVATURE, CURVATURE_COMMAND, POSE, SPEED, SPEED_COMMAND
from coord_planner.trial.vehicle import SimulatedFleet

PERIOD = 0.05
SPEED_ASKED, CURVATURE_ASKED = 1.0, 0.4


class Watching:
    """Two late machines on a circle, and an observer that sees their poses through noise."""

    def __init__(self, noise_xy=0.02, noise_deg=0.5, pose_delay=0.0, seed=0):
        self.fleet = carts(2, response=LATE)
        noise = {"pose_noise_xy": noise_xy, "pose_noise_heading_deg": noise_deg}
        simulation = PERFECT | noise | {"pose_delay": pose_delay}
        starts = {name: tuple(pose) for name, pose in zip(self.fleet.names, abreast(2))}
        self.machines = SimulatedFleet(
            self.fleet, starts, SimpleNamespace(**simulation), dict.fromkeys(self.fleet.names, 9.0),
            np.random.default_rng(seed),
        )
        self.history = CommandHistory(self.fleet.response("command_delay"), PERIOD)
        self.observer = Observer(self.fleet, settings().poses, self.history)
        self.beats = 0
        self.change = lambda poses: poses  # what a test does to the poses before they are seen

    @property
    def now(self):
        return self.beats * PERIOD

    def run(self, seconds, each=lambda _self: None):
        for _ in range(round(seconds / PERIOD)):
            jumped = self.observer.observe(self.change(self.machines.measure(self.now)), None)
            self.jumped = jumped
            each(self)
            begun = min(0.6 * self.now, 1.0)  # nobody is told to drive at full speed at once
            values = np.array([[begun * SPEED_ASKED, begun * CURVATURE_ASKED]] * 2)
            self.history.add(self.now, values)
            for name in self.fleet.names:
                self.machines.command(name, Command(*values[0]), self.now)
            self.beats += 1
            self.machines.advance(self.now)

    def errors(self):
        """Position (m) and heading (rad) of the estimate against the truth, shapes (2,), (2,)."""
        off = self.observer.estimate(self.now, None).states[:, POSE] - self.machines.poses()
        return np.hypot(off[:, 0], off[:, 1]), np.abs(off[:, 2])


def test_it_converges_to_better_than_the_noise():
    watching, found = Watching(), []
    watching.run(3.0)
    watching.run(10.0, lambda w: found.append(w.errors()))
    positions, headings = np.array(found).transpose(1, 0, 2)
    # one sample is off by 0.02 * sqrt(2) m and 0.5 degrees, root mean square
    assert math.sqrt(np.mean(positions**2)) < 0.6 * 0.02 * math.sqrt(2)
    assert math.sqrt(np.mean(headings**2)) < 0.6 * math.radians(0.5)


def test_without_noise_it_knows_what_the_machine_has_reached():
    watching = Watching(noise_xy=0.0, noise_deg=0.0)
    watching.run(1.2)  # in the middle of its answer, 0.35 s behind what it is told
    estimate = watching.observer.estimate(watching.now, None)
    assert watching.machines.speeds()[0] < 0.6 * 1.2 - 0.15
    # commands are held from one to the next; on average they act half a period later
    assert estimate.states[:, SPEED] == pytest.approx(watching.machines.speeds(), abs=0.02)
    assert estimate.states[:, CURVATURE] == pytest.approx(watching.machines.curvatures(), abs=0.02)
    watching.run(3.0)
    estimate = watching.observer.estimate(watching.now, None)
    assert estimate.states[:, SPEED] == pytest.approx(watching.machines.speeds(), abs=1e-3)
    assert estimate.states[:, [SPEED_COMMAND, CURVATURE_COMMAND]] == pytest.approx(
        np.array([[SPEED_ASKED, CURVATURE_ASKED]] * 2))
    assert max(part.max() for part in watching.errors()) < 0.01


def test_it_looks_ahead_over_lag_and_delay():
    """What it says now about half a second from now comes true."""
    watching = Watching(noise_xy=0.0, noise_deg=0.0)
    watching.run(4.0)
    ahead = watching.observer.estimate(watching.now + 0.5, None).states
    watching.run(0.5)
    assert ahead[:, POSE] == pytest.approx(watching.machines.poses(), abs=0.01)


def test_late_poses_are_carried_to_now():
    watching = Watching(noise_xy=0.0, noise_deg=0.0, pose_delay=0.2)
    watching.run(5.0)
    assert watching.errors()[0].max() < 0.02  # 0.2 m were driven since the pose
    assert watching.observer.estimate(watching.now, None).age == pytest.approx([0.25] * 2)


def test_headings_are_unwrapped_over_full_turns():
    watching = Watching()
    watching.run(20.0)  # 1 m/s at 0.4 1/m: more than one turn
    truth = watching.machines.poses()[:, 2]
    assert truth.min() > 2 * math.pi
    assert watching.observer.estimate(watching.now, None).states[:, 2] == pytest.approx(truth, abs=0.05)


def test_a_jump_is_told_and_the_robot_starts_afresh_where_it_is():
    watching, told = Watching(), []
    watching.run(3.0)
    watching.change = lambda poses: poses | {"cart_1": attrs.evolve(poses["cart_1"], x=poses["cart_1"].x + 2.0)}
    watching.run(0.5, lambda w: told.append(w.jumped))
    assert told[0] == ("cart_1",) and not any(told[1:])
    states = watching.observer.estimate(watching.now, None).states
    assert states[0, 0] == pytest.approx(watching.machines.poses()[0, 0] + 2.0, abs=0.1)
    assert states[1, :2] == pytest.approx(watching.machines.poses()[1, :2], abs=0.1)
    assert states[0, SPEED] == pytest.approx(SPEED_ASKED, abs=0.1)  # that it drives is still known


def test_noise_is_no_jump_and_no_slow_machine():
    watching, jumps, factors = Watching(seed=3), [], []

    def look(w):
        jumps.append(w.jumped)
        factors.append(w.observer.estimate(w.now, None).speed_factor)

    watching.run(20.0, look)
    assert not any(jumps)
    assert np.abs(np.array(factors) - 1.0).max() < 0.1


def test_poses_noisier_than_the_settings_say_are_trusted_less_and_no_slow_machine():
    """2.5 times as noisy: nobody is called slow (below 0.7), and the estimate is still better than the poses."""
    watching, factors, errors = Watching(noise_xy=0.05, noise_deg=1.25, seed=5), [], []
    watching.run(3.0)

    def look(w):
        factors.append(w.observer.estimate(w.now, None).speed_factor)
        errors.append(w.errors()[0])

    watching.run(20.0, look)
    assert np.array(factors).min() > 0.8
    assert math.sqrt(np.mean(np.array(errors) ** 2)) < 0.6 * 0.05 * math.sqrt(2)


def test_a_slowed_machine_is_found_out_also_where_poses_are_noisier_than_the_settings_say():
    watching = Watching(noise_xy=0.05, noise_deg=1.25, seed=5)
    watching.run(3.0)
    watching.machines.slow("cart_2", 0.0)
    watching.run(1.0)
    factor = watching.observer.estimate(watching.now, None).speed_factor
    assert factor[1] < 0.5 and factor[0] > 0.8


@pytest.mark.parametrize("noise_xy", [0.0, 0.02])
def test_a_pose_that_repeats_while_the_robot_is_to_drive_is_no_news_and_told(noise_xy):
    """At 1 m/s three times the noise of the settings, 0.06 m, are driven in two poses."""
    watching, kept, told = Watching(noise_xy=noise_xy, noise_deg=0.0), {}, []
    watching.run(3.0)

    def frozen(poses):
        kept.setdefault("cart_1", poses["cart_1"])
        return poses | {"cart_1": attrs.evolve(kept["cart_1"], stamp=poses["cart_1"].stamp)}

    watching.change = frozen
    watching.run(0.5, lambda w: told.append(w.observer.estimate(w.now, None)))
    assert [each.repeats[0] > 0.0 for each in told[:4]] == [False, False, True, True]
    assert all(each.repeats[1] == 0.0 for each in told)
    assert told[-1].age[0] > 0.3 and told[-1].age[1] < 0.1
    assert watching.errors()[0][0] < 0.15  # predicted on, not held back
    watching.change = lambda poses: poses
    watching.run(0.3)
    assert watching.observer.estimate(watching.now, None).repeats == pytest.approx([0.0, 0.0])


def astray(watching):
    return watching.observer.estimate(watching.now, None).astray


def test_who_turns_otherwise_than_told_is_found_out_within_half_a_second_and_nobody_else():
    """0.2 rad/s less than told: 6 degrees after half a second, against 0.5 degrees of noise."""
    watching, calm = Watching(seed=4), []
    watching.run(20.0, lambda w: calm.append(astray(w).max()))
    assert max(calm) < 1.5
    began = watching.now

    def off(poses):
        late = watching.now - began
        return poses | {"cart_1": attrs.evolve(poses["cart_1"], heading=poses["cart_1"].heading - 0.2 * late)}

    watching.change = off
    watching.run(0.5)
    assert astray(watching)[0] > 1.5 > astray(watching)[1]


def test_who_moves_on_although_told_to_stand_is_found_out():
    fleet, history = carts(1), CommandHistory(np.zeros(1), PERIOD)
    observer, rng = Observer(fleet, settings().poses, history), np.random.default_rng(1)
    for i in range(60):
        history.add(PERIOD * i, np.zeros((1, 2)))
        x = 0.3 * max(PERIOD * i - 2.0, 0.0)  # from 2 s on it creeps ahead with 0.3 m/s
        pose = np.array([x, 0.0, 0.0]) + rng.normal(size=3) * [0.02, 0.02, 0.0087]
        observer.observe({"cart_1": PoseSample(PERIOD * i, *pose)}, None)
        strange = observer.estimate(PERIOD * i, None).astray[0]
        assert strange < 1.5 or i > 40
    assert strange > 1.5


def test_who_runs_on_faster_than_told_is_found_out_and_who_is_slow_is_held_up():
    watching = Watching()
    watching.run(3.0)
    watching.machines.slow("cart_2", 1.6)
    watching.machines.slow("cart_1", 0.4)
    watching.run(0.8)
    estimate = watching.observer.estimate(watching.now, None)
    assert estimate.runs_on.tolist() == [False, True] and estimate.held_up.tolist() == [True, False]


def test_who_stands_may_send_the_same_pose_for_ever():
    observer = Observer(carts(1), settings().poses, CommandHistory(np.zeros(1), PERIOD))
    for i in range(100):
        observer.observe({"cart_1": PoseSample(0.05 * i, 1.0, 2.0, 0.5)}, None)
    estimate = observer.estimate(5.0, None)
    assert estimate.repeats == [0.0] and estimate.age == pytest.approx([0.05])


def test_a_slowed_machine_is_found_out_and_so_is_its_recovery():
    watching = Watching()
    watching.run(3.0)
    watching.machines.slow("cart_2", 0.3)
    watching.run(1.5)
    estimate = watching.observer.estimate(watching.now, None)
    assert estimate.speed_factor[1] == pytest.approx(0.35, abs=0.15) and estimate.speed_factor[0] > 0.9
    assert estimate.states[1, SPEED] == pytest.approx(0.3, abs=0.15)
    watching.machines.slow("cart_2", 1.0)
    watching.run(2.0)
    assert watching.observer.estimate(watching.now, None).speed_factor[1] > 0.85


def test_robots_never_heard_of_spoil_nothing():
    watching = Watching()
    watching.change = lambda poses: {name: pose for name, pose in poses.items() if name != "cart_1"}
    watching.run(2.0)
    estimate = watching.observer.estimate(watching.now, None)
    assert np.isnan(estimate.states[0]).all() and estimate.age[0] == math.inf
    assert np.isfinite(estimate.states[1]).all() and np.isfinite(estimate.speed_factor).all()
    watching.change = lambda poses: poses  # it comes later
    watching.run(2.0)
    assert watching.errors()[0].max() < 0.1


def test_a_pose_seen_twice_counts_once_and_an_older_one_not_at_all():
    watching = Watching()
    watching.run(1.0)
    seen = watching.machines.measure(watching.now)
    watching.observer.observe(seen, None)
    once = watching.observer.estimate(watching.now, None).states
    watching.observer.observe(seen, None)
    older = {name: PoseSample(pose.stamp - 0.2, pose.x + 0.3, pose.y, pose.heading) for name, pose in seen.items()}
    watching.observer.observe(older, None)
    assert np.array_equal(watching.observer.estimate(watching.now, None).states, once)


def test_a_pose_is_unwrapped_to_the_heading_that_is_known():
    observer = Observer(carts(1), settings().poses, CommandHistory(np.zeros(1), PERIOD))
    for i, heading in enumerate(np.linspace(3.0, 3.6, 13)):  # over pi, as localisation wraps it
        observer.observe({"cart_1": PoseSample(0.1 * i, 0.0, 0.0, float(se2.wrap(heading)))}, None)
    assert observer.estimate(1.2, None).states[0, 2] == pytest.approx(3.6, abs=0.3)


def test_commands_in_effect_are_those_sent_a_delay_ago_then_those_planned():
    history = CommandHistory(np.array([0.1, 0.3]), PERIOD)
    history.add(1.0, np.array([[1.0, 0.1], [1.0, 0.1]]))
    history.add(1.05, np.array([[2.0, 0.2], [2.0, 0.2]]))
    times = np.array([[1.125, 1.15, 9.0]] * 2)
    effect = history.in_effect(times, None)
    assert effect[0, :, 0] == pytest.approx([1.0, 1.5, 2.0])  # a delay and half a period later
    assert effect[1, :, 0] == pytest.approx([1.0, 1.0, 2.0])
    planned = history.in_effect(times, lambda t: np.full(t.shape + (2,), 7.0))
    assert planned[0, :, 0] == pytest.approx([1.0, 1.5, 7.0]) and planned[1, -1, 0] == 7.0
