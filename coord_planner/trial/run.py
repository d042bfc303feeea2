# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What happened in a closed-loop run, whoever drove it: the rehearsal or real ROS nodes."""

from __future__ import annotations

from typing import Any

import attrs
import numpy as np

from ..core.fence import Line, Piece
from ..core.fleet import Fleet
from ..core.messages import Caution
from ..core.settings import SiteRules


@attrs.frozen
class RunFrame:
    """One plan as it stood at a moment, for the page."""

    time: float
    progress_rate: float
    poses: np.ndarray  # planned poses, shape (N, K, 3)
    times: np.ndarray = attrs.field(factory=lambda: np.zeros(0))  # when they are due, shape (K,), s; empty: not known


@attrs.frozen
class Run:
    """A recorded run. N robots, S samples of the truth, C commands, all on one clock.

    Attributes:
        fleet: the robots, in the order of the arrays.
        edges: (name, name, weight) of the neighbour graph in force at the start.
        manoeuvre: its name.
        times: sample times, shape (S,), seconds, increasing.
        poses: true poses, shape (N, S, 3): x, y in metres, heading in radians, unwrapped.
        speeds, curvatures: what the machines truly did, shape (N, S), m/s and 1/m.
        command_times: shape (C,), seconds, increasing.
        commanded: published commands, shape (N, C, 2): speed m/s, curvature 1/m.
        end_poses: asked ends, shape (N, 3); NaN where nothing was asked (a heading alone: NaN, NaN, heading).
        min_clearance: the site's smallest clearance, metres.
        state: the last state of the fleet ("ended" when the manoeuvre was completed).
        completed: whether the manoeuvre was completed.
        began, ended: when the motion was begun and when it ended, seconds.
        cautions: (first_s, last_s, Caution) for each warning that was raised.
        tick_ms: wall time of each tick, milliseconds, shape (K,).
        wall_time: seconds of wall time the run took.
        frames: plans along the way, for the page.
        events: (seconds, text) worth a mark on the time line.
        facts: anything else worth keeping (seed, file, coupling), JSON-able.
        site_rules: of the site, with its keep-outs and its areas with speed caps; the defaults where not known.
        edge_changes: later graphs, each with the moment from which it was in force, seconds.
        strip: lines that no footprint was to reach across: a unit normal towards the far side and how far along it,
            from the origin of the frame, the line lies, metres.
        pieces: what no footprint was to come near besides, as the manoeuvre began.
    """

    fleet: Fleet
    edges: tuple[tuple[str, str, float], ...]
    manoeuvre: str
    times: np.ndarray
    poses: np.ndarray
    speeds: np.ndarray
    curvatures: np.ndarray
    command_times: np.ndarray
    commanded: np.ndarray
    end_poses: np.ndarray
    min_clearance: float
    state: str
    completed: bool
    began: float
    ended: float
    cautions: tuple[tuple[float, float, Caution], ...]
    tick_ms: np.ndarray
    wall_time: float
    frames: tuple[RunFrame, ...] = ()
    events: tuple[tuple[float, str], ...] = ()
    facts: dict[str, Any] = attrs.field(factory=dict)
    site_rules: SiteRules = SiteRules()
    edge_changes: tuple[tuple[float, tuple[tuple[str, str, float], ...]], ...] = ()
    strip: tuple[Line, ...] = ()
    pieces: tuple[Piece, ...] = ()
