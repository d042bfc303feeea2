# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Blocks of the matrix of a step by means of curvature and speed: sums of wrenches seen through levers.

A row of poses is a wrench g at a node n; its derivative by an interval i <= n is e_i' g, with e_i the lever of the
interval (x, y, heading). So the sum over nodes of stiffness * row' row is, for intervals i <= l, e_i' C_l e_l, with
C_l the sum of stiffness * g g' over the nodes from l on. See chain.lever and clearance.look.
"""

from __future__ import annotations

import math

import numpy as np

from .compiled import inner
from .fields import COS, COST_H, FULL_SPEED, LEAVE, MEAN_K, MEAN_V, SIN, TURN_SPEED, X0, Y0, H, X, Y
from .objective import aligning
from .sweeps import gather_later

SOFT = 1e-2  # stiffness (1/m^2) of all rows of a pair below which it does not bend the cost noticeably
FLAT = 1e-4  # curvature (1/rad^2) of shadows below which it does not either
UNBENT = 1e-3  # second derivative by the heading (1/rad^2) below which pulls on the poses bend nothing


@inner
def sums(pairs, wrench, bent, near, stiff, pressure, robot, roll, ends, span, edges, edge_price, found):
    """Add C of each robot with itself at each node, summed from the end; shape (6, N, M): xx, xy, xt, yy, yt, tt.

    Args:
        near: pairs that count, (P,). stiff: of clearances, (P, M). pressure: their pushes. ends: stiffness, (N, 7).
    """
    n, m = roll.shape[1], span.shape[1]
    heads = np.zeros((n, m))
    for p in range(len(pairs)):
        for side in range(2):
            k = pairs[p, side]
            for i in range(m):
                heads[k, i] += pressure[p, i] * bent[side, p, i]
                if near[p]:
                    _square(found, k, i, stiff[p, i], wrench, side, p)
    most = 0.0
    for k in range(n):
        for i in range(m):
            most = max(most, heads[k, i])
        x, y = roll[X, k, m] - robot[X0, k], roll[Y, k, m] - robot[Y0, k]
        found[0, k, m - 1] += ends[k, 0]
        found[2, k, m - 1] -= y * ends[k, 0]
        found[3, k, m - 1] += ends[k, 1]
        found[4, k, m - 1] += x * ends[k, 1]
        found[5, k, m - 1] += y * y * ends[k, 0] + x * x * ends[k, 1] + ends[k, 2]
    for k in range(n):
        for i in range(m):
            if most > FLAT:
                found[5, k, i] += max(heads[k, i], 0.0)
    for e in range(len(edges)):
        if edge_price[1, e] > 0.0:
            for i in range(m):
                weight = aligning(span, edges, edge_price, roll, e, i)
                found[5, edges[e, 0], i] += weight
                found[5, edges[e, 1], i] += weight
    gather_later(found)


@inner
def _square(found, k, i, stiff, wrench, side, p):
    x, y, torque = wrench[side, 0, p, i], wrench[side, 1, p, i], wrench[side, 2, p, i]
    found[0, k, i] += stiff * x * x
    found[1, k, i] += stiff * x * y
    found[2, k, i] += stiff * x * torque
    found[3, k, i] += stiff * y * y
    found[4, k, i] += stiff * y * torque
    found[5, k, i] += stiff * torque * torque


@inner
def bend(span, roll, later, found):
    """Fill what pulls on the poses bend, shape (3, N, M): weights of heading^2, of heading * speed, and of speed^2.

    The convex part of the second derivatives of every arc's chord: linearised.Linearised._bend. ``later``: wrenches
    gathered from each node on. Whether any of it counts.
    """
    n, m = roll.shape[1], span.shape[1]
    most = 0.0
    for k in range(n):
        for i in range(m):
            cos, sin = roll[COS, k, i], roll[SIN, k, i]
            along, across = later[0, k, i] * cos + later[1, k, i] * sin, later[1, k, i] * cos - later[0, k, i] * sin
            half = -0.5 * span[H, i] * roll[MEAN_V, k, i] * along
            largest = half + math.sqrt(half * half + across * across)
            size = max(math.sqrt(across * across + largest * largest), 1e-12)
            share = largest / (size * size)
            found[0, k, i] = share * largest * largest
            found[1, k, i] = share * largest * across * span[H, i]
            found[2, k, i] = share * across * across * span[H, i] * span[H, i]
            most = max(most, largest)
    return most >= UNBENT


@inner
def own(k, tensors, levers, span, prices, field, robot, coupled, compared_own, roll, bending, bends, block):
    """Fill a robot's block by its means, shape (2M, 2M), both halves.

    Args:
        tensors: of ``sums``. coupled: price of its coupling with all neighbours. compared_own: Comparing.own, or empty.
        bending: whether ``bends`` counts.
    """
    m = span.shape[1]
    behind = 0.0  # headings that later arcs bend
    e0, e1, e2, e3, e4, e5 = levers[0, k], levers[1, k], levers[2, k], levers[3, k], levers[4, k], levers[5, k]
    for i in range(m - 1, -1, -1):
        xx, xy, xt = tensors[0, k, i], tensors[1, k, i], tensors[2, k, i]
        yy, yt, tt = tensors[3, k, i], tensors[4, k, i], tensors[5, k, i]
        if bending:
            tt += behind + 0.5 * bends[0, k, i]
            behind += bends[0, k, i]
        kx, ky = xx * e0[i] + xy * e1[i] + xt * e2[i], xy * e0[i] + yy * e1[i] + yt * e2[i]
        kt = xt * e0[i] + yt * e1[i] + tt * e2[i]
        vx, vy = xx * e3[i] + xy * e4[i] + xt * e5[i], xy * e3[i] + yy * e4[i] + yt * e5[i]
        vt = xt * e3[i] + yt * e4[i] + tt * e5[i]
        of_k, of_v = block[i], block[m + i]
        across_k, across_v = of_k[m:], of_v[m:]
        for j in range(i + 1):
            of_k[j] = kx * e0[j] + ky * e1[j] + kt * e2[j]
            across_k[j] = kx * e3[j] + ky * e4[j] + kt * e5[j]
            of_v[j] = vx * e0[j] + vy * e1[j] + vt * e2[j]
            across_v[j] = vx * e3[j] + vy * e4[j] + vt * e5[j]
    for i in range(m):
        by_k, by_v = roll[MEAN_V, k, i] / field[TURN_SPEED, k, i], roll[MEAN_K, k, i] / field[TURN_SPEED, k, i]
        price = (1.0 + coupled) * span[COST_H, i]
        leave = prices[LEAVE] * span[COST_H, i] / (robot[FULL_SPEED, k] * robot[FULL_SPEED, k])
        mixed = price * by_k * by_v
        _add_own(block, i, i, price * by_k * by_k, mixed, mixed, price * by_v * by_v + leave)
        if len(compared_own):
            for j in range(i + 1):
                price = compared_own[k, i, j]
                other_k, other_v = (
                    roll[MEAN_V, k, j] / field[TURN_SPEED, k, j], roll[MEAN_K, k, j] / field[TURN_SPEED, k, j]
                )
                _add_own(
                    block, i, j, price * by_k * other_k, price * by_k * other_v, price * by_v * other_k,
                    price * by_v * other_v,
                )
        if bending:
            quarter, both = 0.25 * bends[0, k, i], bends[1, k, i]
            mixed = 0.5 * both * e2[i] - quarter * e2[i] * e5[i]
            _add_own(
                block, i, i, -quarter * e2[i] * e2[i], mixed, mixed,
                both * e5[i] - quarter * e5[i] * e5[i] + bends[2, k, i],
            )
            for j in range(i):
                block[m + i, j] += both * e2[j]
                block[m + i, m + j] += both * e5[j]
    _mirror(block, m)


@inner
def _add_own(block, i, j, kk, kv, vk, vv):
    m = len(block) // 2
    block[i, j] += kk
    block[i, m + j] += kv
    block[m + i, j] += vk
    block[m + i, m + j] += vv


@inner
def _mirror(block, m):
    """Where the interval of the column is later: from where it is earlier, row and column changed."""
    for i in range(m):
        for j in range(i):
            block[j, i], block[m + j, m + i] = block[i, j], block[m + i, m + j]
            block[j, m + i], block[m + j, i] = block[m + i, j], block[i, m + j]


@inner
def apart(pair, turned, wrench, stiff, tensors):
    """Fill C of two robots, shape (9, M), from the clearances of their pair, summed from the end; rows: first robot."""
    first, second = (1, 0) if turned else (0, 1)
    m = tensors.shape[1]
    for i in range(m - 1, -1, -1):
        price = stiff[pair, i]
        for a in range(3):
            for b in range(3):
                value = price * wrench[first, a, pair, i] * wrench[second, b, pair, i]
                tensors[3 * a + b, i] = value + (tensors[3 * a + b, i + 1] if i + 1 < m else 0.0)


@inner
def between(k, j, tensors, levers, block):
    """Fill the block of robots k (rows) and j (columns) by their means, shape (2M, 2M). tensors: shape (9, M)."""
    m = tensors.shape[1]
    seen = np.empty((6, m))
    for i in range(m):
        for side in range(2):
            for a in range(3):
                seen[3 * side + a, i] = (
                    tensors[3 * a, i] * levers[3 * side, j, i] + tensors[3 * a + 1, i] * levers[3 * side + 1, j, i]
                    + tensors[3 * a + 2, i] * levers[3 * side + 2, j, i]
                )
    f0, f1, f2, f3, f4, f5 = levers[0, j], levers[1, j], levers[2, j], levers[3, j], levers[4, j], levers[5, j]
    s0, s1, s2, s3, s4, s5 = seen[0], seen[1], seen[2], seen[3], seen[4], seen[5]
    for side in range(2):
        for i in range(m):
            x, y, t = levers[3 * side, k, i], levers[3 * side + 1, k, i], levers[3 * side + 2, k, i]
            gx = x * tensors[0, i] + y * tensors[3, i] + t * tensors[6, i]
            gy = x * tensors[1, i] + y * tensors[4, i] + t * tensors[7, i]
            gt = x * tensors[2, i] + y * tensors[5, i] + t * tensors[8, i]
            by_k, by_v = block[side * m + i, :m], block[side * m + i, m:]
            for c in range(i + 1):
                by_k[c] = gx * f0[c] + gy * f1[c] + gt * f2[c]
                by_v[c] = gx * f3[c] + gy * f4[c] + gt * f5[c]
            for c in range(i + 1, m):
                by_k[c] = x * s0[c] + y * s1[c] + t * s2[c]
                by_v[c] = x * s3[c] + y * s4[c] + t * s5[c]


@inner
def couple(e, back, k, j, price, span, field, across, roll, block):
    """Add an edge's coupling of turnings to the block of robots k and j. back: the edge names j first."""
    m = span.shape[1]
    for i in range(m):
        own_k, own_v = roll[MEAN_V, k, i] / field[TURN_SPEED, k, i], roll[MEAN_K, k, i] / field[TURN_SPEED, k, i]
        begin, end = (0, m) if len(across) else (i, i + 1)
        for c in range(begin, end):
            weight = 0.0
            if c == i:
                weight = -price * span[COST_H, i]
            if len(across):
                weight += across[e, c, i] if back else across[e, i, c]
            other_k = roll[MEAN_V, j, c] / field[TURN_SPEED, j, c]
            other_v = roll[MEAN_K, j, c] / field[TURN_SPEED, j, c]
            block[i, c] += weight * own_k * other_k
            block[i, m + c] += weight * own_k * other_v
            block[m + i, c] += weight * own_v * other_k
            block[m + i, m + c] += weight * own_v * other_v
