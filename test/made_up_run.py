# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A made-up run for tests of what is done with records: simulated machines, no planner."""

import math
from itertools import pairwise
from types import SimpleNamespace

import attrs
import numpy as np

from coord_planner.core import se2
from coord_planner.core.fleet import Fleet, Limits, Response, Robot
from coord_planner.core.messages import Caution, Command, Level
from coord_planner.trial.run import Run, RunFrame
from coord_planner.trial.vehicle import SimulatedFleet

SIMULATION = SimpleNamespace(pose_noise_xy=0.0, pose_noise_heading_deg=0.0, pose_delay=0.0, speed_lag=-1.0,
                             curvature_lag=-1.0, command_delay=-1.0, speed_factor=1.0)
SPEED, RADIUS, RATE = 1.0, 4.0, 20.0  # m/s, m, commands a second
LIMITS = Limits(max_curvature=0.5, max_curvature_rate=0.4, max_speed=1.5, max_acceleration=0.5, max_braking=1.0)


def _profile(time, later):
    """Speed and curvature of a corner to the left: speed up, steer in, hold, steer out, slow down."""
    ramp, hold = 2.0, RADIUS * math.pi / 2 - 2.0
    speed = np.interp(time, [0.0, 2.2, 4.0 + ramp + hold + 2.0, 4.0 + ramp + hold + 4.2], [0.0, SPEED, SPEED, 0.0])
    turning = [2.5 + later, 2.5 + later + ramp, 2.5 + later + ramp + hold, 2.5 + later + 2 * ramp + hold]
    return float(speed), float(np.interp(time, turning, [0.0, 1 / RADIUS, 1 / RADIUS, 0.0]))


def turn(count=6, *, spacing=2.5, later=0.06, slowed="", seconds=16.0, began=100.0):
    """``count`` robots abreast turn left; each begins ``later`` seconds after the one before; one may be slowed."""
    names = tuple(f"mower_{n + 1}" for n in range(count))
    fleet = Fleet(tuple(Robot(name, LIMITS, response=Response(0.3, 0.2, 0.1)) for name in names))
    machines = SimulatedFleet(fleet, {name: (0.0, -spacing * n, 0.0) for n, name in enumerate(names)}, SIMULATION,
                              dict.fromkeys(names, 0.5), np.random.default_rng(0), began - 0.5)
    times, truth, sent, frames = [], [], [], []
    for tick in range(int(seconds * RATE)):
        now = began + tick / RATE
        machines.advance(now)
        if slowed and tick in (120, 180):
            machines.slow(slowed, 0.3 if tick == 120 else 1.0)
        wanted = [_profile(tick / RATE, later * n) for n in range(count)]
        for name, pair in zip(names, wanted):
            machines.command(name, Command(*pair), now)
        times.append(now)
        truth.append(np.column_stack([machines.poses(), machines.speeds(), machines.curvatures()]))
        sent.append(wanted)
        if tick % 2 == 0:
            ahead = np.array([[_profile(tick / RATE + 0.25 * step, later * n) for step in range(24)]
                              for n in range(count)])
            steps = ahead[:, :, 0] * 0.25
            frames.append(RunFrame(now, 1.0, se2.rollout(machines.poses(), steps, steps * ahead[:, :, 1])))
    truth = np.array(truth).transpose(1, 0, 2)
    ends = truth[:, -1, :3] + np.array([0.03, -0.04, 0.01])
    cautions = (
        (began + 6.2, began + 9.3, Caution("robot not following", slowed or names[0], Level.WARN,
                                           "0.62 m behind its plan, at most 0.40 m: the group slows with it; "
                                           "the site's operating rules come first")),
        (began + 7.0, began + 8.0, Caution("clearance small", " and ".join(names[:2]), Level.ERROR,
                                           "0.71 m, the site allows no less than 0.80 m <b>&</b>")),
    )
    return Run(
        fleet=fleet, edges=tuple((a, b, 1.0) for a, b in pairwise(names)), manoeuvre="corner_left",
        times=np.array(times), poses=truth[:, :, :3], speeds=truth[:, :, 3], curvatures=truth[:, :, 4],
        command_times=np.array(times), commanded=np.array(sent).transpose(1, 0, 2), end_poses=ends, min_clearance=0.8,
        state="ended", completed=True, began=began, ended=began + seconds - 1.0, cautions=cautions if count > 1 else (),
        tick_ms=np.linspace(10.0, 30.0, 101), wall_time=1.5, frames=tuple(frames),
        events=((began + 6.0, "mower_3 slowed to 30 %"), (began + 9.0, "mower_3 at full speed")) if slowed else (),
        facts={"simulated": True, "invented": True, "seed": 1, "coupling": 1.0},
    )


def standing(at, *, count=1, **changes):
    """A record of robots that stand at poses (N, 3) for ``count`` samples, 0.05 s apart, with no commands."""
    poses = np.asarray(at, dtype=float)
    fleet = changes.pop("fleet", None) or Fleet(tuple(Robot(f"r{n}") for n in range(len(poses))))
    times = np.arange(count) * 0.05
    empty = np.zeros((len(poses), count))
    run = Run(
        fleet=fleet, edges=(), manoeuvre="none", times=times, poses=np.repeat(poses[:, None], count, axis=1),
        speeds=empty, curvatures=empty, command_times=np.zeros(0), commanded=np.zeros((len(poses), 0, 2)),
        end_poses=np.full((len(poses), 3), np.nan), min_clearance=0.5, state="ended", completed=True, began=0.0,
        ended=count * 0.05 - 0.05, cautions=(), tick_ms=np.zeros(0), wall_time=1.0,
    )
    return attrs.evolve(run, **changes)
