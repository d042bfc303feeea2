# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a sweep measures in each rehearsal, and which way is better."""

from __future__ import annotations

import attrs


@attrs.frozen
class Measure:
    """One figure of a rehearsal.

    Attributes:
        words: for people. unit: of the column. meaning: in a sentence. larger_is_better: which way is better.
    """

    words: str
    unit: str
    meaning: str
    larger_is_better: bool = False

    def cost(self, value: float) -> float:
        """The value, so that less is better."""
        return -value if self.larger_is_better else value


# By column of the table. u is a robot's turn rate over the manoeuvre's asked speed, L the Laplacian of the graph.
MEASURES = {
    "min_clearance_m": Measure("smallest clearance", "m", "between any two footprints, at any moment", True),
    "heading_spread_deg": Measure("heading spread", "deg", "largest difference of two heading changes at one moment"),
    "duration_s": Measure("time", "s", "from the beginning of the motion to standstill"),
    "effort": Measure("turning effort", "s/m^2", "1/2 integral of u'u: what turning costs without neighbours"),
    "disagreement": Measure("disagreement", "s/m^2", "1/2 integral of u'Lu: what the coupling prices"),
    "curvature_spread_per_m": Measure("curvature spread", "1/m", "largest difference of two curvatures at one moment"),
    "end_error_m": Measure("end error", "m", "largest distance from an asked end"),
    "end_heading_error_deg": Measure("end heading error", "deg", "largest angle from an asked end heading"),
}
# What the page shows for every parameter.
MAIN = ("min_clearance_m", "heading_spread_deg", "duration_s", "effort")
