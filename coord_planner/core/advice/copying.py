# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How much of a led robot's turning each other robot copies: the copying law.

A robot without an end of its own has mu = 0, so that (I + chi L) u = mu fixes its turning by that of the others, at
every instant. With one led robot 0: u_k = (Psi_k0 / Psi_00) u_0, Psi = (I + chi L)^-1. The ratio is the chance that a
random walk along the links, which gives up at the rate 1/chi, gets from k to 0 before it does; so it grows with chi,
and is at most 1 (Doyle & Snell, *Random Walks and Electric Networks*, 1984, from memory).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from ..graph import NeighbourGraph


def copy_matrix(graph: NeighbourGraph, coupling: float) -> np.ndarray:
    """Part of robot j's turning that robot k copies when j alone is led, shape (N, N), row k, column j."""
    psi = graph.copying(coupling)
    shares = psi / np.diag(psi)
    np.fill_diagonal(shares, 1.0)
    return np.clip(shares, 0.0, 1.0)  # entries of robots that no way joins are 0 up to rounding


def led_shares(graph: NeighbourGraph, coupling: float, led: Sequence[int]) -> np.ndarray:
    """Every robot's turning as a weighted sum of the led ones', shape (N, len(led)).

    From the rows of (I + chi L) u = mu in which mu is 0: u_f = -A_ff^-1 A_fl u_l. With one led robot its column of
    :func:`copy_matrix`.
    """
    count, ahead = len(graph.names), list(led)
    behind = [k for k in range(count) if k not in ahead]
    weight = np.eye(count) + coupling * graph.laplacian()
    shares = np.zeros((count, len(ahead)))
    shares[ahead, range(len(ahead))] = 1.0
    shares[behind] = -np.linalg.solve(weight[np.ix_(behind, behind)], weight[np.ix_(behind, ahead)])
    return shares


def per_hop(shares: np.ndarray, hops: np.ndarray, led: Sequence[int]) -> list[tuple[float, float]]:
    """Weakest and strongest copying at 1, 2, ... hops from a led robot, whichever of ``led`` it is.

    Args:
        shares: shape (N, N), of :func:`copy_matrix`. hops: shape (N, N), inf where there is no way.
    """
    columns, ways = shares[:, list(led)], hops[:, list(led)]
    farthest = int(np.max(ways, initial=0.0, where=np.isfinite(ways)))
    found = [columns[ways == count] for count in range(1, farthest + 1)]
    return [(float(each.min()), float(each.max())) for each in found]
