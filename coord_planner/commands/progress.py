# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A bar for what takes longer than two seconds; on a terminal only."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    TextColumn,
    TimeElapsedColumn,
    TimeRemainingColumn,
)


@contextmanager
def progress_shown(what: str) -> Iterator[Callable[[float], None]]:
    """Yields what is to be called with the part that is done, 0 to 1."""
    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda _part: None
        return
    columns = TextColumn("{task.description}"), BarColumn(), TextColumn("{task.percentage:3.0f}%"), TimeElapsedColumn()
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task(what, total=1.0)
        yield lambda part: bar.update(task, completed=part)


@contextmanager
def count_shown(what: str, total: int, done: int) -> Iterator[Callable[[int], None]]:
    """A bar that counts and says how long it will take; yields what is to be called with the number that is done."""
    console = Console(stderr=True)
    if not console.is_terminal:
        yield lambda _done: None
        return
    columns = (
        TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TextColumn("left"), TimeRemainingColumn(),
    )
    with Progress(*columns, console=console, transient=True, speed_estimate_period=600.0) as bar:
        task = bar.add_task(what, total=total, completed=done)
        yield lambda number: bar.update(task, completed=number)
