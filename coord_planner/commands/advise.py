# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner advise``: which coupling, which graph, and why."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from typing import Annotated, Any, Optional

import typer

from .. import config
from ..errors import RefusedError, SettingsError
from ..record.advice import Question, of_graph, of_manoeuvre
from ..trial.copying import beside_law, quiet, with_coupling
from ..trial.kernels import load_kernels
from ..trial.rehearsal import rehearse
from .advised import write_advice
from .loading import configured
from .progress import progress_shown
from .speaking import DID_NOT_HOLD, errors_reported, say, write_json


def advise(
    params: Annotated[str, typer.Argument(metavar="PARAMS", help="Parameter file (YAML).")],
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    copy: Annotated[
        Optional[float],
        typer.Option("--copy", metavar="PART", help="Part of the led robot's turning that shall be copied (0.5) ..."),
    ] = None,
    hops: Annotated[
        Optional[int], typer.Option("--hops", metavar="N", help="... by every robot so many links away (1).")
    ] = None,
    led: Annotated[
        str, typer.Option("--led", metavar="ROBOT", help="The robot that is led; whichever it is when left out.")
    ] = "",
    worst_link: Annotated[
        bool, typer.Option("--worst-link", help="The coupling must still do after any one link is lost.")
    ] = False,
    chosen: Annotated[
        Optional[list[str]],
        typer.Option("--manoeuvre", metavar="M", help="Only this manoeuvre is looked at; may be repeated."),
    ] = None,
    rehearsed: Annotated[
        bool, typer.Option("--rehearse/--no-rehearse", help="Hold manoeuvres against the law in plan and rehearsal.")
    ] = True,
    entries: Annotated[
        Optional[list[str]],
        typer.Option("--set", metavar="KEY=VALUE", help="Another value for a key of the file; may be repeated."),
    ] = None,
) -> None:
    """Which coupling and which neighbours, and why: calculated from the graph, then held against rehearsals."""
    asked = copy is not None or hops is not None or worst_link
    question = Question(0.5 if copy is None else copy, 1 if hops is None else hops, led, worst_link, asked)
    with errors_reported():
        configuration = configured(params, entries or [])
        _check_led(configuration, led)
        for name in chosen or []:
            configuration.manoeuvre(name)
        if rehearsed:
            configuration.all_starts()
            load_kernels(say)
        found = of_graph(configuration, question)
        found["manoeuvres"] = _manoeuvres(configuration, chosen or list(configuration.manoeuvres)) if rehearsed else {}
    if as_json:
        write_json(found)
    else:
        write_advice(configuration, found)
    if asked and found["recommended_coupling"] is None:
        say(found["recommended_reason"])
        raise typer.Exit(DID_NOT_HOLD)


def _check_led(configuration: config.Configuration, led: str) -> None:
    if led and led not in configuration.driven.names:
        raise SettingsError(f"{led!r} is not in the fleet", key="--led", allowed=", ".join(configuration.driven.names))


def _manoeuvres(configuration: config.Configuration, names: list[str]) -> dict[str, Any]:
    """The law beside each manoeuvre; one that is refused has its reason instead."""
    found: dict[str, Any] = {}
    for name in names:
        try:
            found[name] = _manoeuvre(configuration, name)
        except RefusedError as refused:
            found[name] = {"refused": str(refused)}
    return found


def _manoeuvre(configuration: config.Configuration, name: str) -> dict[str, Any]:
    with progress_shown(name) as progress:
        beside = beside_law(configuration, name, progress=progress)
    uncoupled = None
    if beside.planned is None:
        with progress_shown(f"{name} without coupling") as progress:
            uncoupled = rehearse(quiet(with_coupling(configuration, name, 0.0)), name, progress=progress)
    return of_manoeuvre(configuration, name, beside, uncoupled)
