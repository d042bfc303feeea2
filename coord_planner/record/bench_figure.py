# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How times grow with the fleet, as a page to look at."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import plotly.graph_objects as go
from plotly.subplots import make_subplots

from ..trial.bench import Row
from .picture import COLOURS

_TICKS = [factor * 10**power for power in range(-1, 5) for factor in (1, 2, 5)]  # milliseconds
_LINES = (
    ("tick_ms_median", "tick, median", "solid", "circle"),
    ("tick_ms_p99", "tick, 99 of 100 below", "dot", "diamond"),
    ("feedback_ms_median", "from poses to plan, median", "dash", "square"),
    ("tuned_ms_median", "IPOPT, last multipliers", "dashdot", "triangle-up"),
    ("plain_ms_median", "IPOPT, default options", "solid", "x"),
)


def write_figure(rows: Sequence[Row], path: Path) -> None:
    """Write times over fleet size, one panel a case, as one HTML file that needs no network.

    Raises:
        OSError: the file cannot be written.
    """
    page = figure(rows).to_html(include_plotlyjs=True, full_html=True, config={"displaylogo": False})
    path.write_text(page, encoding="utf-8")


def figure(rows: Sequence[Row]) -> go.Figure:
    """The figure; both axes in powers, so that a straight line is a fixed exponent."""
    cases = sorted({row.case for row in rows}, reverse=True)
    drawn = make_subplots(rows=1, cols=len(cases), subplot_titles=cases, shared_yaxes=True)
    for column, case in enumerate(cases, start=1):
        chosen = sorted((row for row in rows if row.case == case), key=lambda row: row.robots)
        for (key, name, dash, symbol), colour in zip(_LINES, COLOURS):
            drawn.add_trace(go.Scatter(
                x=[row.robots for row in chosen], y=[getattr(row, key) for row in chosen], name=name, legendgroup=key,
                showlegend=column == 1, mode="lines+markers", line={"color": colour, "dash": dash},
                marker={"symbol": symbol, "size": 8},
            ), row=1, col=column)
    sizes = sorted({row.robots for row in rows})
    drawn.update_xaxes(type="log", title="robots", tickvals=sizes, ticktext=[str(size) for size in sizes])
    drawn.update_yaxes(type="log", tickvals=_TICKS, ticktext=[f"{tick:g}" for tick in _TICKS])
    drawn.update_yaxes(title="milliseconds", col=1)
    drawn.update_layout(
        title="Planning time a tick, 24 intervals of 0.25 s", template="plotly_white",
        legend={"orientation": "h", "y": -0.15},
    )
    return drawn
