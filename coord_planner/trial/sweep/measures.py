"""What a sweep measures in each rehearsal, and which way is better."""

from __future__ import annotations

import attrs


@attrs.frozen
class Measure:
    """One figure of a rehearsal.

    Attributes:
        words: for people. unit: of the column. larger_is_better: which way is better.
    """

    words: str
    unit: str
    larger_is_better: bool = False

    def cost(self, value: float) -> float:
        """The value, so that less is better."""
        return -value if self.larger_is_better else value


# By column of the table.
MEASURES = {
    "min_clearance_m": Measure("smallest clearance", "m", larger_is_better=True),
    "heading_spread_deg": Measure("largest heading spread", "deg"),
    "duration_s": Measure("time", "s"),
    "effort": Measure("turning effort, 1/2 integral of u'u", "s/m^2"),
    "disagreement": Measure("disagreement, 1/2 integral of u'Lu", "s/m^2"),
    "curvature_spread_per_m": Measure("largest curvature spread", "1/m"),
    "end_error_m": Measure("largest end error", "m"),
    "end_heading_error_deg": Measure("largest end heading error", "deg"),
}
# What the page shows for every parameter.
MAIN = ("min_clearance_m", "heading_spread_deg", "duration_s", "effort")
