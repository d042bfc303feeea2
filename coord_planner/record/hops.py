# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How much each hop turned when a fleet turned away from something, against the copying law."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..core.advice.copying import led_shares
from ..core.graph import NeighbourGraph
from ..trial.run import Run
from .metrics import plain


def turned_by_hop(run: Run) -> list[dict[str, Any]]:
    """For each number of hops from those who saw the hazard: robots, how far they turned and what the law says.

    ``turned_rad``: mean heading change since the hazard was heard of. ``share``: of what those turned who saw it.
    ``law``: the share by the copying law, which holds without alignment and while no limit is met. [] for a run
    in which nobody turned away.
    """
    away = run.facts.get("turned_away")
    if not away:
        return []
    graph, names = NeighbourGraph(run.fleet.names, run.edges), run.fleet.names
    led = [names.index(name) for name in away["seen_by"]]
    hops, law = graph.hops()[:, led].min(axis=1), led_shares(graph, away["coupling"], led).sum(axis=1)
    since = int(np.searchsorted(run.times, away["at"]))
    turned = run.poses[:, -1, 2] - run.poses[:, min(since, len(run.times) - 1), 2]
    whole = float(np.mean(turned[led]))
    return [
        {"hops": int(count), "robots": [name for name, own in zip(names, hops) if own == count],
         "turned_rad": plain(float(np.mean(turned[hops == count]))),
         "share": plain(float(np.mean(turned[hops == count])) / whole if whole else np.nan),
         "law": plain(float(np.mean(law[hops == count])))}
        for count in np.unique(hops[np.isfinite(hops)])
    ]
