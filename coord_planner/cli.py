# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The ``coord-planner`` command."""

from __future__ import annotations

import typer

from .commands.advise import advise
from .commands.bench import bench
from .commands.check import check
from .commands.demo import demo
from .commands.review import review
from .commands.simulate import simulate
from .commands.solve import solve
from .commands.sweep import sweep

app = typer.Typer(
    help="Coordinated motion planning for several ground robots that turn together. "
    "Exit status: 0 done; 1 the thing asked for did not hold; 2 bad usage or bad input.",
    add_completion=False, pretty_exceptions_enable=False, rich_markup_mode=None, no_args_is_help=True,
)
app.command()(demo)
app.command()(check)
app.command()(solve)
app.command()(simulate)
app.command()(advise)
app.command()(sweep)
app.command()(review)
app.command()(bench)


@app.callback()
def _commands() -> None:
    """Keeps the commands named even while there are few of them."""


def main() -> None:
    """Entry point."""
    app(prog_name="coord-planner")
