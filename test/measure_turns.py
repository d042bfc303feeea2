# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Measures what the manoeuvres of a site file come to over many seeds; takes minutes, so no test collects it.

    OPENBLAS_NUM_THREADS=1 PYTHONPATH=. python test/measure_turns.py SITE [COUNT [MANOEUVRE ...]]
                                                   [--set KEY=VALUE ...] [--hazard 'X Y SECONDS' --arm M] [--from SEED]

    python test/measure_turns.py config/orchard.yaml 20
    python test/measure_turns.py config/orchard.yaml 20 back_rows --set manoeuvres.back_rows.depth=6.0
    python test/measure_turns.py config/orchard.yaml 20 leave_abreast --hazard '12 8 6' --arm turn_from

One line a manoeuvre: how many of the seeds were kept, and the worst of each figure over all of them; below it what
did not hold, seed by seed. Kept is a run that was completed without a contact, a command outside a limit, a footprint
outside the headland or in an area that it may not enter, with the site's clearance, and ends within 0.10 m and
3 degrees.

    python test/measure_turns.py --rows | --wheels | --forms | --files [COUNT]

The same for row ends, wheel turns of 3 to 12, formations and files of the solar park's mowers at other spacings, radii,
depths, orders and numbers than those of the shipped files. A wheel turn is kept when headings spread by no more than
4 degrees and spacings by 10 % besides.
"""

from __future__ import annotations

import argparse
import math
import sys
import time
from collections import Counter

import numpy as np
from sites import shown
from sites import site as made_up

from coord_planner import config
from coord_planner.core.fence import Fencing
from coord_planner.core.manoeuvre import TurnAway
from coord_planner.errors import CoordPlannerError
from coord_planner.record.areas import intrusions, speeding
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse
from coord_planner.trial.sighting import sighting

END, HEADING = 0.10, 3.0  # metres, degrees
SPREAD, SPACING = 4.0, 0.10  # degrees, part of the spacing
COLUMNS = ("kept", "contacts", "violations", "clearance", "end", "heading", "edge", "spread", "spacing", "duration",
           "tick", "processor")

# Row spacing (m), largest curvature (1/m), lowest speed (m/s), depth (m), order, side, robots.
ROWS = (
    (2.0, 0.8, -0.8, 3.2, "mirrored", "left", 2), (2.5, 0.8, -0.8, 2.6, "mirrored", "right", 1),
    (3.0, 0.5, -0.6, 4.2, "mirrored", "left", 1), (4.0, 0.6, 0.0, 5.0, "same", "right", 2),
    (2.5, 1.2, 0.0, 4.2, "mirrored", "left", 2), (3.5, 0.45, -0.6, 4.0, "mirrored", "left", 2),
)
# Robots, spacing (m), pivot, angle (degrees), speed at the end (m/s).
WHEELS = (
    (3, 2.5, "mower_1 2.5", 90.0, 0.0), (4, 3.0, "mower_4 4", -120.0, 0.0), (5, 2.2, "", 60.0, 0.0),
    (6, 2.5, "mower_1 2", 90.0, 0.0), (7, 2.0, "mower_1 3", 150.0, 0.0), (8, 2.5, "mower_1 5", 45.0, 0.0),
    (9, 3.0, "", -90.0, 0.0), (10, 2.2, "mower_1 6", 90.0, 0.5), (11, 2.5, "mower_11 3", -60.0, 0.0),
    (12, 2.5, "mower_1 2.5", 90.0, 0.0),
)
# Robots, shape, spacing (m), seed of where they stand.
FORMS = (
    (3, "line", 2.5, 50), (4, "file", 3.0, 51), (5, "echelon", 2.8, 52), (6, "line", 3.0, 53), (6, "file", 2.8, 54),
    (4, "echelon", 4.0, 55), (8, "file", 3.0, 56), (8, "line", 2.5, 57), (7, "echelon", 3.0, 58),
)
# Robots, spacing (m), radius (m), angle (degrees).
FILES = ((2, 2.6, 2.0, 90.0), (3, 3.0, 4.0, -120.0), (4, 4.2, 2.5, 60.0), (5, 3.0, 3.0, 90.0), (6, 3.5, 6.0, -90.0))


def say(text):
    sys.stdout.write(f"{text}\n")
    sys.stdout.flush()


def beyond(run):
    """How far any footprint reached over an edge of headland or rows, metres; below 0: to spare; NaN without any."""
    spare = Fencing(run.pieces, run.strip).least(run.fleet, run.poses)[0]
    return -spare if math.isfinite(spare) else math.nan


def not_kept(run, figures, row):
    """What was promised and did not hold, in words."""
    found = [] if figures["completed"] else [f"{figures['state']} ({run.events[-1][1]})"]
    found += [f"{figures[key]} {key}" for key in ("contacts", "limit_violations") if figures[key]]
    if row["clearance"] < run.min_clearance:
        found.append(f"clearance {row['clearance']:.3f} m")
    if row["edge"] > 0.0:
        found.append(f"{row['edge']:.3f} m beyond the edge")
    bounds = {"end": END, "heading": HEADING, "spread": SPREAD, "spacing": SPACING}
    found += [f"{key} {row[key]:.3f}" for key, allowed in bounds.items() if row[key] > allowed]
    return found + [breach.words("m") for breach in intrusions(run)] + [breach.words("m/s") for breach in speeding(run)]


def one(site, name, seed, seen, spacing):
    """Figures of one run, and what did not hold."""
    began = time.process_time()
    run = rehearse(site, name, seed=seed, seen=seen)
    figures = summary(run)

    def worst(key, scale=1.0):
        return max((scale * value for value in figures[key].values() if value is not None), default=math.nan)

    kept = shown(run, spacing) if spacing else {"heading_deg": math.nan, "spacing": math.nan}
    row = {
        "contacts": figures["contacts"], "violations": figures["limit_violations"],
        "clearance": math.inf if figures["min_clearance_m"] is None else figures["min_clearance_m"],
        "end": worst("end_error_m"), "heading": worst("end_heading_error_rad", 180.0 / math.pi), "edge": beyond(run),
        "spread": kept["heading_deg"], "spacing": kept["spacing"], "duration": figures["duration_s"],
        "tick": figures["tick_ms"]["median"], "processor": time.process_time() - began,
    }
    return row, not_kept(run, figures, row), {warning["code"] for warning in figures["warnings"]}


def line(label, rows, failed):
    """The worst of all runs, or the median where that tells more."""
    at = {key: np.array([row[key] for row in rows]) for key in rows[0]}
    cells = [
        f"{len(rows) - failed}/{len(rows)}", f"{at['contacts'].sum():.0f}", f"{at['violations'].sum():.0f}",
        f"{at['clearance'].min():.3f} m", f"{at['end'].max():.3f} m",
        f"{at['heading'].max():.2f} deg", f"{at['edge'].max():+.3f} m", f"{at['spread'].max():.1f} deg",
        f"{100 * at['spacing'].max():.1f} %", f"{np.median(at['duration']):.1f} s", f"{np.median(at['tick']):.0f} ms",
        f"{np.median(at['processor']):.0f} s",
    ]
    return "  ".join(f"{cell:>12}" for cell in [label, *cells])


def table(wanted, seeds, seen=None):
    """Print one line for each: what it is called, the site, the manoeuvre, and the spacing that a line keeps."""
    say("  ".join(f"{column:>12}" for column in ("", *COLUMNS)))
    for label, site, name, spacing in wanted:
        rows, failures, warnings = [], {}, Counter()
        for seed in seeds:
            try:
                row, broken, warned = one(site, name, seed, seen, spacing)
            except CoordPlannerError as error:
                failures[seed] = [f"refused: {error}"]
                continue
            rows.append(row)
            warnings.update(warned)
            if broken:
                failures[seed] = broken
        refused = sum(words[0].startswith("refused") for words in failures.values())
        say(line(label, rows, len(failures) - refused) if rows else f"{label:>12}")
        for seed, words in failures.items():
            say(f"    seed {seed}: {'; '.join(words)}")
        if warnings:
            say("    warned of: " + ", ".join(f"{code} ({runs} runs)" for code, runs in sorted(warnings.items())))


def rows_elsewhere():
    for spacing, curvature, lowest, depth, order, side, count in ROWS:
        starts = np.array([[-2.0, -spacing * k, 0.0] for k in range(count)])
        fields = {"kind": "row_end", "end_x": 0.0, "end_y": 0.0, "heading_deg": 0.0, "row_spacing": spacing,
                  "inside": 2.0, "order": order, "side": side, "depth": depth}
        yield f"{spacing:g} m, {depth:g} m", made_up(
            starts, {"it": fields}, robot_defaults__max_curvature=curvature, robot_defaults__min_speed=lowest
        ), "it", 0.0


def wheels():
    for count, spacing, pivot, angle, end_speed in WHEELS:
        starts = np.array([[0.0, -spacing * k, 0.0] for k in range(count)])
        fields = {"kind": "wheel", "pivot": pivot, "angle_deg": angle, "speed": 1.2, "end_speed": end_speed}
        yield f"{count}, {angle:g} deg", made_up(starts, {"it": fields}), "it", spacing


def forms():
    for count, shape, spacing, seed in FORMS:
        fields = {"kind": "form", "shape": shape, "spacing": spacing, "heading_deg": 0.0}
        yield f"{count}, {shape}", made_up(scattered(np.random.default_rng(seed), count), {"it": fields}), "it", 0.0


def files():
    for count, spacing, radius, angle in FILES:
        starts = np.array([[-spacing * k, 0.0, 0.0] for k in range(count)])
        fields = {"kind": "in_succession", "radius": radius, "angle_deg": angle}
        yield f"{count}, {radius:g} m", made_up(starts, {"it": fields}), "it", 0.0


def scattered(rng, count):
    """Robots anywhere on a square, at least 2.6 m apart, looking within 86 degrees of east, shape (count, 3)."""
    size, poses = 1.6 * math.sqrt(count) + 1.0, []
    while len(poses) < count:
        pose = np.array([*rng.uniform(-size, size, 2), rng.uniform(-1.5, 1.5)])
        if all(np.hypot(*(pose - other)[:2]) > 2.6 for other in poses):
            poses.append(pose)
    return np.array(poses)


ELSEWHERE = {"rows": rows_elsewhere, "wheels": wheels, "forms": forms, "files": files}


def main():
    parser = argparse.ArgumentParser(description="Manoeuvres over many seeds, as a table.")
    parser.add_argument("words", nargs="*", metavar="SITE COUNT MANOEUVRE")
    parser.add_argument("--set", action="append", default=[], dest="changes", metavar="KEY=VALUE")
    parser.add_argument("--hazard")
    parser.add_argument("--arm", default="")
    parser.add_argument("--from", type=int, default=1, dest="first", metavar="SEED")
    parser.add_argument("--only", type=int, nargs="*", metavar="LINE", help="of the lines made up, from 1 on")
    for name in ELSEWHERE:
        parser.add_argument(f"--{name}", action="store_true")
    asked = parser.parse_args()
    wanted = [each for name, cases in ELSEWHERE.items() if getattr(asked, name) for each in cases()]
    if asked.only:
        wanted = [wanted[k - 1] for k in asked.only]
    words = asked.words
    if not wanted:
        site = config.load(words[0])
        site = config.from_parameters(config.set_values(site.flat, asked.changes), site.file) if asked.changes else site
        names = words[2:] or [name for name, each in site.manoeuvres.items() if not isinstance(each, TurnAway)]
        wanted = [(name, site, name, 0.0) for name in names]
        words = words[1:]
    count = int(words[0]) if words else 20
    seen = sighting(asked.hazard, asked.arm) if asked.hazard else None
    table(wanted, range(asked.first, asked.first + count), seen)


if __name__ == "__main__":
    main()
