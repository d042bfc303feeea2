# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A still picture of a run from above, as a small SVG file for documents."""

from __future__ import annotations

import math
from collections.abc import Iterable
from pathlib import Path
from xml.sax.saxutils import escape

import numpy as np
import shapely

from ..core import se2
from ..trial.run import Run

# Okabe & Ito, Color Universal Design, 2008 (from memory). Grey stands out from white and from black alike.
COLOURS = ("#0072b2", "#d55e00", "#009e73", "#cc79a7", "#e69f00", "#56b4e9")
_GREY = "#7d858c"
_LABEL_BELOW = ("#0072b2", "#d55e00", "#009e73")  # colours so dark that their labels are white
_LARGEST = (900.0, 640.0)  # pixels
_MARGIN, _FOOT = 46.0, 40.0  # pixels round the scene, and below it for scale and caption
_TEXT_WIDTH = 7.3  # pixels of a character, about
_FINE = 0.01  # metres by which a drawn path may differ from the driven one


def write_picture(run: Run, path: str | Path, moments: int = 5) -> None:
    """Write the picture; folders that are missing are made.

    Raises:
        OSError: the file cannot be written. ValueError: the run holds no samples, or moments is below 2.
    """
    target = Path(path)
    target.parent.mkdir(parents=True, exist_ok=True)
    target.write_text(picture(run, moments), encoding="utf-8")


def picture(run: Run, moments: int = 5) -> str:
    """The picture as SVG text: paths, and the fleet at moments that are equally far apart along the way."""
    if not len(run.times) or moments < 2:
        raise ValueError(f"a picture needs samples and at least 2 moments; got {len(run.times)} and {moments}")
    samples = _moments(run, moments)
    corners = np.stack([_corners(run, sample) for sample in samples])
    scene = _Scene(corners, _paths(run))
    parts, times = [*_areas(run, scene), *_edges(run, scene, corners), *_drawn_paths(run, scene)], []
    for number, sample in enumerate(samples):
        strength = 1.0 if len(samples) == 1 else 0.3 + 0.7 * number / (len(samples) - 1)
        parts += _fleet_at(run, scene, corners[number], strength, labelled=number == len(samples) - 1)
        times.append(_time(scene, corners[number], f"{run.times[sample] - run.began:.1f} s"))
    parts += [
        *times,
        *_scale(scene),
        _text(scene.width - _MARGIN, scene.height - 12, _caption(run), "end", 13),
    ]
    return _file(run, scene, parts)


class _Scene:
    """Turns metres into pixels (y down): x to the right, or upwards where the scene would be higher than wide."""

    def __init__(self, corners: np.ndarray, paths: np.ndarray) -> None:
        """The scene holds footprints, corners of shape (..., 2), and paths."""
        points = np.concatenate([corners.reshape(-1, 2), shapely.get_coordinates(paths)])
        (left, bottom), (right, top) = np.nanmin(points, axis=0), np.nanmax(points, axis=0)
        self._upright = top - bottom > right - left
        if self._upright:
            left, bottom, right, top = -top, left, -bottom, right
        self._left, self._top = left, top
        across, along = max(right - left, 1e-3), max(top - bottom, 1e-3)
        self.scale = min((_LARGEST[0] - 2 * _MARGIN) / across, (_LARGEST[1] - 2 * _MARGIN - _FOOT) / along)
        self.width = max(across * self.scale + 2 * _MARGIN, 420.0)
        self.height = along * self.scale + 2 * _MARGIN + _FOOT
        self._indent = (self.width - across * self.scale) / 2

    def place(self, points: np.ndarray) -> np.ndarray:
        """Points of shape (K, 2), metres, in pixels."""
        across, along = (-points[:, 1], points[:, 0]) if self._upright else points.T
        return np.stack([self._indent + (across - self._left) * self.scale,
                         _MARGIN + (self._top - along) * self.scale], axis=1)

    def data(self, points: np.ndarray, closed: bool = False) -> str:
        """The ``d`` of a path through the points."""
        return "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in self.place(points)) + ("Z" if closed else "")


def _moments(run: Run, count: int) -> np.ndarray:
    """Sample numbers that part the mean way of the robots into equal pieces; fewer when nobody moves."""
    steps = np.linalg.norm(np.diff(run.poses[:, :, :2], axis=1), axis=2)
    way = np.concatenate([[0.0], np.cumsum(np.nanmean(steps, axis=0))])
    return np.unique(np.searchsorted(way, np.linspace(0.0, max(way[-1] - _FINE, 0.0), count)))


def _corners(run: Run, sample: int) -> np.ndarray:
    """Footprints at a sample: front left, rear left, rear right, front right; (N, 4, 2), NaN for unknown poses."""
    x, y, heading = run.poses[:, sample, :, None].transpose(1, 0, 2)
    local = run.fleet.corners()
    x, y, _ = se2.compose((x, y, heading), (local[:, :, 0], local[:, :, 1], 0.0))
    return np.stack([x, y], axis=2)


def _paths(run: Run) -> np.ndarray:
    """Driven paths, shape (N,), thinned."""
    lines = [shapely.linestrings(poses[np.isfinite(poses).all(axis=1)][:, :2]) for poses in _at_least_two(run)]
    return shapely.simplify(np.array(lines), _FINE)


def _at_least_two(run: Run) -> np.ndarray:
    return np.repeat(run.poses, 2, axis=1) if len(run.times) == 1 else run.poses


def _areas(run: Run, scene: _Scene) -> Iterable[str]:
    """Keep-outs, and areas with a speed cap, as far as they lie in the scene, with their names."""
    named = [(area, "#d55e00", area.name) for area in run.site_rules.keep_outs]
    named += [(cap.area, _GREY, f"{cap.area.name}, {cap.max_speed:g} m/s") for cap in run.site_rules.speed_caps]
    for area, colour, words in named:
        yield (f'<path d="{scene.data(np.array(area.corners), closed=True)}" fill="{colour}" fill-opacity="0.2" '
               f'stroke="{colour}" stroke-width="1.5"/>')
        x, y = scene.place(np.array(area.corners).mean(axis=0)[None])[0]
        yield _text(x, y + 4, words, "middle", 12)


def _edges(run: Run, scene: _Scene, corners: np.ndarray) -> Iterable[str]:
    """What nobody was to come near, and lines that nobody was to reach across, dashed, as long as the scene."""
    for piece in run.pieces:
        yield (f'<path d="{scene.data(piece.corners, closed=True)}" fill="{_GREY}" fill-opacity="0.2" '
               f'stroke="{_GREY}" stroke-width="1"/>')
    points = corners.reshape(-1, 2)
    for normal, reach in run.strip:
        across = np.array([-normal[1], normal[0]])
        along = points @ across
        ends = reach * np.array(normal) + np.outer([np.nanmin(along), np.nanmax(along)], across)
        yield f'<path d="{scene.data(ends)}" fill="none" stroke="#d55e00" stroke-width="2" stroke-dasharray="9 6"/>'


def _drawn_paths(run: Run, scene: _Scene) -> Iterable[str]:
    for row, path in enumerate(_paths(run)):
        yield (f'<path d="{scene.data(shapely.get_coordinates(path))}" fill="none" stroke="{_colour(row)}" '
               f'stroke-width="2" stroke-linejoin="round"/>')


def _fleet_at(run: Run, scene: _Scene, corners: np.ndarray, strength: float, labelled: bool) -> Iterable[str]:
    """One moment: lines between neighbours, and footprints, corners of shape (N, 4, 2), with their fronts."""
    centres = corners.mean(axis=1)
    yield f'<g opacity="{strength:.2f}">'
    for first, second, _ in run.edges:
        ends = centres[[run.fleet.index(first), run.fleet.index(second)]]
        if np.isfinite(ends).all():
            yield f'<path d="{scene.data(ends)}" stroke="{_GREY}" stroke-width="1.2"/>'
    for row in np.flatnonzero(np.isfinite(centres).all(axis=1)).tolist():
        yield (f'<path d="{scene.data(corners[row], closed=True)}" fill="{_colour(row)}" stroke="{_GREY}"/>'
               f'<path d="{scene.data(_front(corners[row]), closed=True)}" fill="#fff"/>')
        if labelled:
            yield _label(row, corners[row], scene)
    yield "</g>"


def _time(scene: _Scene, corners: np.ndarray, text: str) -> str:
    """The time of a moment, beside the first robot: away from the others, or above when they follow it in file."""
    known = corners[np.isfinite(corners).all(axis=(1, 2))]
    if not len(known):
        return ""
    places, (front, rear) = scene.place(known.mean(axis=1)), scene.place(known[0, :2])
    away, ahead = _unit(places[0] - places.mean(axis=0)), _unit(front - rear)
    if abs(away @ ahead) > 0.9:
        away = np.array([ahead[1], -ahead[0]]) * (1.0 if ahead[0] > 0 else -1.0)
    x, y = places[0] + away * (np.linalg.norm(known[0, 0] - known[0, 2]) / 2 * scene.scale + 9)
    part = 0.5 if abs(away[0]) < 0.5 else 0.0 if away[0] > 0 else 1.0  # of the text that lies left of x
    left, width = x - part * _TEXT_WIDTH * len(text), _TEXT_WIDTH * len(text)
    inside = min(max(left, 4.0), scene.width - width - 4.0)
    if inside != left and part != 0.5:  # no room beside it: below
        y = scene.place(known[0])[:, 1].max() + 14.0
    return _text(inside, y + 4, text, "start", 13)


def _unit(vector: np.ndarray) -> np.ndarray:
    length = float(np.linalg.norm(vector))
    return vector / length if length > 1e-6 else np.array([0.0, -1.0])


def _front(corners: np.ndarray) -> np.ndarray:
    """A triangle that points to the front of a footprint; corners: front left, rear left, rear right, front right."""
    front, rear = (corners[0] + corners[3]) / 2, (corners[1] + corners[2]) / 2
    across = (corners[0] - corners[3]) * 0.3
    tip, foot = front + 0.08 * (rear - front), front + 0.3 * (rear - front)
    return np.stack([tip, foot + across, foot - across])


def _label(row: int, corners: np.ndarray, scene: _Scene) -> str:
    front, rear = (corners[0] + corners[3]) / 2, (corners[1] + corners[2]) / 2
    width = float(np.linalg.norm(corners[0] - corners[3])) * scene.scale
    x, y = scene.place((rear + 0.36 * (front - rear))[None])[0]
    size = min(0.7 * width, 15.0)
    fill = "#fff" if _colour(row) in _LABEL_BELOW else "#111"
    return _text(x, y + 0.36 * size, str(row + 1), "middle", size, fill) if size >= 7 else ""


def _scale(scene: _Scene) -> Iterable[str]:
    """A bar of a round length, about a fifth of the picture."""
    rough = scene.width / 5 / scene.scale
    step = 10.0 ** math.floor(math.log10(rough))
    metres = max(step * factor for factor in (1, 2, 5) if step * factor <= rough)
    x, y, length = _MARGIN, scene.height - 16.0, metres * scene.scale
    yield f'<path d="M{x:.1f} {y - 4:.1f}v8m0 -4h{length:.1f}m0 -4v8" fill="none" stroke="{_GREY}" stroke-width="1.5"/>'
    yield _text(x + length + 8, y + 4, f"{metres:g} m", "start", 13)


def _caption(run: Run) -> str:
    kind = ", simulated" if run.facts.get("simulated") else ""
    return f"{run.manoeuvre}: {len(run.fleet)} robots{kind}"


def _colour(row: int) -> str:
    return COLOURS[row % len(COLOURS)]


def _text(x: float, y: float, text: str, anchor: str, size: float, fill: str = _GREY) -> str:
    place = f'x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}"'
    return f'<text {place} font-size="{size:.0f}" fill="{fill}">{escape(text)}</text>'


def _file(run: Run, scene: _Scene, parts: Iterable[str]) -> str:
    head = (f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {scene.width:.0f} {scene.height:.0f}" '
            f'width="{scene.width:.0f}" height="{scene.height:.0f}" role="img" '
            f'font-family="system-ui, Segoe UI, DejaVu Sans, sans-serif">')
    words = (f"<title>{escape(_caption(run))}</title>"
             "<desc>From above: the paths, and the robots at several moments.</desc>")
    return "\n".join([head, words, *filter(None, parts), "</svg>"]) + "\n"
