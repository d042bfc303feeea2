# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner bench``: how fast ticks are, against a general solver on the same problems."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from pathlib import Path
from typing import Annotated, Optional

import attrs
import typer

from ..errors import SettingsError
from ..record.bench_figure import write_figure
from ..trial import bench as measuring
from ..trial.bench_set import SPACINGS
from ..trial.kernels import load_kernels
from .progress import progress_shown
from .speaking import errors_reported, say, table, write, write_json, write_table
from .targets import prepare_file

_MOST_ROBOTS = 200


def bench(
    robots: Annotated[
        str, typer.Option("--robots", metavar="N,N,..", help="Fleet sizes.")
    ] = ",".join(map(str, measuring.ROBOTS)),
    case: Annotated[
        Optional[str], typer.Option("--case", metavar="CASE", help="quiet or contacts; both when left out.")
    ] = None,
    ticks: Annotated[
        int, typer.Option("--ticks", min=4, help="Ticks of a row that the general solver solves as well, right beside.")
    ] = measuring.TICKS,
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    plot: Annotated[
        Optional[Path], typer.Option("--plot", metavar="FILE", help="Also write a page with times over fleet size.")
    ] = None,
) -> None:
    """Speed: a corner driven in closed loop with noisy poses, every tick timed beside a plain solve of its problem."""
    with errors_reported():
        sizes, cases = _sizes(robots), _cases(case)
        if plot is not None:
            prepare_file(plot, "--plot")
    load_kernels(say)
    rows: list[measuring.Row] = []
    with progress_shown("bench") as progress:
        for size in sizes:
            for name in cases:
                rows.append(measuring.measure(name, size, ticks, _later(progress, len(rows), len(sizes) * len(cases))))
    if as_json:
        write_json({"rows": [attrs.asdict(row) for row in rows]})
    else:
        _write(rows, cases)
    if plot is not None:
        write_figure(rows, plot)
        say(f"The page is in {plot}.")


def _later(progress: measuring.Progress, done: int, total: int) -> measuring.Progress:
    """A row's progress as a part of all rows."""
    return lambda part: progress((done + part) / total)


def _sizes(text: str) -> list[int]:
    try:
        sizes = [int(word) for word in text.split(",")]
    except ValueError:
        sizes = []
    if not sizes or not all(1 <= size <= _MOST_ROBOTS for size in sizes):
        raise SettingsError(f"{text!r} cannot be used", key="--robots",
                            allowed=f"whole numbers from 1 to {_MOST_ROBOTS}, with commas between them")
    return list(dict.fromkeys(sizes))


def _cases(case: Optional[str]) -> list[str]:
    if case is not None and case not in SPACINGS:
        raise SettingsError(f"{case!r} is no case", key="--case", allowed=" or ".join(SPACINGS))
    return list(SPACINGS) if case is None else [case]


def _write(rows: list[measuring.Row], cases: list[str]) -> None:
    shown = table("case", "robots", "tick ms", "99% below", "from poses", "plain ms", "tuned ms", "ratio", "to tuned",
                  "cost gap 95%", "largest", "violation", "memory MB")
    for row in rows:
        shown.add_row(
            row.case, str(row.robots), f"{row.tick_ms_median:.1f}", f"{row.tick_ms_p99:.1f}",
            f"{row.feedback_ms_median:.1f}", f"{row.plain_ms_median:.0f}", f"{row.tuned_ms_median:.0f}",
            f"{row.ratio:.1f}", f"{row.ratio_tuned:.1f}", f"{row.cost_gap_p95:.1e}", f"{row.cost_gap_max:.1e}",
            f"{row.violation_max:.1e}", f"{row.peak_rss_mb:.0f}",
        )
    write_table(shown)
    write("Plain: IPOPT with default options and tolerance 1e-6 on the same problem from the same last plan; tuned: "
          "with the last multipliers and a small barrier. Medians. Cost gaps are parts of the converged cost.")
    for case in cases:
        grown = measuring.growth(rows, case)
        if grown is not None:
            write(f"{case}: from 4 to 64 robots the median grows with the power {grown:.2f} of the fleet's size.")
