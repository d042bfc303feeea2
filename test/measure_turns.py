# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Measures what the manoeuvres of a site file come to over many seeds; takes minutes, so no test collects it.

    OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_turns.py SITE [COUNT [MANOEUVRE ...]]

    python test/measure_turns.py config/orchard.yaml 20
    python test/measure_turns.py config/orchard.yaml 20 back_rows --set manoeuvres.back_rows.depth=6.0

One line a manoeuvre: how many of the seeds were completed, and the worst of each figure over all of them.

    python test/measure_turns.py --rows [COUNT]

Row ends of the solar park's mowers at other spacings, radii, depths and orders than those of the shipped files.
"""

from __future__ import annotations

import math
import sys
from collections import Counter

import numpy as np
import shapely
from sites import site as made_up

from coord_planner import config
from coord_planner.core import outline
from coord_planner.core.manoeuvre import RowEnd
from coord_planner.errors import CoordPlannerError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse

COLUMNS = (
    "manoeuvre", "completed", "contacts", "violations", "clearance", "end", "heading", "edge", "duration", "tick",
)


# Row spacing (m), largest curvature (1/m), lowest speed (m/s), depth (m), order, side, robots.
ROWS = (
    (2.0, 0.8, -0.8, 3.2, "mirrored", "left", 2), (2.5, 0.8, -0.8, 2.6, "mirrored", "right", 1),
    (3.0, 0.5, -0.6, 4.2, "mirrored", "left", 1), (4.0, 0.6, 0.0, 5.0, "same", "right", 2),
    (2.5, 1.2, 0.0, 4.2, "mirrored", "left", 2), (3.5, 0.45, -0.6, 4.0, "mirrored", "left", 2),
)


def say(text):
    sys.stdout.write(f"{text}\n")
    sys.stdout.flush()


def beyond(run, wanted):
    """How far any footprint reached beyond the headland, metres; below 0 by what was to spare, NaN without one."""
    if not isinstance(wanted, RowEnd):
        return math.nan
    turn = math.radians(wanted.heading_deg)
    out = np.array([math.cos(turn), math.sin(turn)])
    corners = shapely.get_coordinates(outline.outlines(run.fleet.corners(), run.poses))
    return float((corners @ out).max() - np.array([wanted.end_x, wanted.end_y]) @ out - wanted.depth)


def measured(site, name, seeds):
    """One row of the table, and the warnings with how many runs each was seen in."""
    figures, edges, warnings = [], [], Counter()
    for seed in seeds:
        run = rehearse(site, name, seed=seed)
        figures.append(summary(run))
        edges.append(beyond(run, site.manoeuvres[name]))
        warnings.update({warning["code"] for warning in figures[-1]["warnings"]})

    def worst(key, scale=1.0):
        return max((scale * value for each in figures for value in each[key].values() if value is not None),
                   default=math.nan)

    clearances = [each["min_clearance_m"] for each in figures if each["min_clearance_m"] is not None]
    return [
        name, f"{sum(each['completed'] for each in figures)}/{len(figures)}",
        f"{sum(each['contacts'] for each in figures)}", f"{sum(each['limit_violations'] for each in figures)}",
        f"{min(clearances, default=math.nan):.3f} m", f"{worst('end_error_m'):.3f} m",
        f"{worst('end_heading_error_rad', 180.0 / math.pi):.2f} deg", f"{max(edges):+.3f} m",
        f"{np.median([each['duration_s'] for each in figures]):.1f} s",
        f"{np.median([each['tick_ms']['median'] for each in figures]):.0f} ms",
    ], warnings


def other_rows():
    """For each of ROWS what it is called in the table (spacing and depth), a site, and its manoeuvre."""
    for spacing, curvature, lowest, depth, order, side, count in ROWS:
        label = f"{spacing:g} m, {depth:g} m"
        starts = np.array([[-2.0, -spacing * k, 0.0] for k in range(count)])
        fields = {"kind": "row_end", "end_x": 0.0, "end_y": 0.0, "heading_deg": 0.0, "row_spacing": spacing,
                  "inside": 2.0, "order": order, "side": side, "depth": depth}
        yield label, made_up(starts, {"turn": fields}, robot_defaults__max_curvature=curvature,
                             robot_defaults__min_speed=lowest), "turn"


def table(wanted, count):
    """Print one row for each: what it is called, the site, the manoeuvre."""
    say("  ".join(f"{column:>12}" for column in COLUMNS))
    for label, site, name in wanted:
        try:
            row, warnings = measured(site, name, range(1, count + 1))
        except CoordPlannerError as error:
            say(f"{label:>12}  refused: {error}")
            continue
        say("  ".join(f"{cell:>12}" for cell in [label, *row[1:]]))
        if warnings:
            say("    warned of: " + ", ".join(f"{code} ({runs} runs)" for code, runs in sorted(warnings.items())))


def main(arguments):
    if arguments[0] == "--rows":
        table(other_rows(), int(arguments[1]) if len(arguments) > 1 else 20)
        return
    changes = [word for flag, word in zip(arguments, arguments[1:]) if flag == "--set"]
    words = [word for word in arguments if word != "--set" and word not in changes]
    site = config.load(words[0])
    if changes:
        site = config.from_parameters(config.set_values(site.flat, changes), site.file)
    count = int(words[1]) if len(words) > 1 else 20
    table([(name, site, name) for name in words[2:] or site.manoeuvres], count)


if __name__ == "__main__":
    main(sys.argv[1:])
