# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What ``advise`` has found, as the one JSON object that it prints and its tables are made from."""

from __future__ import annotations

import math
from typing import Any, Optional

import attrs
import numpy as np

from ..config import Configuration
from ..core.advice.agreement import modes
from ..core.advice.choosing import Choice, Wanted, after_any_loss, smallest_coupling
from ..core.advice.copying import copy_matrix, per_hop
from ..core.advice.links import NewLink, Split, critical_links, critical_robots, suggested_links
from ..core.advice.measuring import Copied
from ..core.advice.strength import strength
from ..core.graph import hop_fraction
from ..errors import RefusedError, SettingsError
from ..trial.copying import LawBeside, driven_graph
from ..trial.run import Run
from .metrics import plain, summary

_FIGURES = ("completed", "duration_s", "min_clearance_m", "heading_spread_max_rad", "heading_change_rad")


@attrs.frozen
class Question:
    """What the engineer asks in reverse.

    Attributes:
        share, hops: so much shall be copied so many links away. led: the robot that is led; "" for whichever it is.
        worst_link: whether that shall hold also after any one link is lost. asked: false where all this is our guess.
    """

    share: float = 0.5
    hops: int = 1
    led: str = ""
    worst_link: bool = False
    asked: bool = False


def of_graph(configuration: Configuration, question: Question) -> dict[str, Any]:
    """All that follows from the graph and the coupling alone. Matrices are robot by robot, in the order of ``robots``.

    ``recommended_coupling`` is None, with the reason beside it, where no coupling does what is asked.
    ``copy``: row k, column j: the part of robot j's turning that robot k copies when j alone has an end.
    ``copy_per_hop``: the weakest copying at 1, 2, ... hops from a led robot. ``agreement``: mode by mode.

    Raises:
        SettingsError: what is asked means nothing on this graph.
    """
    graph, coupling = driven_graph(configuration), configuration.settings.coupling.strength
    led = _led(configuration, question)
    shares, ways = copy_matrix(graph, coupling), graph.hops()
    hop = per_hop(shares, ways, led)
    judged = strength(graph, coupling)
    return {
        "robots": list(graph.names), "edges": [list(edge) for edge in graph.edges], "coupling": coupling,
        "connected": graph.connected, "components": [list(part) for part in graph.components()],
        "spectrum": plain(np.maximum(graph.spectrum(), 0.0)),
        "agreement": [plain(attrs.asdict(mode)) for mode in modes(graph, coupling)],
        "copy": plain(shares), "hops": plain(ways),
        "copy_per_hop": [weakest for weakest, _ in hop], "copy_per_hop_strongest": [best for _, best in hop],
        "hop_fraction": hop_fraction(coupling),
        "condition": judged.condition, "useful_couplings": plain(judged.useful),
        "critical_links": [_split(split) for split in critical_links(graph)],
        "critical_robots": [_split(split) for split in critical_robots(graph)],
        "suggested_links": [
            _link(link) for link in suggested_links(graph, coupling, led, places=_places(configuration))
        ],
        **_recommended(configuration, question, led),
        "warnings": list(judged.warnings),
    }


def of_manoeuvre(
    configuration: Configuration, name: str, beside: LawBeside, uncoupled: Optional[Run]
) -> dict[str, Any]:
    """The copying law beside one manoeuvre.

    Args:
        uncoupled: the rehearsal with the coupling at 0, where every robot has an end of its own.
    """
    task, names = beside.made.task, configuration.driven.names
    ways = driven_graph(configuration).hops()
    found: dict[str, Any] = {
        "led": [names[k] for k in beside.led], "coupling": task.coupling, "alignment": task.alignment,
        "conditions": [attrs.asdict(condition) for condition in beside.conditions],
        "law_holds": all(condition.kept for condition in beside.conditions),
    }
    if beside.planned is not None:
        found["robots"] = [
            {"robot": names[k], "hops": plain(ways[k, list(beside.led)].min()), **_of_robot(beside, k)}
            for k in range(len(names))
        ]
    if beside.run is not None:
        found["rehearsed"] = _figures(beside.run)
    if uncoupled is not None:
        found["rehearsed_without_coupling"] = _figures(uncoupled)
    return found


def _led(configuration: Configuration, question: Question) -> tuple[int, ...]:
    names = configuration.driven.names
    return (names.index(question.led),) if question.led else tuple(range(len(names)))


def _recommended(configuration: Configuration, question: Question, led: tuple[int, ...]) -> dict[str, Any]:
    wanted = Wanted(question.share, question.hops, led)
    asked: dict[str, Any] = {"copy": question.share, "hops": question.hops, "led": question.led or None,
             "worst_link": question.worst_link}
    try:
        choose = after_any_loss if question.worst_link else smallest_coupling
        choice: Choice = choose(driven_graph(configuration), driven_graph(configuration).hops(), wanted)
    except (RefusedError, SettingsError) as error:
        if question.asked and isinstance(error, SettingsError):
            raise
        return {"recommended_coupling": None, "recommended_for": asked, "recommended_reason": str(error)}
    lost = list(choice.lost) if choice.lost else None
    asked |= {"weakest_led": choice.led, "weakest_copying": choice.copying, "link_lost": lost}
    return {"recommended_coupling": choice.coupling, "recommended_for": asked, "recommended_reason": ""}


def _places(configuration: Configuration) -> np.ndarray:
    unknown = (math.nan, math.nan, math.nan)
    return np.array([configuration.starts.get(name, unknown)[:2] for name in configuration.driven.names])


def _split(split: Split) -> dict[str, Any]:
    return {"lost": list(split.lost), "parts": [list(part) for part in split.parts]}


def _link(link: NewLink) -> dict[str, Any]:
    return dict(plain(attrs.asdict(link, recurse=False)))


def _of_robot(beside: LawBeside, k: int) -> dict[str, Any]:
    assert beside.planned is not None
    found: dict[str, Any] = {
        "copy_predicted": float(beside.shares[k, 0]) if len(beside.led) == 1 else None,
        "heading_change_predicted_rad": beside.planned.predicted[k],
    }
    for when, out in (("planned", beside.planned), ("driven", beside.driven)):
        found |= _copied(out, k, when)
    return {key: plain(value) for key, value in found.items()}


def _copied(out: Optional[Copied], k: int, when: str) -> dict[str, Any]:
    if out is None:
        return {}
    return {f"copy_{when}": out.share[k], f"heading_change_{when}_rad": out.turned[k], f"gap_{when}": out.gap[k]}


def _figures(run: Run) -> dict[str, Any]:
    figures = summary(run)
    return {key: figures[key] for key in _FIGURES}

