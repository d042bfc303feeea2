# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner check``: is a parameter file sound, and what does it say?"""

# No postponed annotations here: typer 0.9, which Ubuntu 24.04 ships, does not see through them.

from pathlib import Path
from typing import Annotated, Optional

import typer

from .. import config
from ..config.notes import notes
from ..config.security_policy import policy
from ..core.fleet import Robot
from ..core.graph import hop_fraction
from ..core.manoeuvre import EqualRadius, Manoeuvre, ToEnds, TurnAway
from ..core.settings import SiteRules
from ..errors import SettingsError
from ..trial.falling_silent import Prospect, prospect
from ..trial.kernels import load_kernels
from .progress import progress_shown
from .speaking import CAUTION, DID_NOT_HOLD, errors_reported, say, table, write, write_heading, write_table
from .targets import prepare_file

_NOBODY = "one robot, nobody and nothing to come near."


def check(
    params: Annotated[str, typer.Argument(metavar="PARAMS", help="Parameter file (YAML).")],
    security_policy: Annotated[
        Optional[Path],
        typer.Option("--security-policy", metavar="FILE", help="Write the planner's ROS 2 security policy (XML)."),
    ] = None,
    quick: Annotated[
        bool, typer.Option("--quick", help="Leave out what takes time: planning every manoeuvre to see whether robots "
                                           "stay clear should the planner fall silent.")
    ] = False,
    namespace: Annotated[
        Optional[str],
        typer.Option("--namespace", metavar="NS", help="With --security-policy: namespace of the planner and its "
                                                       "robots; / when left out."),
    ] = None,
) -> None:
    """Is this parameter file sound? A summary of it, or its errors."""
    with errors_reported():
        configuration = config.load(params)
        if security_policy is not None:
            _write_policy(configuration, security_policy, namespace or "/")
        elif namespace is not None:
            raise SettingsError(f"{namespace!r} is for the security policy, and none is asked for", key="--namespace",
                                allowed="together with --security-policy FILE")
    write(f"{params}: sound. Fleet {configuration.fleet_name}, {len(configuration.fleet)} robots, "
          f"poses in frame {configuration.frame}.\n")
    _write_robots(configuration)
    _write_graph(configuration)
    _write_manoeuvres(configuration)
    _write_rules(configuration)
    _write_notes(configuration)
    if not quick:
        load_kernels(say)
    kept = quick or _write_silence(configuration)
    write(CAUTION)
    if not kept:
        raise typer.Exit(DID_NOT_HOLD)


def _write_policy(configuration: config.Configuration, file: Path, namespace: str) -> None:
    text = policy(configuration, namespace)
    prepare_file(file, "--security-policy")
    file.write_text(text, encoding="utf-8")
    say(f"security policy: {file}. It limits the planner alone; who else may speak is for the policies of the others.")


def _write_robots(configuration: config.Configuration) -> None:
    write_heading("Robots and their limits")
    shown = table("robot", "drive", "footprint m", "radius m", "steering 1/(m s)", "speed m/s", "speeding up m/s^2",
                  "braking m/s^2", "turning rad/s", "sideways m/s^2", "time-out s")
    for robot in configuration.fleet.robots:
        shown.add_row(*_robot_row(robot, configuration.connections[robot.name]))
    write_table(shown)


def _robot_row(robot: Robot, connection: config.Connection) -> list[str]:
    limits, footprint = robot.limits, robot.footprint
    return [
        robot.name,
        connection.drive,
        f"{footprint.footprint_length:g} x {footprint.footprint_width:g}",
        f"from {1.0 / limits.max_curvature:.2f}",
        f"{limits.max_curvature_rate:.3g}",
        f"{limits.min_speed:g} to {limits.max_speed:g}",
        f"{limits.max_acceleration:g}",
        f"{limits.max_braking:g}",
        f"{limits.max_turn_rate:g}",
        f"{limits.max_lateral_acceleration:g}",
        f"{connection.command_timeout:g}",
    ]


def _write_graph(configuration: config.Configuration) -> None:
    graph, coupling = configuration.graph, configuration.settings.coupling
    edges = ", ".join(f"{a} - {b}" + (f" ({weight:g})" if weight != 1.0 else "") for a, b, weight in graph.edges)
    write_heading("Neighbours")
    write(f"{edges or 'none'}. {'Connected.' if graph.connected else 'Not connected.'}")
    write(f"Coupling {coupling.strength:g}, alignment {coupling.alignment:g} 1/m^2. Along a long line each further "
          f"robot copies {100 * hop_fraction(coupling.strength):.0f}% of the turning of the one before it.\n")


def _write_manoeuvres(configuration: config.Configuration) -> None:
    write_heading("Manoeuvres")
    shown = table("manoeuvre", "kind", "asked", "speed m/s", "coupling", "alignment 1/m^2")
    for name, manoeuvre in configuration.manoeuvres.items():
        shown.add_row(*_manoeuvre_row(name, manoeuvre, configuration))
    write_table(shown)


def _manoeuvre_row(name: str, manoeuvre: Manoeuvre, configuration: config.Configuration) -> list[str]:
    coupling = configuration.settings.coupling
    return [
        name,
        str(configuration.flat[f"manoeuvres.{name}.kind"]),
        _asked(manoeuvre),
        f"{manoeuvre.speed:g}",
        f"{coupling.strength if manoeuvre.coupling is None else manoeuvre.coupling:g}",
        f"{coupling.alignment if manoeuvre.alignment is None else manoeuvre.alignment:g}",
    ]


def _asked(manoeuvre: Manoeuvre) -> str:
    if isinstance(manoeuvre, EqualRadius):
        side = "left" if manoeuvre.angle_deg >= 0 else "right"
        return f"everyone {abs(manoeuvre.angle_deg):g} degrees to the {side}, radius {manoeuvre.radius:g} m"
    if not isinstance(manoeuvre, ToEnds):
        return manoeuvre.in_words()
    ends = manoeuvre.ends()
    posed = [name for name, end in ends.items() if end.x is not None]
    headed = [name for name in ends if name not in posed]
    words = [("a pose for", posed), ("a heading for", headed)]
    return "; ".join(f"{what} {', '.join(names)}" for what, names in words if names)


def _write_rules(configuration: config.Configuration) -> None:
    settings = configuration.settings
    rules, margin, horizon = settings.site_rules, settings.clearance, settings.horizon
    write_heading("Site rules and planning")
    write(f"From {rules.reference}: at least {rules.min_clearance:g} m between any two robots, at most "
          f"{rules.max_speed:g} m/s and {rules.max_lateral_acceleration:g} m/s^2 sideways.")
    _write_areas(rules)
    write(f"On top of the clearance, for each robot of a pair: {margin.pose_uncertainty:g} m, and its speed times "
          f"{margin.response_uncertainty:g} s.")
    write(f"{horizon.rate:g} plans a second over {horizon.duration:g} s in {horizon.intervals} intervals; commands "
          f"{settings.commands.rate:g} times a second.\n")


def _write_areas(rules: SiteRules) -> None:
    for area in rules.keep_outs:
        pieces = f"{len(area.pieces)} convex piece{'s' if len(area.pieces) > 1 else ''}"
        write(f"Keep-out {area.name}: {area.polygon.area:.1f} m^2, {len(area.corners)} corners, planned with as "
              f"{pieces}; footprints stay {rules.keep_out_clearance:g} m away.")
    for cap in rules.speed_caps:
        write(f"Speed cap {cap.area.name}: at most {cap.max_speed:g} m/s on {cap.area.polygon.area:.1f} m^2.")


def _write_notes(configuration: config.Configuration) -> None:
    found = notes(configuration)
    if found:
        write_heading("Worth knowing")
        for note in found:
            write(f"- {note}")
        write()


def _write_silence(configuration: config.Configuration) -> bool:
    """Whether robots stay clear should the planner fall silent in any manoeuvre; False where the file forbids less."""
    if not configuration.manoeuvres:
        return True
    write_heading("Should the planner fall silent")
    if any(name not in configuration.starts for name in configuration.driven.names):
        write("Not looked at: the file gives no start for every robot (start_x, start_y, start_heading_deg).\n")
        return True
    rules, kept = configuration.settings.site_rules, True
    with progress_shown("planning every manoeuvre") as progress:
        for done, name in enumerate(configuration.manoeuvres):
            if isinstance(configuration.manoeuvres[name], TurnAway):
                write(f"{name}: looked at when a hazard begins it.")
                continue
            found = prospect(configuration, name)
            write(f"{name}: {_in_words(found, rules)}")
            kept = kept and not (found.refused and found.silence is not None)
            progress((done + 1) / len(configuration.manoeuvres))
    write()
    return kept


def _in_words(found: Prospect, rules: SiteRules) -> str:
    silence = found.silence
    if found.refused:
        return f"would be refused from the starts of the file: {found.refused}."
    if silence is None:
        return _NOBODY
    words, unsafe = [], silence.unsafe(rules.min_clearance)
    if silence.nearing is not None:
        near = silence.nearing
        compared = f"; the site allows {rules.min_clearance:g} m"
        if unsafe.nearing is not None:
            compared = f", {rules.min_clearance - near.clearance:.2f} m less than the site allows"
        words.append(f"robots that time out separately come within {near.clearance:.2f} m ({' and '.join(near.pair)}, "
                     f"silent after {near.instant:.1f} s){compared}.")
    if silence.entering is not None:
        into = silence.entering
        gap = f"with {into.spare:.2f} m to spare to"
        if unsafe.entering is not None:
            gap = f"{-into.spare:.2f} m too near to"
        words.append(f"One comes {gap} {into.area} ({into.robot}, silent after {into.instant:.1f} s).")
    if unsafe.nearing is not None or unsafe.entering is not None:
        words.append("Shorter command time-outs, a lower speed or more room would help; with "
                     "site_rules.refuse_unsafe_silence it would be refused.")
    return " ".join(words) or _NOBODY
