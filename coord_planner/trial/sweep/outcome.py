# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the records of a sweep say together."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any, Optional

import attrs

from ... import config
from ...config.rewrite import as_yaml, rewritten
from .choice import Setting, best, front, judged
from .measures import MAIN
from .plan import Sweep
from .point import Record
from .sensitivity import Effect, effects
from .table import ordered


@attrs.frozen(eq=False)
class Outcome:
    """A sweep's settings, the best of them, and what matters.

    Attributes:
        rows: of the table, in the order of the points. tracks: of the turns, by the key of their point.
        settings: every one, judged. best: within the rules and with the least objective; None where none keeps them.
        shipped: the setting that is the file as it stands, where the sweep has it.
        front: settings that no other beats in all measures that count (in the main ones where only one counts).
        effects: of every parameter on every main measure and on the objective's.
    """

    sweep: Sweep
    rows: tuple[Mapping[str, Any], ...]
    tracks: Mapping[str, Mapping[str, Any]]
    settings: tuple[Setting, ...]
    best: Optional[Setting]
    shipped: Optional[Setting]
    front: tuple[int, ...]
    effects: tuple[Effect, ...]


def outcome(sweep: Sweep, records: Iterable[Record]) -> Outcome:
    """Put the records of a sweep together."""
    records = list(records)
    rows = ordered(records)
    values = sweep.settings()
    settings = judged(rows, [sweep.labels(each) for each in values], sweep.objective, sweep.within)
    shipped = sweep.shipped()
    counted = [name for name, weight in sweep.objective.items() if weight]
    measures = list(dict.fromkeys((*MAIN, *counted)))
    return Outcome(
        sweep=sweep, rows=tuple(rows), tracks={record.key: record.track for record in records if record.track},
        settings=settings, best=best(settings),
        shipped=settings[values.index(shipped)] if shipped in values else None,
        front=front(settings, counted if len(counted) > 1 else MAIN),
        effects=effects(settings, measures, {axis.key: axis.ordered for axis in sweep.axes}),
    )


def write_best(found: Outcome, file: Path) -> None:
    """Write the parameter file with the best settings in it, ready for the robots; there must be a best one."""
    assert found.best is not None
    sweep = found.sweep
    wanted = config.from_parameters({**sweep.base.flat, **sweep.settings()[found.best.number]}).flat
    given = config.load(sweep.base.file).flat
    changes = {key: value for key, value in wanted.items() if given.get(key) != value}
    text = rewritten(Path(sweep.base.file).read_text(encoding="utf-8-sig"), changes)
    file.write_text("\n".join(_heading(found, changes, given)) + "\n" + text, encoding="utf-8")
    if config.load(file).flat != wanted:
        raise AssertionError(f"{file} does not say what the sweep found: an error of this program")


def _heading(found: Outcome, changes: Mapping[str, Any], given: Mapping[str, Any]) -> list[str]:
    sweep = found.sweep
    assert found.best is not None
    lines = [
        f"# Written by `coord-planner sweep` ({sweep.name}): the best of {len(found.settings)} settings for "
        f"{' and '.join(sweep.manoeuvres)}, from rehearsals",
        f"# with simulated machines. Made of {Path(sweep.base.file).name}; rehearse and test it on the site before "
        "anybody relies on it.",
    ]
    for key, value in changes.items():
        before = f" instead of {as_yaml(given[key])}" if key in given else ""
        lines.append(f"#   {key}: {as_yaml(value)}{before}")
    return [*lines, "#" if changes else "# Nothing had to be changed."]
