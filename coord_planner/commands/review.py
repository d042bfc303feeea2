# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner review``: what happened in a recorded run, or in two of them side by side."""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from pathlib import Path
from typing import Annotated, Any, Optional

import typer

from .. import config
from ..errors import SettingsError
from .progress import progress_shown
from .speaking import (
    DID_NOT_HOLD,
    errors_reported,
    figure,
    say,
    table,
    write,
    write_heading,
    write_json,
    write_table,
)
from .targets import prepare_file

_DEGREES = 57.29577951308232


def review(
    bags: Annotated[
        list[Path],
        typer.Argument(metavar="BAG [OTHER]", help="Recording: a rosbag2 folder, or an .mcap or .db3 file. "
                                                   "With a second one the two are compared."),
    ],
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object instead of tables.")] = False,
    page: Annotated[
        Optional[Path], typer.Option("--page", metavar="FILE", help="Also write a page to look at (HTML).")
    ] = None,
    params: Annotated[
        Optional[str],
        typer.Option("--params", metavar="PARAMS", help="Parameter file (YAML) with footprints, limits and rules; "
                                                        "those in the bag, if any, when left out."),
    ] = None,
    from_s: Annotated[
        Optional[float], typer.Option("--from", min=0.0, metavar="S", help="Begin so many seconds into the recording.")
    ] = None,
    to_s: Annotated[
        Optional[float], typer.Option("--to", min=0.0, metavar="S", help="End so many seconds into the recording.")
    ] = None,
    robots: Annotated[
        Optional[list[str]],
        typer.Option("--robot", metavar="NAME=TOPIC", help="Where the poses of a robot come from (a topic, or "
                                                           "tf:FRAME), instead of guessing; repeat for each robot."),
    ] = None,
) -> None:
    """What happened in a recording: who turned when, how near they came, what was warned of, what was lost."""
    with errors_reported():
        if len(bags) > 2:
            raise SettingsError(f"{len(bags)} recordings were given", key="BAG", allowed="one, or two to compare")
        if from_s is not None and to_s is not None and to_s <= from_s:
            raise SettingsError(f"{to_s:g} s is not after --from, {from_s:g} s", key="--to", allowed="a later moment")
        configuration = None if params is None else config.load(params)
        given = _given(robots or [])
        if page is not None:
            prepare_file(page, "--page")
        from ..record.review import review as reviewed

        found = []
        for bag in bags:
            with progress_shown(bag.name) as progress:
                found.append(reviewed(bag, configuration, from_s=from_s, to_s=to_s, robots=given, progress=progress))
        _report(found, as_json, page)


def _given(entries: list[str]) -> dict[str, str]:
    given = {}
    for entry in entries:
        name, equals, topic = entry.partition("=")
        if not (name and equals and topic):
            raise SettingsError(f"{entry!r} cannot be understood", key="--robot",
                                allowed="NAME=TOPIC, e.g. mower_1=/mower_1/odom or mower_1=tf:mower_1/base_link")
        given[name] = topic
    return given


def _report(found: list[Any], as_json: bool, page: Optional[Path]) -> None:
    from ..record.review_compare import compare

    both = compare(found[0].figures, found[1].figures) if len(found) == 2 else None
    if as_json:
        write_json(found[0].figures if both is None else both)
    else:
        for one in found:
            _write_review(one.figures)
        if both is not None:
            _write_comparison(both)
    if page is not None:
        from ..record.review_page import write_page

        write_page(found, page)
        say(f"The page is in {page}.")
    damaged = [one for one in found if one.damaged]
    for one in damaged:
        say(f"{one.figures['recording']} is not whole: {'; '.join(one.figures['losses'])}.")
    if damaged:
        raise typer.Exit(DID_NOT_HOLD)


def _write_review(figures: dict[str, Any]) -> None:
    expected = figures["messages_expected"]
    write(f"{figures['recording']}: {figure(figures['duration_s'], 1)} s, {figures['messages_read']} messages read"
          f"{'' if expected is None else f' of {expected}'}, {len(figures['robots'])} robots.")
    for loss in figures["losses"]:
        write(f"LOST: {loss}")
    for note in figures["notes"]:
        write(f"Note: {note}")
    write()
    _write_robots(figures)
    near = figures["min_clearance_m"]
    if near is not None:
        rule = figures["min_clearance_allowed_m"]
        write(f"Smallest clearance ({figures['clearance_between']}): {near:.3f} m between "
              f"{' and '.join(figures['min_clearance_pair'])} at {figures['min_clearance_s']:.1f} s"
              f"{'' if rule is None else f' (the site allows {rule:g} m)'}.\n")
    _write_turns(figures)
    _write_limits(figures)
    _write_happenings(figures)


def _write_robots(figures: dict[str, Any]) -> None:
    filled = table("robot", "poses from", "commands from", "how its motion was worked out")
    for name, robot in figures["robots"].items():
        filled.add_row(name, robot["poses_from"], robot["commands_from"] or "-", robot["motion"])
    write_table(filled)
    others = {other for robot in figures["robots"].values() for other in robot["not_taken"]}
    if others:
        write(f"Not taken: {', '.join(sorted(others))}; say otherwise with --robot NAME=TOPIC.\n")


def _write_turns(figures: dict[str, Any]) -> None:
    if not figures["turns"]:
        write("No turn was found.\n")
    for number, turn in enumerate(figures["turns"], start=1):
        first = f"{turn['first']} turned first" if turn["first"] else "Who turned first is within the noise"
        write_heading(f"Turn {number}: {turn['from_s']:.1f} to {turn['to_s']:.1f} s")
        apart = "" if turn["min_clearance_m"] is None else (
            f"; smallest clearance {turn['min_clearance_m']:.3f} m ({' and '.join(turn['min_clearance_pair'])})")
        spread = turn["heading_spread_max_rad"]
        differed = "" if spread is None else f"; headings differed by up to {figure(spread, 1, _DEGREES)} degrees"
        write(f"{first}{apart}{differed}. {_spread_in_words(turn) if len(turn['onset_s']) > 1 else ''}")
        filled = table("robot", "hops", "onset s", "+-", "largest turn rate rad/s", "+-", "share",
                       "heading change degrees")
        for name, onset in turn["onset_s"].items():
            hops = (turn["hops"] or {}).get(name)
            filled.add_row(
                name, "-" if hops is None else str(hops), figure(onset, 2), figure(turn["onset_sd_s"][name], 2),
                figure(turn["amplitude_rad_per_s"][name], 3), figure(turn["amplitude_sd_rad_per_s"][name], 3),
                figure(turn["share_of_origin"][name], 2), figure(turn["heading_change_rad"][name], 1, _DEGREES))
        write_table(filled)


def _spread_in_words(turn: dict[str, Any]) -> str:
    spread = turn["spread"]
    if spread is None:
        return "No speed of spreading: onsets do not grow with the distance by more than the noise."
    metres = "" if "m_per_s" not in spread else f", {spread['m_per_s']:.1f} m/s"
    return (f"The turn spread at {spread['hops_per_s']:.2f} +- {spread['hops_per_s_sd']:.2f} hops/s{metres}, "
            f"from {turn['hops_from']}.")


def _write_limits(figures: dict[str, Any]) -> None:
    nearest: dict[str, dict[str, Any]] = {}
    for row in figures["limits"]:
        size = row["value"] if row["used"] is None else row["used"]
        known = nearest.get(row["limit"])
        if known is None or size > (known["value"] if known["used"] is None else known["used"]):
            nearest[row["limit"]] = row
    filled = table("limit", "robot that came nearest", "driven", "allowed", "used", "at s")
    for limit, row in nearest.items():
        filled.add_row(limit, row["robot"], figure(row["value"], 3), figure(row["allowed"], 3),
                       "-" if row["used"] is None else f"{100 * row['used']:.0f} %", figure(row["at_s"], 1))
    write_table(filled)
    outside = figures["commands_outside_limits"]
    if outside is not None:
        write(f"Commands outside a limit: {outside}.\n")


def _write_happenings(figures: dict[str, Any]) -> None:
    for stop in figures["stops"]:
        write(f"{stop['from_s']:.1f} to {stop['to_s']:.1f} s: {stop['robot'] or 'everybody'} stood")
    for gap in figures["gaps"]:
        write(f"{gap['from_s']:.1f} to {gap['to_s']:.1f} s: no {gap['what']} of {gap['robot']}")
    for warning in figures["warnings"]:
        write(f"{warning['first_s']:.1f} to {warning['last_s']:.1f} s: {warning['text']}")
    filled = table("robot", "poses every s", "at most s", "late s", "at most s", "commands every s", "at most s",
                   "late s", "at most s", "off its plan after 1 s, m")
    driven = figures["planned_against_driven"] or {}
    for name, both in figures["lateness"].items():
        cells = [figure(both[kind][key], 3) for kind in ("poses", "commands")
                 for key in ("every_median_s", "every_max_s", "late_median_s", "late_max_s")]
        off = driven[name]["error_m"]["1"] if name in driven else None
        filled.add_row(name, *cells, figure(off, 3))
    write_table(filled)


def _write_comparison(both: dict[str, Any]) -> None:
    write_heading("Compared")
    filled = table("figure", "first", "second", "change")
    for row in both["differences"]:
        filled.add_row(row["figure"], *(figure(row[key], 3) for key in ("first", "second", "change")))
    write_table(filled)
    for note in both["notes"]:
        write(f"Note: {note}")
