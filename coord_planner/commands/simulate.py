# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner simulate``: a closed-loop run of planner and simulated fleet, without ROS."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from pathlib import Path
from typing import Annotated, Any, Optional

import typer

from .. import config
from ..config.failures import FailureStore
from ..errors import RefusedError, SettingsError
from ..trial.faults import Fault
from ..trial.kernels import load_kernels
from ..trial.run import Run
from ..trial.sighting import Sighting, check_arming, sighting
from .loading import configured
from .progress import progress_shown
from .speaking import (
    DID_NOT_HOLD,
    errors_reported,
    figure,
    say,
    table,
    write,
    write_json,
    write_table,
)
from .targets import prepare_bag, prepare_file


def simulate(
    params: Annotated[str, typer.Argument(metavar="PARAMS", help="Parameter file (YAML).")],
    manoeuvre: Annotated[
        str, typer.Option("--manoeuvre", metavar="M", help="Name of the manoeuvre, as in manoeuvres.names.")
    ],
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    seed: Annotated[
        Optional[int], typer.Option("--seed", min=0, help="Seed of the random numbers; simulation.seed when left out.")
    ] = None,
    faults: Annotated[
        Optional[Path],
        typer.Option("--faults", metavar="FILE",
                     help="What goes wrong on the way (YAML): faults:, a list of {kind, robot or edge, from_s, to_s, "
                          "value}."),
    ] = None,
    hazard: Annotated[
        Optional[str],
        typer.Option("--hazard", metavar="'X Y SECONDS'", help="A hazard turns up at a point, so long after the motion "
                                                             "began; everyone who could come near it stops."),
    ] = None,
    arm: Annotated[
        Optional[str],
        typer.Option("--arm", metavar="M", help="With --hazard: this manoeuvre of the kind turn_away is armed for it."),
    ] = None,
    entries: Annotated[
        Optional[list[str]],
        typer.Option("--set", metavar="KEY=VALUE", help="Another value for a key of the file; may be repeated."),
    ] = None,
    page: Annotated[
        Optional[Path], typer.Option("--page", metavar="FILE", help="Also write a page to look at (HTML).")
    ] = None,
    picture: Annotated[
        Optional[Path], typer.Option("--picture", metavar="FILE", help="Also write a still picture of the turn (SVG).")
    ] = None,
    bag: Annotated[
        Optional[Path], typer.Option("--bag", metavar="DIR", help="Also record it: a rosbag2 folder (MCAP), made new.")
    ] = None,
) -> None:
    """Closed loop without ROS: does the manoeuvre keep its spacing, every limit and the site's rules?"""
    with errors_reported():
        configuration = configured(params, entries or [])
        configuration.manoeuvre(manoeuvre)
        configuration.all_starts()
        struck, seen = _faults(faults, configuration), _sighting(hazard, arm, configuration)
        if page is not None:
            prepare_file(page, "--page")
        if picture is not None:
            prepare_file(picture, "--picture")
        if bag is not None:
            prepare_bag(bag, "--bag")
        load_kernels(say)
        before = _kept(configuration)
        try:
            run = _run(configuration, manoeuvre, configuration.simulation.seed if seed is None else seed, struck, seen)
        except RefusedError as refused:
            if as_json:
                write_json({"completed": False, "state": "refused", "reason": refused.reason, "remedy": refused.remedy})
            raise
        finally:
            for file in sorted(_kept(configuration) - before):
                say(f"No plan was found for a problem; it is kept in {file}. To solve it: coord-planner solve {file}")
        if bag is not None:
            _record(run, configuration, bag)
        _report(run, as_json, page, picture)


def _faults(file: Path | None, configuration: config.Configuration) -> tuple[Fault, ...]:
    if file is None:
        return ()
    from ..trial.fault_file import load_faults

    return load_faults(file, configuration.graph.relative_to(configuration.driven.names))


def _sighting(hazard: str | None, arm: str | None, configuration: config.Configuration) -> Sighting | None:
    if arm is not None:
        if hazard is None:
            raise SettingsError(f"{arm!r} is armed for no hazard", key="--arm", allowed="together with --hazard")
        check_arming(configuration.manoeuvre(arm), arm)
    return None if hazard is None else sighting(hazard, arm or "")


def _run(
    configuration: config.Configuration, manoeuvre: str, seed: int, faults: tuple[Fault, ...], seen: Sighting | None
) -> Run:
    from ..trial.rehearsal import rehearse

    with progress_shown(manoeuvre) as progress:
        return rehearse(configuration, manoeuvre, seed=seed, faults=faults, seen=seen, progress=progress)


def _kept(configuration: config.Configuration) -> set[Path]:
    """Problems without a plan that are kept so far."""
    folder = configuration.failures.folder
    return set(FailureStore(folder).files()) if folder else set()


def _record(run: Run, configuration: config.Configuration, bag: Path) -> None:
    from ..record.bag_write import write_bag

    count = write_bag(run, bag, frame=configuration.frame, parameters=configuration.flat)
    say(f"The recording is in {bag}: {count} messages.")


def _report(run: Run, as_json: bool, page: Path | None, picture: Path | None) -> None:
    from ..record.hops import turned_by_hop
    from ..record.metrics import summary

    figures, hops = summary(run), turned_by_hop(run)
    if hops:
        figures["turned_by_hop"] = hops
    if as_json:
        write_json(figures)
    else:
        _write_figures(run, figures)
    if page is not None:
        from ..record.page import write_page

        write_page(run, page)
        say(f"The page is in {page}.")
    if picture is not None:
        from ..record.picture import write_picture

        write_picture(run, picture)
        say(f"The picture is in {picture}.")
    failures = _failures(run, figures)
    if failures:
        say(f"{run.manoeuvre} did not hold: {'; '.join(failures)}.")
        raise typer.Exit(DID_NOT_HOLD)


def _failures(run: Run, figures: dict[str, Any]) -> list[str]:
    """What the manoeuvre promised and did not keep."""
    from ..record.areas import intrusions, speeding

    found = []
    if not figures["completed"]:
        found.append(f"it was not completed, the fleet is {figures['state']}")
    if figures["contacts"]:
        found.append(f"{figures['contacts']} contacts")
    if figures["limit_violations"]:
        found.append(f"{figures['limit_violations']} commands outside a limit")
    nearest = figures["min_clearance_m"]
    if nearest is not None and nearest < run.min_clearance:
        found.append(f"two robots came within {nearest:.3f} m, and the site allows {run.min_clearance:g} m")
    found += [breach.words("m") for breach in intrusions(run)] + [breach.words("m/s") for breach in speeding(run)]
    return found


def _write_hops(hops: list[dict[str, Any]]) -> None:
    if not hops:
        return
    shown = table("hops from who saw it", "robots", "turned rad", "share", "by the copying law")
    for hop in hops:
        shown.add_row(str(hop["hops"]), ", ".join(hop["robots"]), figure(hop["turned_rad"], 3),
                      figure(hop["share"], 3), figure(hop["law"], 3))
    write_table(shown)


def _write_figures(run: Run, figures: dict[str, Any]) -> None:
    write(f"{run.manoeuvre}: {figures['state']} after {figure(figures['duration_s'], 1)} s; "
          f"{figures['contacts']} contacts, {figures['limit_violations']} commands outside a limit; smallest clearance "
          f"{figure(figures['min_clearance_m'], 2)} m (the site allows {run.min_clearance:g} m).\n")
    columns = {"heading_change_rad": "heading change rad", "turn_onset_s": "turn onset s", "end_error_m": "end error m",
               "end_heading_error_rad": "end heading error rad"}
    robots = table("robot", *columns.values())
    for name in run.fleet.names:
        robots.add_row(name, *(figure(figures[key][name], 3) for key in columns))
    write_table(robots)
    _write_hops(figures.get("turned_by_hop", []))
    for warning in figures["warnings"]:
        write(f"{figure(warning['first_s'], 1)} to {figure(warning['last_s'], 1)} s: {warning['text']}")
    ticks = figures["tick_ms"]
    write(f"Ticks: median {figure(ticks['median'], 1)} ms, 99% below {figure(ticks['p99'], 1)} ms; "
          f"{figure(figures['real_time_factor'], 1)} times as fast as real time.")

