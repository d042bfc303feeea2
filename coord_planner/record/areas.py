# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Did anybody enter a keep-out area or drive too fast in a capped one? Judged from record and outlines alone."""

from __future__ import annotations

import attrs
import numpy as np
import shapely

from ..core import outline
from ..trial.run import Run

_FAST = 0.02  # m/s by which a speed may be above a cap, for the sake of noise in it


@attrs.frozen
class Breach:
    """The worst of one robot in one area: how far it came too near (m) or how much too fast it was (m/s), and when."""

    robot: str
    area: str
    amount: float
    at: float

    def words(self, unit: str) -> str:
        """For people; ``unit`` is m or m/s."""
        how = "too near to" if unit == "m" else "too fast in"
        return f"{self.robot} was {self.amount:.2f} {unit} {how} {self.area} after {self.at:.1f} s"


def intrusions(run: Run) -> list[Breach]:
    """Footprints that came nearer to a keep-out area than the site allows."""
    rules, found = run.site_rules, []
    shapes = _shapes(run) if rules.keep_outs else np.zeros((0, 0))
    for area in rules.keep_outs:
        distance = shapely.distance(shapes, area.polygon)
        inside = shapely.intersection(shapes, area.polygon)
        # Inside there is no distance; the root of what overlaps says how much.
        missing = rules.keep_out_clearance - distance + np.sqrt(shapely.area(inside))
        found += _worst(run, area.name, missing, 1e-3)
    return found


def speeding(run: Run) -> list[Breach]:
    """Machines that were faster than an area allows that any part of them was in."""
    found, shapes = [], _shapes(run) if run.site_rules.speed_caps else np.zeros((0, 0))
    for cap in run.site_rules.speed_caps:
        inside = shapely.intersects(shapes, cap.area.polygon)
        over = np.where(inside, np.abs(run.speeds) - cap.max_speed, -np.inf)
        found += _worst(run, cap.area.name, over, _FAST)
    return found


def _shapes(run: Run) -> np.ndarray:
    known = np.where(np.isfinite(run.poses).all(axis=2)[..., None], run.poses, 1e9)
    return outline.outlines(run.fleet.corners(), known)


def _worst(run: Run, area: str, amount: np.ndarray, allowed: float) -> list[Breach]:
    places = np.argmax(amount, axis=1)
    return [
        Breach(name, area, float(row[at]), float(run.times[at] - run.began))
        for name, row, at in zip(run.fleet.names, amount, places) if row[at] > allowed
    ]
