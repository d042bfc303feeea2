# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The driftless problem on the Heisenberg group: closed forms.

x' = u, y' = v, z' = (x v - y u)/2, least 1/2 integral of u^2 + v^2 in unit time.
Paths are arcs of circles in the plane, z the area that they and their chord enclose (Brockett, in *New Directions in
Applied Mathematics*, 1981; Montgomery, *A Tour of Subriemannian Geometries*, 2002; from memory).
"""

from __future__ import annotations

import math

from scipy.optimize import brentq


def length(x: float, y: float, z: float) -> float:
    """Shortest length from the origin: a phi / sin(phi), z = a^2 (phi - sin phi cos phi) / (4 sin^2 phi), a = |(x, y)|.

    Half the opening of the arc is phi, within [0, pi).
    """
    chord, area = math.hypot(x, y), abs(z)
    if chord * chord <= 1e-14 * area:
        return 2 * math.sqrt(math.pi * area)
    if area <= 1e-14 * chord * chord:
        return chord
    wanted = 4 * area / chord**2
    closing = math.pi * (1 - 1e-3 / (1 + math.sqrt(wanted)))  # the quotient is about pi / (pi - phi)^2 near pi
    while _area(closing) < wanted:
        closing = (closing + math.pi) / 2
    half = brentq(lambda phi: _area(phi) - wanted, 0.0, closing, xtol=1e-16, rtol=1e-15)
    return chord * half / math.sin(half)


def energy(x: float, y: float, z: float) -> float:
    """Least energy to (x, y, z) in unit time: half the squared length; 2 pi |z| straight above the origin."""
    return length(x, y, z) ** 2 / 2


def coupled_energy(first: float, second: float, coupling: float) -> float:
    """Least cost of two copies that end at (0, 0, first) and (0, 0, second), coupled in both controls.

    The cost is 1/2 integral of u1^2 + v1^2 + u2^2 + v2^2 + chi ((u1 - u2)^2 + (v1 - v2)^2). Derived for this project:
    closed paths of one frequency, turning either way, are enough. With r = (1 + chi - sqrt(1 + 2 chi))/chi and
    first >= |second| the copies turn the same way while second >= r^2 first; below that both turn both ways and the
    cost is linear.
    """
    big, small = (first, second) if abs(first) >= abs(second) else (second, first)
    if big < 0:
        big, small = -big, -small
    root = math.sqrt(1 + 2 * coupling)
    share = coupling / (1 + coupling + root)  # (1 + chi - root)/chi without its cancellation
    if small >= share**2 * big:
        return 2 * math.pi * (big + small + coupling * (math.sqrt(big) - math.sqrt(small)) ** 2)
    return 2 * math.pi * root * (big - small)


def _area(phi: float) -> float:
    """(phi - sin phi cos phi) / sin^2 phi, increasing from 0 without bound."""
    if phi < 1e-2:  # the quotient loses its digits: series
        return phi * (2 / 3 + phi**2 * (4 / 45 + phi**2 * (4 / 315 + phi**2 * 8 / 4725)))
    return (phi - math.sin(phi) * math.cos(phi)) / math.sin(phi) ** 2
