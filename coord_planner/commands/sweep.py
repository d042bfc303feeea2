# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner sweep``: many rehearsals, on local cores or a cluster."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

import time
from collections.abc import Iterator, Sequence
from functools import partial
from importlib.util import find_spec
from pathlib import Path
from typing import Annotated, Optional

import typer

from ..errors import SettingsError
from ..record.sweep_figures import figures
from ..trial.kernels import load_kernels
from ..trial.sweep import cluster, local
from ..trial.sweep.file import load_sweep
from ..trial.sweep.journal import Journal
from ..trial.sweep.outcome import Outcome, outcome, write_best
from ..trial.sweep.plan import Point, points
from ..trial.sweep.point import FAILED, Record, carry_out
from ..trial.sweep.table import check_format, ordered, write_table
from .progress import count_shown
from .speaking import DID_NOT_HOLD, errors_reported, say, write_json
from .swept import as_json, write_outcome
from .targets import prepare_folder

_TABLE_EVERY = 3.0  # seconds between two versions of the table


def sweep(
    file: Annotated[str, typer.Argument(metavar="SWEEP", help="Sweep file (YAML).")],
    out: Annotated[
        Optional[Path],
        typer.Option("--out", metavar="FOLDER", help="Folder for all results; out/NAME-OF-FILE when left out."),
    ] = None,
    workers: Annotated[int, typer.Option("--workers", min=0, help="Processes on this machine; 0: one a core.")] = 0,
    address: Annotated[
        str, typer.Option("--cluster", metavar="ADDRESS", help="Address of a Dask scheduler that shall do the work.")
    ] = "",
    results: Annotated[
        str,
        typer.Option("--results", metavar="FORMAT", help="Kind of the table, parquet or csv; when left out, parquet "
                     "where pyarrow is installed."),
    ] = "",
    as_object: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    restart: Annotated[
        bool, typer.Option("--restart", help="Throw away what an earlier run of this sweep left in the folder.")
    ] = False,
    retry: Annotated[
        bool, typer.Option("--retry-failed", help="Rehearse points again that failed (not those that were refused).")
    ] = False,
) -> None:
    """Many rehearsals: which settings are best within the site's rules, and which parameters matter."""
    with errors_reported():
        wanted = load_sweep(file)
        results = results or ("parquet" if find_spec("pyarrow") else "csv")
        check_format(results)
        if address:
            cluster.check_library()
            if workers:
                raise SettingsError("a cluster has workers of its own", key="--workers", allowed="one of the two")
        folder = out or Path("out") / wanted.name
        prepare_folder(folder, "--out")
        todo = points(wanted)
        with Journal(folder, todo, restart) as journal:
            if retry:
                journal.forget([key for key, record in journal.records.items() if record.row["status"] == FAILED])
            _carry_on(journal, todo, folder / f"results.{results}", workers or local.cores(), address)
            found = outcome(wanted, journal.records.values())
        files = _write_files(found, folder, f"results.{results}")
    if as_object:
        write_json(as_json(found, files))
    else:
        write_outcome(found, files)
    if found.best is None:
        say("No setting keeps the site's rules in every rehearsal.")
        raise typer.Exit(DID_NOT_HOLD)


def _carry_on(journal: Journal, todo: Sequence[Point], table: Path, workers: int, address: str) -> None:
    """Rehearse what has no record yet; the table is brought up to date meanwhile, and at the end."""
    missing = [point for point in todo if point.key not in journal.records]
    if journal.records and missing:
        say(f"{len(journal.records)} of {len(todo)} rehearsals were done before; going on with the rest.")
    if missing:
        load_kernels(say)  # before many processes each do
    written = time.monotonic()
    try:
        with count_shown("rehearsals", len(todo), len(todo) - len(missing)) as count:
            for record in _records(missing, workers, address):
                journal.add(record)
                count(len(journal.records))
                if time.monotonic() > written + _TABLE_EVERY:
                    write_table(ordered(journal.records.values()), table)
                    written = time.monotonic()
    except KeyboardInterrupt:
        say(f"\nInterrupted: {len(journal.records)} of {len(todo)} rehearsals are kept; the same command goes on.")
        raise
    finally:
        write_table(ordered(journal.records.values()), table)


def _records(missing: Sequence[Point], workers: int, address: str) -> Iterator[Record]:
    work = partial(carry_out, measure=figures)
    if not missing:
        return iter(())
    return cluster.run_on_cluster(missing, work, address, say) if address else local.run_here(missing, work, workers)


def _write_files(found: Outcome, folder: Path, table: str) -> dict[str, str]:
    """The page and the best parameter file; returns every file of the sweep by what it is."""
    from ..record.sweep_page import write_sweep_page

    files = {"results": str(folder / table), "page": str(folder / "page.html")}
    best = folder / "best.yaml"
    if found.best is not None:
        write_best(found, best)
        files["best"] = str(best)
    else:
        best.unlink(missing_ok=True)  # an earlier run's would be taken for this one's
    write_sweep_page(found, folder / "page.html", best.read_text(encoding="utf-8") if found.best is not None else "")
    return files
