"""A bar for what takes longer than two seconds; on a terminal only."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn


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
