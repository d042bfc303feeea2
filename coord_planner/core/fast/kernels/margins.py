# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Margins and pushes laid end to end: margins.py, and what interior.py does with them, as kernels.

A vector's six parts: room above and below limits, each (6, N, M); missed ends on either side, each (N, 7); room and
missing clearance of pairs, each (P, M).
"""

from __future__ import annotations

from .compiled import inner
from .fields import SHORT_PRICE

_SHORT_OF = 0.995


@inner
def parts(vector, n, m, p):
    """Views of a vector's six parts."""
    of_limits, of_ends, of_pairs = 6 * n * m, 7 * n, p * m
    a, b = 2 * of_limits, 2 * of_limits + 2 * of_ends
    return (
        vector[:of_limits].reshape(6, n, m), vector[of_limits:a].reshape(6, n, m),
        vector[a : a + of_ends].reshape(n, 7), vector[a + of_ends : b].reshape(n, 7),
        vector[b : b + of_pairs].reshape(p, m), vector[b + of_pairs : b + 2 * of_pairs].reshape(p, m),
    )


@inner
def product(margin, push, on):
    """What the products of margins and pushes add up to."""
    total = 0.0
    for q in range(len(on)):
        total += margin[q] * push[q] * on[q]
    return total


@inner
def product_ahead(owners, margin, push, by_margin, by_push, a, b, on):
    """The same after a step of which each robot goes parts a and b, each of shape (N,)."""
    total = 0.0
    for q in range(len(on)):
        k, j = owners[0, q], owners[1, q]
        ahead, pushed = margin[q] + min(a[k], a[j]) * by_margin[q], push[q] + min(b[k], b[j]) * by_push[q]
        total += ahead * pushed * on[q]
    return total


@inner
def lengths(owners, values, changes, worst):
    """Fill the longest step of each robot, at most 1, that leaves all its values above 0, shape (N,)."""
    for k in range(len(worst)):
        worst[k] = _SHORT_OF
    for q in range(len(values)):
        rate = -changes[q] / values[q]
        if rate > _SHORT_OF:
            worst[owners[0, q]] = max(worst[owners[0, q]], rate)
            worst[owners[1, q]] = max(worst[owners[1, q]], rate)
    for k in range(len(worst)):
        worst[k] = _SHORT_OF / worst[k]


@inner
def forces(fixed, end_price, push, held, of_limits, of_ends, of_clear):
    """Fill the multipliers of the rows: margins.forces_of."""
    n, m, p = fixed.shape[1], fixed.shape[2], len(of_clear)
    up, down, over, _, room, _ = parts(push, n, m, p)
    for r in range(6):
        for k in range(n):
            for i in range(m):
                of_limits[r, k, i] = held[r, k, i] if fixed[r, k, i] else up[r, k, i] - down[r, k, i]
    for k in range(n):
        for s in range(7):
            if end_price[k, s] > 0.0:
                of_ends[k, s] = end_price[k, s] - over[k, s]
    for q in range(p):
        for i in range(m):
            of_clear[q, i] = room[q, i]


@inner
def stiffness(fixed, end_price, soft, of_fixed, of_limits, of_ends, of_clear):
    """Fill how stiffly each row is held, for compliances ``soft``; that of free ends stays."""
    n, m, p = fixed.shape[1], fixed.shape[2], len(of_clear)
    up, down, over, under, room, short = parts(soft, n, m, p)
    for r in range(6):
        for k in range(n):
            for i in range(m):
                of_limits[r, k, i] = 1.0 / of_fixed if fixed[r, k, i] else 1.0 / up[r, k, i] + 1.0 / down[r, k, i]
    for k in range(n):
        for s in range(7):
            if end_price[k, s] > 0.0:
                of_ends[k, s] = 1.0 / (over[k, s] + under[k, s])
    for q in range(p):
        for i in range(m):
            of_clear[q, i] = 1.0 / (room[q, i] + short[q, i])


@inner
def aim(
    fixed, end_price, push, held, soft, aims, values, missed, clear, lower, upper, of_fixed, ahead, of_limits, of_ends,
    of_clear,
):
    """Fill the multipliers with which the margins would be ``aims`` if nothing moved; those of free ends stay.

    ``ahead``, shape (L,), is filled with the pushes of limits that belong to them.
    """
    n, m, p = fixed.shape[1], fixed.shape[2], len(clear)
    up, down, _, _, _, _ = parts(ahead, n, m, p)
    push_up, push_down, push_over, _, push_room, _ = parts(push, n, m, p)
    soft_up, soft_down, soft_over, soft_under, soft_room, soft_short = parts(soft, n, m, p)
    aim_up, aim_down, aim_over, aim_under, aim_room, aim_short = parts(aims, n, m, p)
    for r in range(6):
        for k in range(n):
            for i in range(m):
                over, under = values[r, k, i] - upper[r, k, i], lower[r, k, i] - values[r, k, i]
                up[r, k, i] = push_up[r, k, i] + (over + aim_up[r, k, i]) / soft_up[r, k, i]
                down[r, k, i] = push_down[r, k, i] + (under + aim_down[r, k, i]) / soft_down[r, k, i]
                of_limits[r, k, i] = up[r, k, i] - down[r, k, i]
                if fixed[r, k, i]:
                    of_limits[r, k, i] = held[r, k, i] + over / of_fixed
    for k in range(n):
        for s in range(7):
            if end_price[k, s] > 0.0:
                lacking = missed[k, s] - aim_over[k, s] + aim_under[k, s]
                lacking /= soft_over[k, s] + soft_under[k, s]
                of_ends[k, s] = end_price[k, s] - push_over[k, s] + lacking
    for q in range(p):
        for i in range(m):
            lacking = clear[q, i] + aim_short[q, i] - aim_room[q, i]
            of_clear[q, i] = push_room[q, i] - lacking / (soft_room[q, i] + soft_short[q, i])


@inner
def follow(
    fixed, end_price, span, margin, push, soft, aims, on, of_limits, of_ends, of_clear, moved_limits, moved_ends,
    moved_clear, of_fixed, by_margin, by_push, held,
):
    """Fill the changes of margins and pushes, and the multipliers of fixed limits, of a move of the commands.

    ``by_push`` comes with what ``aim`` filled in, as do the multipliers; ``moved_..``: first-order changes of the rows.
    """
    n, m, p = fixed.shape[1], fixed.shape[2], len(moved_clear)
    up, down, over, under, room, short = parts(by_push, n, m, p)
    soft_up, soft_down, soft_over, soft_under, soft_room, soft_short = parts(soft, n, m, p)
    for r in range(6):
        for k in range(n):
            for i in range(m):
                move = moved_limits[r, k, i]
                up[r, k, i] += move / soft_up[r, k, i]
                down[r, k, i] -= move / soft_down[r, k, i]
                held[r, k, i] = of_limits[r, k, i] + move / of_fixed if fixed[r, k, i] else 0.0
    for k in range(n):
        for s in range(7):
            ends = of_ends[k, s] + moved_ends[k, s] / (soft_over[k, s] + soft_under[k, s])
            over[k, s], under[k, s] = end_price[k, s] - ends, end_price[k, s] + ends
    for q in range(p):
        for i in range(m):
            pushed = of_clear[q, i] - moved_clear[q, i] / (soft_room[q, i] + soft_short[q, i])
            room[q, i], short[q, i] = pushed, span[SHORT_PRICE, i] - pushed
    for q in range(len(on)):
        by_push[q] = (by_push[q] - push[q]) * on[q]
        by_margin[q] = (aims[q] - soft[q] * by_push[q] - margin[q]) * on[q]


@inner
def fit(end_price, missed, clear, margin, barrier):
    """Fit the margins of ends and clearances, in place, to what the rows are: margins.fit."""
    (n, _), (p, m) = missed.shape, clear.shape
    _, _, over, under, room, short = parts(margin, n, m, p)
    for k in range(n):
        for s in range(7):
            if end_price[k, s] > 0.0:
                over[k, s], under[k, s] = _shared(over[k, s], under[k, s], missed[k, s])
                narrow = max(barrier / end_price[k, s] - min(over[k, s], under[k, s]), 0.0)
            else:
                narrow = max(barrier - min(over[k, s], under[k, s]), 0.0)
            over[k, s] += narrow
            under[k, s] += narrow
    for q in range(p):
        for i in range(m):
            room[q, i], short[q, i] = _shared(room[q, i], short[q, i], clear[q, i])


@inner
def _shared(one, other, value):
    """Two margins whose difference is to be ``value``: the larger shrinks, by half at most, the other grows."""
    lacking = value - (one - other)
    rise, fall = max(lacking, 0.0), max(-lacking, 0.0)
    less_other, less_one = min(rise, 0.5 * other), min(fall, 0.5 * one)
    return one + rise - less_other - less_one, other + fall - less_one - less_other
