# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner demo``: real ROS nodes, a simulated fleet, one manoeuvre, a page to look at."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from importlib.util import find_spec
from pathlib import Path
from typing import Annotated

import typer

from .. import config
from ..config.places import example
from ..trial.kernels import load_kernels
from .speaking import BAD_INPUT, errors_reported, say
from .targets import prepare_folder

_NO_ROS = (
    "ROS 2 is not installed for this Python{reason}, and the demo runs real ROS nodes.\n"
    "Install it with `pip install '.[ros]'` in the source folder, or try `coord-planner simulate`, which needs no ROS."
)


def demo(
    out: Annotated[Path, typer.Option("--out", help="Folder for the summary and the page.")] = Path("out/demo"),
    params: Annotated[
        str, typer.Option("--params", metavar="PARAMS", help="Parameter file; the solar park when left out.")
    ] = "",
) -> None:
    """Real ROS nodes, a simulated fleet, one manoeuvre, a page to look at."""
    with errors_reported():
        file = params or str(example("solar_park.yaml"))
        config.load(file).all_starts()  # a mistake in it is told here and not in the log of a node
        if find_spec("rclpy") is None:
            say(_NO_ROS.format(reason=""))
            raise typer.Exit(BAD_INPUT)
        try:
            from ..ros.demo import run_demo
        except ImportError as error:
            if (error.name or "").startswith("coord_planner"):
                raise
            say(_NO_ROS.format(reason=f" in full ({error})"))
            raise typer.Exit(BAD_INPUT) from None
        prepare_folder(out, "--out")
        load_kernels(say)  # before nodes wait for each other
        status = run_demo(file, out)
    raise typer.Exit(status)
