# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a viewer of the fleet is shown: edges, footprints, the smallest clearance and the warnings, as plain marks.

No messages here: the planner node and the writer of bags each turn marks into markers of their own kind.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import attrs
import numpy as np
import shapely

from ..core import outline
from ..core.fleet import Fleet
from ..core.graph import NeighbourGraph
from ..core.messages import Caution
from ..core.settings import SiteRules

Colour = tuple[float, float, float, float]  # red, green, blue, opacity, each 0 to 1
_GREY, _BLUE, _RED = (0.6, 0.6, 0.6, 0.8), (0.1, 0.4, 0.8, 1.0), (0.8, 0.1, 0.1, 1.0)
_LINE_WIDTH, _LETTERS, _WORDS_ABOVE = 0.05, 0.4, 1.0  # metres


@attrs.frozen
class Mark:
    """One thing to draw.

    Attributes:
        group: what it belongs to, e.g. ``footprints``.
        shape: ``strip`` (a chain of points), ``pieces`` (pairs of points) or ``words`` (at the first point).
        points: x, y in metres. colour: see Colour. words: the text, "" for lines.
    """

    group: str
    shape: str
    points: tuple[tuple[float, float], ...]
    colour: Colour
    words: str = ""

    @property
    def size(self) -> tuple[float, float, float]:
        """Scale of the marker: the width of lines (x), the height of letters (z), metres."""
        return (0.0, 0.0, _LETTERS) if self.shape == "words" else (_LINE_WIDTH, 0.0, 0.0)

    @property
    def height(self) -> float:
        """How high above the ground, metres."""
        return _WORDS_ABOVE if self.shape == "words" else 0.0


def marks(fleet: Fleet, graph: NeighbourGraph, poses: np.ndarray, cautions: Sequence[Caution],
          rules: SiteRules, coupling: float | None = None) -> list[Mark]:
    """All marks of a moment; poses of shape (N, 3), NaN rows for robots that were never heard of.

    ``coupling`` is the one in force, None while no manoeuvre is in hand.
    """
    return [*_areas(rules), *_moving(fleet, graph, poses, cautions, rules.min_clearance, coupling)]


def _areas(rules: SiteRules) -> list[Mark]:
    """Keep-outs, and areas with a speed cap, by their outlines and names."""
    named = [(area, _RED, area.name) for area in rules.keep_outs]
    named += [(cap.area, _GREY, f"{cap.area.name}: at most {cap.max_speed:g} m/s") for cap in rules.speed_caps]
    found = []
    for area, colour, words in named:
        found.append(Mark("areas", "strip", _points(np.array([*area.corners, area.corners[0]])), colour))
        found.append(Mark("areas", "words", _points(np.array(area.corners).mean(axis=0)[None]), colour, words))
    return found


def _moving(fleet: Fleet, graph: NeighbourGraph, poses: np.ndarray, cautions: Sequence[Caution],
            min_clearance: float, coupling: float | None) -> list[Mark]:
    heard = np.isfinite(poses).all(axis=1) if len(poses) else np.zeros(len(fleet), dtype=bool)
    if not heard.any():
        return []
    poses = np.where(heard[:, None], poses, 0.0)
    shapes = outline.outlines(fleet.corners(), poses)
    return [
        *_edges(graph, poses, heard), *_copying(graph, poses, heard, coupling),
        *_footprints(fleet, shapes, heard, cautions),
        *_clearance(shapes, heard, min_clearance), *_warnings(fleet, poses, heard, cautions),
    ]


def _points(places: np.ndarray) -> tuple[tuple[float, float], ...]:
    return tuple((float(x), float(y)) for x, y in places)


def _edges(graph: NeighbourGraph, poses: np.ndarray, heard: np.ndarray) -> list[Mark]:
    seen = [(k, j) for k, j in graph.index_edges() if heard[k] and heard[j]]
    return [Mark("edges", "pieces", _points(poses[np.array(seen).ravel(), :2]), _GREY)] if seen else []


def _copying(graph: NeighbourGraph, poses: np.ndarray, heard: np.ndarray, coupling: float | None) -> list[Mark]:
    """How far the headings of neighbours are apart, and the coupling in force, while a manoeuvre is in hand."""
    if coupling is None:
        return []
    found = []
    for k, j in graph.index_edges():
        if heard[k] and heard[j]:
            apart = abs(math.degrees(math.remainder(poses[k, 2] - poses[j, 2], 2 * math.pi)))
            middle = poses[[k, j], :2].mean(axis=0)
            found.append(Mark("copying", "words", _points(middle[None]), _GREY, f"{apart:.0f} deg"))
    beside = poses[heard, :2].max(axis=0) + 1.0
    return [*found, Mark("copying", "words", _points(beside[None]), _GREY, f"coupling {coupling:g}")]


def _footprints(fleet: Fleet, shapes: np.ndarray, heard: np.ndarray, cautions: Sequence[Caution]) -> list[Mark]:
    troubled = {name for caution in cautions for name in caution.subject.split(" and ")}
    return [Mark("footprints", "strip", _points(shapely.get_coordinates(shape)), _RED if name in troubled else _BLUE)
            for name, shape, known in zip(fleet.names, shapes, heard) if known]


def _clearance(shapes: np.ndarray, heard: np.ndarray, least: float) -> list[Mark]:
    pairs = [pair for pair in outline.all_pairs(len(shapes)) if heard[pair].all()]
    distance, (first, second) = outline.closest(shapes, np.array(pairs, dtype=int).reshape(-1, 2))
    if first < 0:
        return []
    ends = shapely.get_coordinates(shapely.shortest_line(shapes[first], shapes[second]))
    colour = _RED if distance < least else _GREY
    return [Mark("clearance", "strip", _points(ends), colour),
            Mark("clearance", "words", _points(ends.mean(axis=0)[None]), colour, f"{distance:.2f} m")]


def _warnings(fleet: Fleet, poses: np.ndarray, heard: np.ndarray, cautions: Sequence[Caution]) -> list[Mark]:
    middle = poses[heard, :2].mean(axis=0)
    found = []
    for caution in cautions:
        subject = caution.subject.split(" and ")[0]
        known = subject in fleet.names and heard[fleet.index(subject)]
        where = poses[fleet.index(subject), :2] if known else middle
        found.append(Mark("warnings", "words", _points(where[None]), _RED, caution.code))
    return found
