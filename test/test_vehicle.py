# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Simulated machines against closed forms and against fine integration."""

import math
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from coord_planner.core.fleet import Fleet, Limits, Response, Robot
from coord_planner.core.messages import Command
from coord_planner.trial import vehicle
from coord_planner.trial.vehicle import SimulatedFleet

STARTS = {"a": (1.0, -2.0, 0.3), "b": (0.0, 3.0, -1.0)}


PERFECT = {"pose_noise_xy": 0.0, "pose_noise_heading_deg": 0.0, "pose_delay": 0.0, "speed_lag": 0.0,
           "curvature_lag": 0.0, "command_delay": 0.0, "speed_factor": 1.0}


def make(*, starts=STARTS, timeout=100.0, limits=None, response=None, seed=0, time=0.0, **changes):
    """Two robots (or those of ``starts``); perfect machines unless ``changes`` say otherwise."""
    simulation = SimpleNamespace(**(PERFECT | changes))
    limits, response = limits or Limits(), response or Response()
    fleet = Fleet(tuple(Robot(name, limits, response=response) for name in starts))
    return SimulatedFleet(fleet, starts, simulation, dict.fromkeys(starts, timeout), np.random.default_rng(seed), time)


def drive(machines, commands, until, delay=0.0):
    """Send (time, speed, curvature) to everybody, then run on to ``until``."""
    for time, speed, curvature in commands:
        machines.advance(time)
        for name in machines.names:
            machines.command(name, Command(speed, curvature), time)
    machines.advance(until)


def fine_integration(start, commands, until, *, speed_lag, curvature_lag, delay):
    """The same machine by a high-order integrator: x, y, heading, speed, curvature."""
    state = np.array([*start, 0.0, 0.0])
    edges = [0.0, *(time + delay for time, _, _ in commands), until]
    asked = [(0.0, 0.0), *((speed, curvature) for _, speed, curvature in commands)]
    for begin, end, (speed, curvature) in zip(edges, edges[1:], asked):
        def rate(_t, s, speed=speed, curvature=curvature):
            _, _, heading, v, k = s
            return [v * math.cos(heading), v * math.sin(heading), v * k, (speed - v) / speed_lag,
                    (curvature - k) / curvature_lag]

        if end > begin:
            state = solve_ivp(rate, (begin, end), state, method="DOP853", rtol=1e-11, atol=1e-12).y[:, -1]
    return state


COMMANDS = [(0.0, 1.2, 0.4), (0.73, 0.6, -0.8), (1.5, -0.5, 0.2), (2.21, 1.5, 0.6)]


def test_motion_agrees_with_fine_integration():
    machines = make(speed_lag=0.3, curvature_lag=0.2, command_delay=0.1)
    drive(machines, COMMANDS, 4.0)
    for row, name in enumerate(machines.names):
        want = fine_integration(STARTS[name], COMMANDS, 4.0, speed_lag=0.3, curvature_lag=0.2, delay=0.1)
        assert machines.poses()[row, 2] == pytest.approx(want[2], abs=1e-9)  # exact, whatever the step
        assert machines.poses()[row, :2] == pytest.approx(want[:2], abs=1e-5)
        assert machines.speeds()[row] == pytest.approx(want[3], abs=1e-9)
        assert machines.curvatures()[row] == pytest.approx(want[4], abs=1e-9)


def test_positions_converge_with_second_order(monkeypatch):
    want = fine_integration(STARTS["a"], COMMANDS, 4.0, speed_lag=0.3, curvature_lag=0.2, delay=0.0)
    steps, errors = np.array([0.1, 0.05, 0.025, 0.0125]), []
    for step in steps:
        monkeypatch.setattr(vehicle, "_LONGEST_STEP", step)
        machines = make(speed_lag=0.3, curvature_lag=0.2)
        drive(machines, COMMANDS, 4.0)
        errors.append(np.hypot(*(machines.poses()[0, :2] - want[:2])))
    order = np.polyfit(np.log(steps), np.log(errors), 1)[0]
    assert 1.8 < order < 2.3


def test_constant_curvature_gives_an_exact_arc():
    """A quarter circle of radius 2 m, from the geometry of the circle alone."""
    machines = make(starts={"a": (0.0, 0.0, 0.0)})
    drive(machines, [(0.0, 1.0, 0.5)], math.pi)
    assert machines.poses()[0] == pytest.approx([2.0, 2.0, math.pi / 2], abs=1e-12)


def test_clothoid_ends_at_the_fresnel_integrals():
    """Curvature pi s, at s = 1 (Fresnel integrals, DLMF 7.2): checks.md section 6."""
    machines = make(starts={"a": (0.0, 0.0, 0.0)})
    drive(machines, [(n / 1000, 1.0, math.pi * (n + 0.5) / 1000) for n in range(1000)], 1.0)
    assert machines.poses()[0] == pytest.approx([0.779893400377, 0.438259147390, math.pi / 2], abs=1e-6)


def test_speed_and_curvature_are_reached_exponentially():
    """Step response of a first-order lag, 1 - exp(-t/T) (common practice)."""
    machines = make(speed_lag=0.4, curvature_lag=0.25)
    drive(machines, [(0.0, 1.5, -0.3)], 0.6)
    assert machines.speeds() == pytest.approx(1.5 * (1 - math.exp(-0.6 / 0.4)), abs=1e-12)
    assert machines.curvatures() == pytest.approx(-0.3 * (1 - math.exp(-0.6 / 0.25)), abs=1e-12)


def test_each_robot_has_its_own_response_unless_the_simulation_overrides_it():
    own = Response(speed_lag=0.5, curvature_lag=0.5, command_delay=0.2)
    machines = make(response=own, speed_lag=-1.0, curvature_lag=0.1, command_delay=-1.0)
    drive(machines, [(0.0, 1.0, 1.0)], 0.7)
    assert machines.speeds() == pytest.approx(1 - math.exp(-0.5 / 0.5), abs=1e-12)
    assert machines.curvatures() == pytest.approx(1 - math.exp(-0.5 / 0.1), abs=1e-12)


def test_commands_take_effect_after_the_delay_and_in_order():
    machines = make(command_delay=0.1)
    machines.command("a", Command(1.0, 0.0), 0.0)
    machines.command("a", Command(2.0, 0.0), 0.05)
    seen = []
    for time in (0.0999, 0.1001, 0.1499, 0.1501):
        machines.advance(time)
        seen.append(machines.speeds()[0])
    assert seen == [0.0, 1.0, 1.0, 2.0]
    assert machines.speeds()[1] == 0.0  # nobody told b anything
    assert machines.poses()[0, 0] == pytest.approx(1.0 + (0.05 + 2.0 * 0.0001) * math.cos(0.3), abs=1e-9)


def test_a_robot_that_hears_nothing_brakes_at_its_own_rate():
    """Stopping distance v t + v^2/(2a): 1.5 m/s, 0.3 s, 1 m/s^2 give 1.575 m (checks.md section 6)."""
    machines = make(starts={"a": (0.0, 0.0, 0.0)}, timeout=0.3, limits=Limits(max_braking=1.0))
    drive(machines, [(0.0, 1.5, 0.0)], 10.0)
    assert machines.poses()[0] == pytest.approx([1.575, 0.0, 0.0], abs=1e-9)
    assert machines.speeds()[0] == 0.0


def test_braking_in_a_bend_and_in_reverse_agrees_with_fine_integration():
    start, lag, brake = (0.5, 0.0, 0.2), 0.4, 0.8
    machines = make(starts={"a": start}, timeout=0.5, curvature_lag=lag, limits=Limits(max_braking=brake))
    drive(machines, [(0.0, -1.2, 0.6)], 5.0)

    def rate(t, s):
        v = -max(1.2 - brake * max(t - 0.5, 0.0), 0.0)
        return [v * math.cos(s[2]), v * math.sin(s[2]), v * 0.6 * (1 - math.exp(-t / lag))]

    want = solve_ivp(rate, (0.0, 5.0), start, method="DOP853", rtol=1e-11, atol=1e-12, max_step=0.01).y[:, -1]
    assert machines.poses()[0, 2] == pytest.approx(want[2], abs=1e-7)
    assert machines.poses()[0, :2] == pytest.approx(want[:2], abs=1e-5)


def test_a_new_command_ends_the_time_out():
    machines = make(timeout=0.2)
    drive(machines, [(0.0, 1.0, 0.0), (1.5, 0.5, 0.0)], 1.6)
    assert machines.speeds() == pytest.approx(0.5)


def test_a_slowed_machine_reaches_only_its_part_of_the_speed():
    machines = make(speed_lag=0.1, speed_factor=0.9)
    drive(machines, [(0.0, 1.0, 0.2)], 5.0)
    machines.slow("a", 0.3)
    machines.advance(10.0)
    assert machines.speeds() == pytest.approx([0.27, 0.9])
    machines.slow("a", 1.0)
    machines.advance(15.0)
    assert machines.speeds() == pytest.approx([0.9, 0.9])


def test_a_run_is_the_same_however_it_is_cut():
    whole, pieces = (make(speed_lag=0.3, curvature_lag=0.2, command_delay=0.1, time=50.0) for _ in range(2))
    for machines in (whole, pieces):
        machines.command("a", Command(1.0, 0.5), 50.0)
    whole.advance(53.0)
    for time in np.arange(50.0, 53.0, 0.037):
        pieces.advance(time)
    pieces.advance(53.0)
    assert pieces.poses() == pytest.approx(whole.poses(), abs=1e-5)
    assert pieces.speeds() == pytest.approx(whole.speeds(), abs=1e-12)


def test_measured_poses_are_noisy_wrapped_and_repeatable():
    machines = make(starts={"a": (4.0, 5.0, 3.1 + 4 * math.pi)}, pose_noise_xy=0.02, pose_noise_heading_deg=0.5, seed=3)
    samples = [machines.measure(0.01 * n)["a"] for n in range(4000)]
    values = np.array([(s.x - 4.0, s.y - 5.0, s.heading - 3.1) for s in samples])
    values[:, 2] = (values[:, 2] + math.pi) % (2 * math.pi) - math.pi
    assert max(abs(s.heading) for s in samples) <= math.pi
    # the standard error of the mean is sigma/sqrt(n), of the deviation sigma/sqrt(2n); five of each
    sigma = np.array([0.02, 0.02, math.radians(0.5)])
    assert np.all(np.abs(values.mean(axis=0)) < 5 * sigma / math.sqrt(4000))
    assert np.all(np.abs(values.std(axis=0) - sigma) < 5 * sigma / math.sqrt(8000))
    again = make(starts={"a": (4.0, 5.0, 3.1 + 4 * math.pi)}, pose_noise_xy=0.02, pose_noise_heading_deg=0.5, seed=3)
    assert again.measure(0.0)["a"] == samples[0]


def test_late_poses_show_the_past_and_say_so():
    machines = make(starts={"a": (0.0, 0.0, 0.0)}, pose_delay=0.15)
    machines.command("a", Command(1.0, 0.0), 0.0)
    early, late = machines.measure(0.1)["a"], machines.measure(1.0)["a"]
    assert (early.stamp, early.x) == (pytest.approx(-0.05), 0.0)
    assert (late.stamp, late.x) == (pytest.approx(0.85), pytest.approx(0.85))
    assert machines.poses()[0, 0] == pytest.approx(1.0)


def test_what_makes_no_sense_is_refused():
    machines = make()
    with pytest.raises(ValueError, match="must be finite"):
        machines.command("a", Command(math.nan, 0.0), 0.0)
    with pytest.raises(ValueError, match="at least 0"):
        machines.slow("a", -0.1)
    with pytest.raises(KeyError):
        machines.command("nobody", Command(0.0, 0.0), 0.0)
