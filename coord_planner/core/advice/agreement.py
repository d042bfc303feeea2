# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What a disagreement is reduced to, mode by mode."""

from __future__ import annotations

import attrs
import numpy as np

from ..graph import NeighbourGraph

_SAME = 0.25  # of a mode's largest entry: robots that hardly take part in it


@attrs.frozen
class Mode:
    """One eigenvector of the Laplacian.

    Attributes:
        eigenvalue: lambda. kept: part 1 / (1 + chi lambda) of such a disagreement that is left.
        one_side, other_side: robots that pull one way and the other; empty for the mode of agreement.
    """

    eigenvalue: float
    kept: float
    one_side: tuple[str, ...]
    other_side: tuple[str, ...]


def modes(graph: NeighbourGraph, coupling: float) -> tuple[Mode, ...]:
    """All modes, the slowest first: turning that everybody wants is kept whole, the rest is reduced.

    u = Psi mu, and Psi has the eigenvectors of the Laplacian with 1 / (1 + chi lambda).
    """
    values, vectors = np.linalg.eigh(graph.laplacian())
    values = np.maximum(values, 0.0)
    found = []
    for value, vector in zip(values, vectors.T):
        sides = ((), ()) if value < 1e-9 * max(values[-1], 1.0) else _sides(graph.names, vector)
        found.append(Mode(float(value), float(1.0 / (1.0 + coupling * value)), *sides))
    return tuple(found)


def _sides(names: tuple[str, ...], vector: np.ndarray) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Who pulls which way; the side of the first robot that takes part comes first."""
    strength = vector / np.abs(vector).max()
    first = strength[np.argmax(np.abs(strength) > _SAME)]
    strength = strength * np.sign(first)
    ahead = tuple(name for name, part in zip(names, strength) if part > _SAME)
    return ahead, tuple(name for name, part in zip(names, strength) if part < -_SAME)
