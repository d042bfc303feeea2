# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Settings of the planner, in groups named like the groups of the parameter file."""

from __future__ import annotations

import attrs

from .area import Area
from .parameter import parameter


@attrs.frozen
class Coupling:
    """How strongly robots copy their neighbours."""

    strength: float = parameter(
        1.0, "price of turning differently from a neighbour (chi)", minimum=0.0, maximum=1e4, live=True
    )
    alignment: float = parameter(
        0.0, "price of a heading that differs from a neighbour's, times the coupling; 0 turns it off", "1/m^2",
        minimum=0.0, maximum=1e3, live=True,
    )
    may_split: bool = parameter(
        False, "true: parts of the fleet that the graph no longer joins go on by themselves", live=True
    )


@attrs.frozen
class Neighbours:
    """Where the neighbour graph comes from."""

    source: str = parameter(
        "listed", "listed: graph.edges and the topic neighbours; nearest: so many of each robot, counted from both "
        "sides; within_range: all that are near enough", choices=("listed", "nearest", "within_range"),
    )
    count: int = parameter(2, "nearest: how many", minimum=1, maximum=100, live=True)
    range: float = parameter(6.0, "within_range: how near", "m", above=0.0, maximum=1e4, live=True)
    hysteresis: float = parameter(
        0.2, "robots that are joined stay so until they are further apart by this part of the distance",
        minimum=0.0, maximum=2.0, live=True,
    )
    period: float = parameter(1.0, "how often neighbours are looked for", "s", minimum=0.1, maximum=60.0, live=True)
    warn_below: float = parameter(
        0.01, "a second-smallest eigenvalue of the graph's Laplacian below this is warned of; 0: never",
        minimum=0.0, maximum=100.0, live=True,
    )


@attrs.frozen
class Prices:
    """Small prices beside the coupled cost, and the steep ones that stand for promises."""

    curvature_rate: float = parameter(
        0.02, "price of changing the curvature", "s^2", minimum=1e-6, maximum=100.0, live=True
    )
    acceleration: float = parameter(
        0.02, "price of speeding up and braking", "s^4/m^4", minimum=1e-6, maximum=100.0, live=True
    )
    speed: float = parameter(
        2.0, "price of leaving the asked speed, relative", "1/m^2", minimum=1e-4, maximum=1e3, live=True
    )
    clearance: float = parameter(
        1000.0, "price of each metre of missing clearance, per second", "1/(m^3 s)", above=0.0, maximum=1e6, live=True
    )
    end: float = parameter(
        200.0, "price of each metre or radian by which an end is missed", "1/m^2", above=0.0, maximum=1e6, live=True
    )


@attrs.frozen
class Horizon:
    """How far and how often the planner looks ahead."""

    intervals: int = parameter(24, "intervals of the horizon", minimum=4, maximum=200)
    interval: float = parameter(0.25, "length of an interval", "s", minimum=0.05, maximum=2.0)
    rate: float = parameter(10.0, "plans a second", "1/s", minimum=1.0, maximum=50.0)
    budget: float = parameter(0.09, "time that one plan may take", "s", minimum=0.002, maximum=1.0)
    keep: float = parameter(
        2.0, "time for which the last plan is driven on without a new one; then, for as long, one curvature for all",
        "s", minimum=0.1, maximum=5.0, live=True,
    )
    lead: float = parameter(
        1.0, "time given to making the rest of a manoeuvre anew while it runs", "s", minimum=0.2, maximum=10.0
    )

    @property
    def duration(self) -> float:
        """Length of the horizon in seconds."""
        return self.intervals * self.interval


@attrs.frozen
class Commands:
    """What is sent to the robots."""

    rate: float = parameter(20.0, "commands a second", "1/s", minimum=2.0, maximum=100.0)
    publish: bool = parameter(True, "false plans without driving: nothing is sent to the robots")
    zeros_after_end: float = parameter(
        1.0, "time for which a standing fleet is sent zeros after the end", "s", minimum=0.0, maximum=60.0
    )


@attrs.frozen
class SpeedCap:
    """An area in which no robot drives faster than ``max_speed``, m/s."""

    area: Area
    max_speed: float


@attrs.frozen
class SiteRules:
    """The rules of the site; they tighten the robots' limits and never loosen them."""

    reference: str = parameter("the site's operating rules", "the site's own document that warnings quote")
    min_clearance: float = parameter(
        0.5, "smallest allowed distance between two robots' footprints", "m", minimum=0.0, maximum=100.0, live=True
    )
    refuse_unsafe_silence: bool = parameter(
        False, "true: a manoeuvre is refused, not only warned of, when robots timing out separately would come too near"
    )
    max_speed: float = parameter(
        50.0, "speed cap for every robot on the site", "m/s", above=0.0, maximum=50.0, live=True
    )
    max_lateral_acceleration: float = parameter(
        20.0, "largest lateral acceleration for every robot on the site", "m/s^2", above=0.0, maximum=20.0, live=True
    )
    keep_out_clearance: float = parameter(
        0.0, "smallest allowed distance between a footprint and a keep-out area", "m", minimum=0.0, maximum=100.0,
        live=True,
    )
    keep_outs: tuple[Area, ...] = ()
    speed_caps: tuple[SpeedCap, ...] = ()


@attrs.frozen
class Hazard:
    """What is done about points that arrive on ``hazard``."""

    sight: float = parameter(
        8.0, "a robot sees a hazard that is no further away than this", "m", above=0.0, maximum=1e3, live=True
    )
    clearance: float = parameter(
        1.0, "smallest allowed distance between a footprint and a hazard, seen or not", "m", minimum=0.0,
        maximum=100.0, live=True,
    )
    expires: float = parameter(
        20.0, "a hazard that is not heard of again is forgotten after so long", "s", above=0.0, maximum=3600.0,
        live=True,
    )
    armed_for: float = parameter(
        60.0, "turning away is armed for so long by a call of its service", "s", above=0.0, maximum=3600.0, live=True
    )


@attrs.frozen
class Clearance:
    """What the planner keeps beyond the site's smallest clearance."""

    pose_uncertainty: float = parameter(
        0.05, "uncertainty of a pose, added for each robot of a pair", "m", minimum=0.0, maximum=5.0, live=True
    )
    response_uncertainty: float = parameter(
        0.02, "part of a robot's response time that is not known; times its speed, added for each robot",
        "s", minimum=0.0, maximum=2.0, live=True,
    )
    reach: float = parameter(
        4.0, "pairs that come nearer than the smallest clearance plus this are watched by the optimisation",
        "m", above=0.0, maximum=100.0,
    )


@attrs.frozen
class Poses:
    """Which poses are believed, and how noisy they are."""

    max_age: float = parameter(0.5, "older poses are not used", "s", above=0.0, maximum=10.0, live=True)
    max_future: float = parameter(
        0.1, "poses from further in the future are not used", "s", minimum=0.0, maximum=10.0, live=True
    )
    max_jump: float = parameter(
        0.5, "a larger jump of a pose stops the group", "m", above=0.0, maximum=100.0, live=True
    )
    noise_xy: float = parameter(0.02, "standard deviation of a pose's position", "m", above=0.0, maximum=5.0, live=True)
    noise_heading_deg: float = parameter(
        0.5, "standard deviation of a pose's heading", "deg", above=0.0, maximum=45.0, live=True
    )


@attrs.frozen
class Progress:
    """How the group's progress along the reference slows when a robot is held up."""

    dead_band: float = parameter(0.05, "lag that slows nobody", "m", minimum=0.0, maximum=10.0, live=True)
    full_lag: float = parameter(
        0.4, "lag beyond the dead band at which progress is slowest", "m", above=0.0, maximum=20.0, live=True
    )
    look_ahead: float = parameter(
        0.8, "a robot slower than asked is expected to fall back for this long", "s", minimum=0.0, maximum=5.0,
        live=True,
    )
    filter_time: float = parameter(
        0.2, "time constant of the filter on each robot's lag", "s", minimum=0.0, maximum=5.0, live=True
    )
    slowest: float = parameter(
        0.15, "slowest progress before the group is stopped", "", minimum=0.05, maximum=1.0, live=True
    )
    recovery: float = parameter(
        0.5, "rate at which progress returns to full", "1/s", above=0.0, maximum=10.0, live=True
    )
    catch_up: float = parameter(
        1.5, "time in which a robot beyond the dead band is asked to catch up with the group", "s",
        minimum=0.2, maximum=60.0, live=True,
    )
    max_lag: float = parameter(
        1.5, "a lag beyond this stops the group in step", "m", above=0.0, maximum=100.0, live=True
    )


@attrs.frozen
class Settings:
    """All groups together; ``Settings()`` holds every default."""

    coupling: Coupling = Coupling()
    neighbours: Neighbours = Neighbours()
    prices: Prices = Prices()
    horizon: Horizon = Horizon()
    commands: Commands = Commands()
    site_rules: SiteRules = SiteRules()
    hazard: Hazard = Hazard()
    clearance: Clearance = Clearance()
    poses: Poses = Poses()
    progress: Progress = Progress()
