# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How a command speaks: results on stdout, messages for people on stderr, and the exit status."""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import typer
from rich.console import Console
from rich.table import Table

from ..errors import CoordPlannerError, SettingsError

DID_NOT_HOLD = 1  # refused, infeasible, a contact in a rehearsal
BAD_INPUT = 2
_WIDTH_OF_FILES = 160  # where the output is no terminal: wide enough that no table is squeezed

CAUTION = (
    "This is not a safety function. People are protected by the machines' certified safety systems and by the "
    "site's operating rules, which come first. Whoever puts a fleet to work with it answers for the limits and "
    "distances in the file."
)


def write(text: str = "") -> None:
    """A line of a result, on stdout; the terminal wraps it."""
    typer.echo(text)


def write_heading(text: str) -> None:
    """A heading in a result, on stdout; bold on a terminal."""
    typer.secho(text, bold=True)


def write_table(filled: Table) -> None:
    """A table and an empty line, on stdout."""
    console = Console(markup=False, highlight=False, emoji=False)
    if not console.is_terminal:
        console.width = _WIDTH_OF_FILES
    console.print(filled)
    write()


def table(*columns: str) -> Table:
    """An empty table."""
    made = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0))
    for column in columns:
        made.add_column(column, header_style="dim", overflow="fold")
    return made


def write_json(value: Any) -> None:
    """One JSON object on stdout."""
    typer.echo(json.dumps(value, indent=2, allow_nan=False))


def figure(value: float | None, digits: int, scale: float = 1.0) -> str:
    """A number for a table; "-" for none."""
    return "-" if value is None else f"{scale * value:.{digits}f}"


def say(text: str) -> None:
    """A message for people, on stderr."""
    typer.echo(text, err=True)


@contextmanager
def errors_reported() -> Iterator[None]:
    """Turn the errors that users cause into a message and an exit status."""
    try:
        yield
    except SettingsError as error:
        say(str(error))
        raise typer.Exit(BAD_INPUT) from None
    except CoordPlannerError as error:
        say(str(error))
        raise typer.Exit(DID_NOT_HOLD) from None
