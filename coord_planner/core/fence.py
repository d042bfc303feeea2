# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What footprints stay outside of or inside of, and the lines that hold them there: keep-outs, a hazard, a strip."""

from __future__ import annotations

from collections.abc import Iterable

import attrs
import numpy as np
import shapely

from . import outline
from .fleet import Fleet
from .problem import Fences, no_fences
from .settings import Settings
from .watch import margin

Line = tuple[tuple[float, float], float]  # unit normal towards the forbidden side, and how far along it one may reach


@attrs.frozen(eq=False)
class Piece:
    """A convex piece of an area that no footprint may enter or come near.

    Attributes:
        name: of the area, for messages. corners: shape (K, 2), anticlockwise; one row for a point.
        clearance: smallest allowed distance from a footprint, metres.
        reach: it is watched where a footprint comes nearer than this to that distance; and only where it comes nearer
            than clearance.reach.
    """

    name: str
    corners: np.ndarray
    clearance: float
    reach: float = np.inf

    @property
    def shape(self) -> shapely.Geometry:
        return shapely.MultiPoint(self.corners).convex_hull


@attrs.frozen(eq=False)
class Fencing:
    """Pieces to stay out of, lines to stay behind, and who is held by which of them.

    Attributes:
        pieces: of keep-outs and hazards. lines: half-planes that hold every robot.
        bound: position of a robot and of a piece or line (lines are counted after the pieces), shape (F, 2): what
            the optimisation watches. It stays the same for a whole reference.
    """

    pieces: tuple[Piece, ...] = ()
    lines: tuple[Line, ...] = ()
    bound: np.ndarray = attrs.field(factory=lambda: np.zeros((0, 2), dtype=int))

    def watching(self, fleet: Fleet, settings: Settings, poses: np.ndarray) -> Fencing:
        """The same with everything watched that comes within reach along poses of shape (N, K, 3)."""
        if not (self.pieces or self.lines):
            return self
        spare = self.spare(fleet, poses).min(axis=2)
        reaches = np.array([*(piece.reach for piece in self.pieces), *(np.inf for _ in self.lines)])
        return attrs.evolve(self, bound=np.argwhere(spare < np.minimum(reaches, settings.clearance.reach)))

    def beside(self, pieces: Iterable[Piece]) -> Fencing:
        """The same and some pieces more, nothing watched: to judge by."""
        return Fencing((*self.pieces, *pieces), self.lines)

    def joined(self, other: Fencing) -> Fencing:
        """The same with what another one watches besides."""
        return attrs.evolve(self, bound=np.unique(np.concatenate([self.bound, other.bound]), axis=0))

    def covers(self, other: Fencing) -> bool:
        """Whether everything that another one watches is watched here."""
        return set(map(tuple, other.bound.tolist())) <= set(map(tuple, self.bound.tolist()))

    def rows(self, fleet: Fleet, settings: Settings, poses: np.ndarray, speed: float) -> Fences:
        """Lines from the poses of the last plan or of a guess.

        Args:
            poses: at nodes 0 .. M, shape (N, M + 1, 3). speed: asked speed, m/s.
        """
        count, nodes = len(self.bound), poses.shape[1] - 1
        if not count:
            return no_fences(nodes)
        robots = self.bound[:, 0]
        kept = margin(fleet, settings, speed)[robots, None] + _between(fleet, robots, poses)
        normals, reaches = np.zeros((count, nodes, 2)), np.zeros((count, nodes))
        corners, shapes = _footprints(fleet, poses[:, 1:])
        for i, (robot, place) in enumerate(self.bound):
            if place < len(self.pieces):
                piece = self.pieces[place]
                normals[i] = _normals(corners[robot], shapes[robot], piece)
                reaches[i] = (normals[i] @ piece.corners.T).min(axis=1) - piece.clearance
            else:
                normals[i], reaches[i] = self.lines[place - len(self.pieces)]
        return Fences(robots, normals, reaches - kept)

    def spare(self, fleet: Fleet, poses: np.ndarray) -> np.ndarray:
        """How much nearer each footprint could come to each piece and line, exactly, shape (N, pieces + lines, K).

        Metres; below 0 by what is missing.

        Args:
            poses: shape (N, K, 3).
        """
        if not (self.pieces or self.lines):
            return np.zeros((len(fleet), 0, poses.shape[1]))
        corners, shapes = _footprints(fleet, poses)
        columns = [_gaps(corners, shapes, piece) - piece.clearance for piece in self.pieces]
        columns += [reach - (corners @ np.array(normal)).max(axis=2) for normal, reach in self.lines]
        return np.stack(columns, axis=1)

    def least(
        self, fleet: Fleet, poses: np.ndarray, growth: np.ndarray | None = None
    ) -> tuple[float, int, str]:
        """Smallest spare distance over poses of shape (N, K, 3), whose, and from what; inf when nothing is fenced.

        Args:
            growth: by how much each outline grows all round, for doubt about where it is, shape (N,), metres.
        """
        if not (self.pieces or self.lines):
            return np.inf, -1, ""
        spare = self.spare(fleet, poses).min(axis=2)
        if growth is not None:
            spare = spare - growth[:, None]
        robot, place = np.unravel_index(int(np.argmin(spare)), spare.shape)
        name = self.pieces[place].name if place < len(self.pieces) else "the edge of the strip"
        return float(spare[robot, place]), int(robot), name


OPEN = Fencing()  # nothing is fenced off


def fencing(settings: Settings, lines: Iterable[Line] = (), others: Iterable[Piece] = ()) -> Fencing:
    """The site's keep-outs, lines given with a task, and what else is to be kept away from; nothing watched yet."""
    rules = settings.site_rules
    pieces = [
        Piece(area.name, corners, rules.keep_out_clearance) for area in rules.keep_outs for corners in area.pieces
    ]
    return Fencing((*pieces, *others), tuple(lines))


def hazards(settings: Settings, point: tuple[float, float] | None) -> tuple[Piece, ...]:
    """A point to keep away from."""
    return () if point is None else (Piece("the hazard", np.array([point]), settings.hazard.clearance),)


def _footprints(fleet: Fleet, poses: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Corners, shape (N, K, 4, 2), and shapely polygons, shape (N, K)."""
    shapes = outline.outlines(fleet.corners(), poses)
    corners = shapely.get_coordinates(shapes).reshape((*shapes.shape, 5, 2))[:, :, :4]
    return corners, shapes


def _between(fleet: Fleet, robots: np.ndarray, poses: np.ndarray) -> np.ndarray:
    """By how much a footprint may come nearer between two nodes than at both, shape (F, M), metres.

    A body that moves by d and turns by a leaves the straight joining of its places by the sagitta of its own arc,
    d a / 8, and a corner at radius r by r a^2 / 8 more. While d is less than the footprint's length, whatever
    it passes in a straight line it still has beside it at the next node.
    """
    moved = np.linalg.norm(np.diff(poses[..., :2], axis=1), axis=2)[robots]
    turned = np.abs(np.diff(poses[..., 2], axis=1))[robots]
    corner = np.linalg.norm(fleet.corners(), axis=2).max(axis=1)[robots, None]
    longest = np.array([robot.footprint.footprint_length for robot in fleet.robots])[robots, None]
    return (moved * turned + corner * turned**2) / 8 + np.maximum(moved - longest, 0.0) / 2


def _normals(corners: np.ndarray, shapes: np.ndarray, piece: Piece) -> np.ndarray:
    """Unit vectors from footprints towards a piece, shape (K, 2), of the lines that separate them best."""
    ends = shapely.get_coordinates(shapely.shortest_line(shapes, piece.shape)).reshape((*shapes.shape, 2, 2))
    lines = ends[..., 1, :] - ends[..., 0, :]
    length = np.hypot(lines[..., 0], lines[..., 1])
    normals = lines / np.maximum(length, 1e-9)[..., None]
    for i in np.flatnonzero(length < 1e-6):
        normals[i] = _least_overlap(corners[i], piece.corners)[0]
    return normals


def _gaps(corners: np.ndarray, shapes: np.ndarray, piece: Piece) -> np.ndarray:
    """Distances between footprints and a piece, shape (N, K); below 0 where they overlap: the way out of it."""
    gaps = np.asarray(shapely.distance(shapes, piece.shape))
    for where in np.argwhere(gaps <= 0.0):
        gaps[tuple(where)] = -_least_overlap(corners[tuple(where)], piece.corners)[1]
    return gaps


def _least_overlap(footprint: np.ndarray, piece: np.ndarray) -> tuple[np.ndarray, float]:
    """Direction towards the piece along which two convex shapes overlap least, and by how much.

    Separating axis theorem: among the normals of both outlines (Gottschalk, Lin & Manocha, SIGGRAPH 1996).
    """
    sides = [np.roll(shape, -1, axis=0) - shape for shape in (footprint, piece) if len(shape) > 1]
    normals = np.concatenate([np.stack([side[:, 1], -side[:, 0]], axis=1) for side in sides])
    normals = normals / np.linalg.norm(normals, axis=1)[:, None]
    both = np.concatenate([normals, -normals])
    overlap = (footprint @ both.T).max(axis=0) - (piece @ both.T).min(axis=0)
    best = int(np.argmin(overlap))
    return both[best], float(overlap[best])
