# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Coupled, uncoupled and a plain follow-the-neighbour controller on the same fleets, seeds and faults, as a table.

    OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_comparison.py [SEEDS [LINES [CONTROLLERS]]]

SEEDS: how many, from 1 on (3 when left out). LINES: which of the cases, e.g. 1,4. CONTROLLERS: e.g. follower. Takes
minutes, so no test collects it. The follower (trial/follower.py) neither plans nor knows of clearances; the sites are
invented.
"""

from __future__ import annotations

import math
import sys
from pathlib import Path

import numpy as np

from coord_planner import config
from coord_planner.errors import RefusedError
from coord_planner.record.metrics import summary
from coord_planner.trial.copying import with_coupling
from coord_planner.trial.faults import Fault
from coord_planner.trial.follower import follow
from coord_planner.trial.rehearsal import rehearse

CONFIG = Path(__file__).parent.parent / "config"
SLOWED = (Fault("robot_slow", "mower_3", 4.0, 7.0, 0.3),)
NOISY = (Fault("pose_noise", "mower_2", 0.0, 60.0, 0.05),)
CASES = (
    ("six mowers, all with ends", "solar_park.yaml", "corner_left", ()),
    ("the same, mower_3 at 30% for 3 s", "solar_park.yaml", "corner_left", SLOWED),
    ("the same, poses of mower_2 scatter by 5 cm", "solar_park.yaml", "corner_left", NOISY),
    ("six mowers, one led", "solar_park.yaml", "led_left", ()),
    ("the same, mower_3 at 30% for 3 s", "solar_park.yaml", "led_left", SLOWED),
    ("four ploughs in echelon, all with ends", "snow_yard.yaml", "clear_left", ()),
)
CONTENDERS = ("coupled", "uncoupled", "follower")


def say(text: str) -> None:
    sys.stdout.write(f"{text}\n")
    sys.stdout.flush()


def steering(run) -> float:
    """How far the steering is moved to and fro, 1/m of commanded curvature, mean of the robots."""
    return float(np.abs(np.diff(run.commanded[:, :, 1], axis=1)).sum(axis=1).mean())


def one(contender, site, manoeuvre, faults, seed):
    """The figures of one run: clearance, heading spread, how far headings end apart, time, steering, done, contacts."""
    if contender == "follower":
        run = follow(site, manoeuvre, seed=seed, faults=faults)
    else:
        asked = with_coupling(site, manoeuvre, 0.0) if contender == "uncoupled" else site
        run = rehearse(asked, manoeuvre, seed=seed, faults=faults)
    figures = summary(run)
    changes = list(figures["heading_change_rad"].values())
    return (figures["min_clearance_m"], math.degrees(figures["heading_spread_max_rad"]),
            math.degrees(max(changes) - min(changes)), figures["duration_s"], steering(run),
            figures["completed"], figures["contacts"])


def line(title, contender, runs, allowed) -> str:
    done = sum(bool(run[5]) for run in runs)
    nearest = min(run[0] for run in runs)
    spread, end, time, steered = (float(np.mean([run[i] for run in runs])) for i in (1, 2, 3, 4))
    short = f"{nearest:.2f}" if nearest >= allowed else f"**{nearest:.2f}**"
    return (f"| {title} | {contender} | {short} | {spread:.1f} | {end:.1f} | {time:.1f} | {steered:.2f} | "
            f"{done} of {len(runs)} | {sum(run[6] for run in runs)} |")


def main() -> None:
    seeds = range(1, 1 + (int(sys.argv[1]) if len(sys.argv) > 1 else 3))
    chosen = [int(word) for word in sys.argv[2].split(",")] if len(sys.argv) > 2 else range(1, 1 + len(CASES))
    contenders = sys.argv[3].split(",") if len(sys.argv) > 3 else CONTENDERS
    say("| fleet | controller | smallest clearance m | heading spread deg | headings apart at the end deg | time s | "
        "steering 1/m | completed | contacts |")
    say("|---|---|---|---|---|---|---|---|---|")
    for number in chosen:
        title, file, manoeuvre, faults = CASES[number - 1]
        site = config.load(CONFIG / file)
        for contender in contenders:
            try:
                runs = [one(contender, site, manoeuvre, faults, seed) for seed in seeds]
            except RefusedError as refused:
                say(f"| {title} | {contender} | refused: {refused} |")
                continue
            say(line(title, contender, runs, site.settings.site_rules.min_clearance))


if __name__ == "__main__":
    main()
