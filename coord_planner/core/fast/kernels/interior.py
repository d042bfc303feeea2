# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""An interior-point step as interior.Interior takes it, in parts that see margins as vectors laid end to end.

Rows come flat: limits (A = 6 N M), ends (B = 7 N), clearances (C = P M), and vectors of L = 2 A + 2 B + 2 C entries in
the order of margins.py. Between the parts the matrix is made (matrix.py) and commands answer to forces (point.py).
"""

from __future__ import annotations

import numpy as np

from .compiled import inner
from .fields import K, V

_STIFFEST, _SOFTEST = 1e-9, 1e12
_FIXED = 1e-10
_SMALLEST = 1e-10
_SHORT_OF = 0.92


def stiffen(fixed, price, clearances, margin, push, held):
    """Compliances (L,), stiffness of limits, ends and clearances, and their multipliers, at an iterate.

    Args:
        fixed: limits without room, (A,). price: of ends, 0 where free, (B,). clearances: C. held: multipliers of
            fixed limits, (A,).
    """
    a, b, c = len(fixed), len(price), clearances
    soft = np.empty(len(margin))
    for q in range(len(soft)):
        soft[q] = min(max(margin[q] / push[q], _STIFFEST), _SOFTEST)
    limits, ends, clear = np.empty(a), np.empty(b), np.empty(c)
    of_limits, of_ends, of_clear = np.empty(a), np.empty(b), np.empty(c)
    for q in range(a):
        limits[q] = 1.0 / _FIXED if fixed[q] else 1.0 / soft[q] + 1.0 / soft[a + q]
        of_limits[q] = held[q] if fixed[q] else push[q] - push[a + q]
    for q in range(b):
        over = 2 * a + q
        ends[q] = 1.0 / (soft[over] + soft[over + b]) if price[q] > 0.0 else 0.0
        of_ends[q] = price[q] - push[over] if price[q] > 0.0 else 0.0
    for q in range(c):
        room = 2 * a + 2 * b + q
        clear[q] = 1.0 / (soft[room] + soft[room + c])
        of_clear[q] = push[room]
    return soft, limits, ends, clear, of_limits, of_ends, of_clear


def aim(fixed, price, push, held, soft, aims, values, missed, clear, lower, upper):
    """Multipliers with which margins would be ``aims``, shape (L,), if nothing moved.

    Returns:
        pushes of the limits alone, in a vector (L,); multipliers of limits, ends and clearances.
    """
    a, b, c = len(fixed), len(price), len(clear)
    ahead, of_limits, of_ends, of_clear = np.empty(len(push)), np.empty(a), np.empty(b), np.empty(c)
    for q in range(a):
        over, under = values[q] - upper[q], lower[q] - values[q]
        ahead[q] = push[q] + (over + aims[q]) / soft[q]
        ahead[a + q] = push[a + q] + (under + aims[a + q]) / soft[a + q]
        of_limits[q] = held[q] + over / _FIXED if fixed[q] else ahead[q] - ahead[a + q]
    for q in range(b):
        over = 2 * a + q
        lacking = (missed[q] - aims[over] + aims[over + b]) / (soft[over] + soft[over + b])
        of_ends[q] = price[q] - push[over] + lacking if price[q] > 0.0 else 0.0
    for q in range(c):
        room = 2 * a + 2 * b + q
        lacking = clear[q] + aims[room + c] - aims[room]
        of_clear[q] = push[room] - lacking / (soft[room] + soft[room + c])
    return ahead, of_limits, of_ends, of_clear


def follow(
    fixed, price, short_price, margin, push, soft, aims, on, owners, robots, ahead, of_limits, of_ends, of_clear,
    moved_limits, moved_ends, moved_clear,
):
    """Changes of margins and pushes, and the multipliers of fixed limits, that go with a move of the commands.

    Args:
        short_price: at each node, (M,). on, owners: of each entry, whether it counts, and its two robots, (L,), (2, L).
            ahead, of_..: of ``aim``; ahead is used up. moved_..: first-order changes of the rows.

    Returns:
        changes of margins and of pushes (L,); multipliers of fixed limits (A,); the barrier to aim at next (Mehrotra),
        and aims for that.
    """
    a, b, c, m = len(fixed), len(price), len(of_clear), len(short_price)
    by_margin, held = np.empty(len(push)), np.empty(a)
    for q in range(a):
        ahead[q] += moved_limits[q] / soft[q]
        ahead[a + q] -= moved_limits[q] / soft[a + q]
        held[q] = of_limits[q] + moved_limits[q] / _FIXED if fixed[q] else 0.0
    for q in range(b):
        over = 2 * a + q
        ends = of_ends[q] + moved_ends[q] / (soft[over] + soft[over + b])
        ahead[over], ahead[over + b] = price[q] - ends, price[q] + ends
    for q in range(c):
        room = 2 * a + 2 * b + q
        pushed = of_clear[q] - moved_clear[q] / (soft[room] + soft[room + c])
        ahead[room], ahead[room + c] = pushed, short_price[q % m] - pushed
    for q in range(len(push)):
        ahead[q] = (ahead[q] - push[q]) * on[q]
        by_margin[q] = (aims[q] - soft[q] * ahead[q] - margin[q]) * on[q]
    barrier, next_aims = _correct(robots, on, owners, margin, push, by_margin, ahead)
    return by_margin, ahead, held, barrier, next_aims


@inner
def _correct(robots, on, owners, margin, push, by_margin, by_push):
    ahead, pushed = np.empty(robots), np.empty(robots)
    _lengths(owners, margin, by_margin, ahead)
    _lengths(owners, push, by_push, pushed)
    count, before, left = 0.0, 0.0, 0.0
    for q in range(len(on)):
        k, j = owners[0, q], owners[1, q]
        next_margin = margin[q] + min(ahead[k], ahead[j]) * by_margin[q]
        next_push = push[q] + min(pushed[k], pushed[j]) * by_push[q]
        count += on[q]
        before += margin[q] * push[q] * on[q]
        left += next_margin * next_push * on[q]
    count = max(count, 1.0)
    barrier = max((max(left, 0.0) / before) ** 3 * before / count, _SMALLEST)
    aims = np.empty(len(on))
    for q in range(len(on)):
        aims[q] = (barrier - by_margin[q] * by_push[q]) / push[q]
    return barrier, aims


@inner
def _lengths(owners, values, changes, worst):
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


def advance(owners, roll, margin, push, held, commands, by_margin, by_push, held_after, share):
    """Go a share of each robot's longest step that leaves its margins and pushes above 0.

    Returns:
        commands (N, 2M), margins, pushes (L,), multipliers of fixed limits (A,); the smallest part of the step that
        any robot went.
    """
    n, m = roll.shape[1], roll.shape[2] - 1
    ahead, pushed = np.empty(n), np.empty(n)
    _lengths(owners, margin, by_margin, ahead)
    _lengths(owners, push, by_push, pushed)
    for k in range(n):
        ahead[k], pushed[k] = share * ahead[k], share * pushed[k]
    least = 1.0
    moved, next_held = np.empty((n, 2 * m)), np.empty(len(held))
    for k in range(n):
        least = min(least, ahead[k], pushed[k])
        for i in range(m):
            moved[k, i] = roll[K, k, i] + ahead[k] * commands[k, i]
            moved[k, m + i] = roll[V, k, i] + ahead[k] * commands[k, m + i]
    for q in range(len(held)):
        next_held[q] = held[q] + pushed[owners[0, q]] * (held_after[q] - held[q])
    next_margin, next_push = np.empty(len(margin)), np.empty(len(push))
    for q in range(len(margin)):
        k, j = owners[0, q], owners[1, q]
        next_margin[q] = margin[q] + min(ahead[k], ahead[j]) * by_margin[q]
        next_push[q] = push[q] + min(pushed[k], pushed[j]) * by_push[q]
    return moved, next_margin, next_push, next_held, least


def settle(price, missed, clear, on, margin, push, barrier):
    """Fit margins in place to the rows that the step has led to (margins.fit); what is open then."""
    b, c = len(price), len(clear)
    first = len(margin) - 2 * b - 2 * c
    for q in range(first, first + b):
        over, under = _shared(margin[q], margin[q + b], missed[q - first], price[q - first] > 0.0)
        wide = price[q - first] if price[q - first] > 0.0 else 1.0
        narrow = max(barrier / wide - min(over, under), 0.0)
        margin[q], margin[q + b] = over + narrow, under + narrow
    for q in range(first + 2 * b, first + 2 * b + c):
        margin[q], margin[q + c] = _shared(margin[q], margin[q + c], clear[q - first - 2 * b], True)
    total = 0.0
    for q in range(len(on)):
        total += margin[q] * push[q] * on[q]
    return total


@inner
def _shared(one, other, value, counts):
    """Two margins whose difference is to be ``value``: the larger shrinks, by half at most, the other grows."""
    lacking = value - (one - other) if counts else 0.0
    rise, fall = max(lacking, 0.0), max(-lacking, 0.0)
    less_other, less_one = min(rise, 0.5 * other), min(fall, 0.5 * one)
    return one + rise - less_other - less_one, other + fall - less_one - less_other
