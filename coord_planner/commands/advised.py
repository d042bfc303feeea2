# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Advice as tables and sentences."""

from __future__ import annotations

import math
from typing import Any, Optional

from .. import config
from .speaking import CAUTION, figure, table, write, write_heading, write_table

_COLUMNS = ("predicted", "planned", "driven")
_DEGREES = math.degrees(1.0)
_MOST_MODES = 12
_MOST_LINKS = 5


def write_advice(configuration: config.Configuration, found: dict[str, Any]) -> None:
    """Everything that ``advise --json`` prints, for people."""
    write(f"{configuration.file}: {len(found['robots'])} robots, {len(found['edges'])} links, coupling "
          f"{found['coupling']:g}.\n")
    _write_connection(found)
    _write_copying(found)
    _write_agreement(found)
    _write_recommended(found)
    _write_links(found)
    for name, manoeuvre in found["manoeuvres"].items():
        _write_manoeuvre(name, manoeuvre)
    if found["warnings"]:
        write_heading("Warnings")
        for warning in found["warnings"]:
            write(f"- {warning}")
        write()
    write(CAUTION)


def _write_connection(found: dict[str, Any]) -> None:
    write_heading("What holds the graph together")
    if found["connected"]:
        write("Every robot is joined with every other, at least through others.")
    else:
        parts = " | ".join(" ".join(part) for part in found["components"])
        write(f"Not connected. Parts that do not copy each other: {parts}")
    for key, lost in (("critical_links", "the link"), ("critical_robots", "the robot")):
        for split in found[key]:
            parts = " | ".join(" ".join(part) for part in split["parts"])
            write(f"Without {lost} {' - '.join(split['lost'])} it falls into: {parts}")
    if not found["critical_links"] and not found["critical_robots"] and len(found["edges"]) > 1:
        write("No single link and no single robot is missed: the rest stays joined.")
    write()


def _write_copying(found: dict[str, Any]) -> None:
    write_heading("How much of a led robot's turning each robot copies")
    write("By the copying law: equal fixed speeds, no limits, no price on steering, no alignment, one robot led.")
    shown = table("copies", *(f"{name} led" for name in found["robots"]))
    for name, row in zip(found["robots"], found["copy"]):
        shown.add_row(name, *(f"{share:.3f}" for share in row))
    write_table(shown)
    led = found["recommended_for"]["led"] or "whichever robot is led"
    hops = table(f"hops from {led}", *(str(count + 1) for count in range(len(found["copy_per_hop"]))))
    hops.add_row("weakest copying", *(f"{share:.3f}" for share in found["copy_per_hop"]))
    hops.add_row("strongest copying", *(f"{share:.3f}" for share in found["copy_per_hop_strongest"]))
    write_table(hops)
    write(f"Along a long line each further robot copies {found['hop_fraction']:.3f} of the one before it.\n")


def _write_agreement(found: dict[str, Any]) -> None:
    write_heading("What a disagreement is reduced to, where several robots have wishes of their own")
    shown = table("eigenvalue", "is left", "one side", "against")
    for mode in found["agreement"][:_MOST_MODES]:
        sides = [" ".join(mode["one_side"]) or "what the joined wish alike", " ".join(mode["other_side"])]
        shown.add_row(f"{mode['eigenvalue']:.4f}", f"{100 * mode['kept']:.1f}%", *sides)
    write_table(shown)


def _write_recommended(found: dict[str, Any]) -> None:
    asked = found["recommended_for"]
    led = asked["led"] or "any robot"
    write_heading("The coupling for a given copying")
    wish = f"{asked['copy']:g} copied {asked['hops']} hop{'s' * (asked['hops'] != 1)} from {led}"
    wish += ", after any one link is lost" if asked["worst_link"] else ""
    if found["recommended_coupling"] is None:
        write(f"{wish}: none does. {found['recommended_reason']}")
    else:
        lost = f" without the link {' - '.join(asked['link_lost'])}" if asked["link_lost"] else ""
        write(f"{wish}: at least {found['recommended_coupling']:.4g} (weakest: {asked['weakest_copying']} copying "
              f"{asked['weakest_led']}{lost}).")
    low, high = found["useful_couplings"]
    if low is not None:
        write(f"On this graph a coupling does something from about {low:.2g} on, and gains nothing above about "
              f"{high:.3g}.")
    write()


def _write_links(found: dict[str, Any]) -> None:
    if not found["suggested_links"]:
        return
    write_heading("Links that could be added, the most useful first")
    shown = table("link", "apart m", "weakest copying", "2nd eigenvalue", "no longer critical")
    for link in found["suggested_links"][:_MOST_LINKS]:
        shown.add_row(
            " - ".join(link["robots"]), figure(link["distance"], 1),
            f"{link['weakest_before']:.3f} to {link['weakest_after']:.3f}",
            f"{link['connectivity_before']:.3f} to {link['connectivity_after']:.3f}",
            ", ".join(" - ".join(pair) for pair in link["secured"]) or "-",
        )
    write_table(shown)
    write("A link joins two robots that can observe each other; whether these can is for the site to say.\n")


def _write_manoeuvre(name: str, manoeuvre: dict[str, Any]) -> None:
    write_heading(f"Manoeuvre {name}")
    if "refused" in manoeuvre:
        write(f"Refused: {manoeuvre['refused']}\n")
        return
    write(f"Coupling {manoeuvre['coupling']:g}, alignment {manoeuvre['alignment']:g} 1/m^2.")
    for condition in manoeuvre["conditions"]:
        kept = "kept    " if condition["kept"] else "NOT KEPT"
        changes = f": {condition['changes']}" if condition["changes"] else ""
        write(f"  {kept}  {condition['code']}: {condition['found']}{changes}")
    write()
    if "robots" in manoeuvre:
        _write_beside(manoeuvre)
    if "rehearsed_without_coupling" in manoeuvre:
        _write_uncoupled(manoeuvre)


def _write_beside(manoeuvre: dict[str, Any]) -> None:
    one_led = len(manoeuvre["led"]) == 1
    parts = ("copies: law", "plan", "rehearsal") if one_led else ()
    shown = table("robot", "hops", *parts, "turns, degrees: law", "plan", "rehearsal", "off the law: plan", "rehearsal")
    for robot in manoeuvre["robots"]:
        copies = [figure(robot.get(f"copy_{when}"), 4) for when in _COLUMNS]
        turns = [figure(robot.get(f"heading_change_{when}_rad"), 1, _DEGREES) for when in _COLUMNS]
        gaps = [_percent(robot.get(f"gap_{when}")) for when in ("planned", "driven")]
        shown.add_row(robot["robot"], figure(robot["hops"], 0), *(copies if one_led else []), *turns, *gaps)
    write_table(shown)
    write("Off the law: largest difference in turning at any moment, as a part of the led robots' largest turning. "
          "Rehearsed without noise.\n")


def _write_uncoupled(manoeuvre: dict[str, Any]) -> None:
    shown = table("rehearsed without noise", "completed", "duration s", "smallest clearance m",
                  "heading spread degrees")
    for words, key in ((f"coupling {manoeuvre['coupling']:g}", "rehearsed"),
                       ("coupling 0", "rehearsed_without_coupling")):
        run = manoeuvre[key]
        shown.add_row(words, "yes" if run["completed"] else "NO", figure(run["duration_s"], 1),
                      figure(run["min_clearance_m"], 3), figure(run["heading_spread_max_rad"], 1, _DEGREES))
    write_table(shown)


def _percent(value: Optional[float]) -> str:
    return "-" if value is None else f"{figure(value, 1, 100.0)}%"
