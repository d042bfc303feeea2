# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parameter groups that the pure planning code does not know of: names, places, the simulation."""

from __future__ import annotations

import attrs

from ..core.parameter import parameter
from ..errors import SettingsError


@attrs.frozen
class Node:
    """Parameters of the planner node itself, at the top level of the file."""

    activate_on_start: bool = parameter(
        False, "true: the planner node configures and activates itself when it starts; that alone moves nothing"
    )


@attrs.frozen
class FleetWords:
    """Group ``fleet``."""

    frame: str = parameter("map", "the frame that all poses are in")
    name: str = parameter("fleet", "name of the fleet, in status messages and in the heartbeat")
    listen_time: float = parameter(
        4.0, "a planner that becomes active has listened for so long, since it was configured, for others",
        "s", minimum=0.0, maximum=60.0,
    )
    invented: bool = parameter(False, "true: site and robots are made up, and pages made of them say so")


@attrs.frozen
class Failures:
    """Group ``failures``: problems that no plan was found for, kept as files for ``coord-planner solve``."""

    folder: str = parameter("", "folder that they are kept in, made when it is needed; empty: none are kept")
    most: int = parameter(20, "files that are kept at most; the oldest go first", "", minimum=1, maximum=1000)
    max_megabytes: float = parameter(20.0, "size of all of them together", "MB", above=0.0, maximum=10000.0)


@attrs.frozen
class Names:
    """The lists of names that other keys hang on: ``robots.names``, ``manoeuvres.names`` and those of areas."""

    robots: tuple[str, ...] = parameter(attrs.NOTHING, "the robots of the fleet, in the order of every table and array")
    manoeuvres: tuple[str, ...] = parameter((), "the manoeuvres that can be begun, each by its own service")
    keep_outs: tuple[str, ...] = parameter((), "areas that no footprint may enter")
    speed_caps: tuple[str, ...] = parameter((), "areas with a speed cap of their own")


@attrs.frozen
class Graph:
    """Group ``graph``."""

    edges: tuple[str, ...] = parameter(
        (), "who copies whom, in both directions: 'NAME NAME' or 'NAME NAME WEIGHT', the weight 1 when left out"
    )


@attrs.frozen
class Place:
    """Where a simulated robot stands at first, and whether the planner drives it at all (per robot)."""

    start_x: float | None = parameter(
        None, "where the simulated robot's pose is at first", "m", minimum=-1e6, maximum=1e6
    )
    start_y: float | None = parameter(
        None, "where the simulated robot's pose is at first", "m", minimum=-1e6, maximum=1e6
    )
    start_heading_deg: float = parameter(
        0.0, "heading of the simulated robot at first, anticlockwise from the x axis", "deg",
        minimum=-36000.0, maximum=36000.0,
    )
    enabled: bool = parameter(True, "false: the robot leaves the group, or stays out of it; true: it joins", live=True)


@attrs.frozen
class Simulation:
    """Group ``simulation``: how imperfect simulated robots are."""

    seed: int = parameter(1, "seed of the random numbers", minimum=0, maximum=2**31 - 1)
    pose_noise_xy: float = parameter(
        0.02, "standard deviation of a reported position, in each axis", "m", minimum=0.0, maximum=5.0
    )
    pose_noise_heading_deg: float = parameter(
        0.5, "standard deviation of a reported heading", "deg", minimum=0.0, maximum=45.0
    )
    pose_rate: float = parameter(20.0, "poses a second from each robot", "1/s", minimum=1.0, maximum=200.0)
    pose_delay: float = parameter(0.0, "how late a pose arrives after its stamp", "s", minimum=0.0, maximum=2.0)
    speed_lag: float = parameter(
        -1.0, "time constant of every robot's speed; -1: each robot's own", "s", minimum=-1.0, maximum=5.0
    )
    curvature_lag: float = parameter(
        -1.0, "time constant of every robot's curvature; -1: each robot's own", "s", minimum=-1.0, maximum=5.0
    )
    command_delay: float = parameter(
        -1.0, "time from a command to its first effect, for every robot; -1: each robot's own", "s",
        minimum=-1.0, maximum=2.0,
    )
    speed_factor: float = parameter(
        1.0, "part of the commanded speed that every machine reaches", above=0.0, maximum=2.0
    )
    publish_clock: bool = parameter(
        False, "true: the simulator node publishes /clock, for nodes with use_sim_time"
    )
    rate_factor: float = parameter(
        1.0, "seconds of simulated time in a second of real time; other than 1 only with publish_clock",
        above=0.0, maximum=20.0,
    )

    def __attrs_post_init__(self) -> None:
        if self.rate_factor != 1.0 and not self.publish_clock:
            raise SettingsError(f"{self.rate_factor:g} without publish_clock: nobody else would know the time",
                                key="rate_factor", allowed="1, or publish_clock: true")
