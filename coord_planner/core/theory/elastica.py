# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One robot: its path is an elastica, and Jacobi's elliptic functions give it in closed form.

With h = u^2/2 + mu_2 and C = |p|: u'' + u^3/2 - h u = 0 and u'^2 + (u^2/2 - h)^2 = C^2. (Euler's elastica: Love,
*A Treatise on the Mathematical Theory of Elasticity*, 4th ed., ch. XIX; functions: DLMF ch. 22; integrals of their
squares: DLMF 22.16(ii).) With a the heading against p: mu_2 = C cos a, mu_3 = -C sin a, so that cos a = (h - u^2/2)/C
and sin a = u'/C.
"""

from __future__ import annotations

import math

import attrs
import numpy as np
from scipy.special import ellipeinc, ellipj, ellipkinc

_REL = 1e-13  # relative difference of h and C below which they count as equal
_REST = 1e-15  # the same for h and -C: a straight line

ARC = "arc"  # C = 0, or at rest on u = 0: an arc of constant curvature or a straight line
INFLECTED = "inflected"  # |h| < C: the curvature changes sign
SOLITARY = "solitary"  # h = C: one loop between straight ends
TURNING = "turning"  # h > C: always to one side


@attrs.frozen
class Elastica:
    """An elastica in time t, unit speed. ``energy`` h, ``tension`` C >= 0, ``phase`` the argument of the elliptic
    function at t = 0 (for an arc: unused), ``side`` +1 or -1: sign of u where it doesn't change (0 on a straight line).

    Where h is within 1e-9 of C, but not C, digits are lost: neighbouring solutions part exponentially there, and
    scipy's functions change to an approximation.
    """

    energy: float
    tension: float
    phase: float = 0.0
    side: int = 1

    @classmethod
    def from_costates(cls, mu: np.ndarray | tuple[float, float, float]) -> Elastica:
        """From (mu_1, mu_2, mu_3) at t = 0; mu_1 = u."""
        u, along, across = (float(value) for value in mu)
        energy, tension = u * u / 2 + along, math.hypot(along, across)
        resting = u == 0 and across == 0  # straight along p or against it
        side = int(math.copysign(1, u)) if u else 0
        regime = _regime(energy, tension)
        if regime == ARC or resting:
            return cls(u * u / 2, 0.0, 0.0, side)
        if regime == SOLITARY:
            steep = math.acosh(max(2 * math.sqrt(tension) / abs(u), 1.0)) if abs(u) > 1e-150 else math.inf
            return cls(energy, tension, math.copysign(steep, (side or 1) * across), side or 1)
        plain = cls(energy, tension, 0.0, side or 1)
        if regime == TURNING:
            half = math.atan2(plain.side * across, -along) / 2
            return attrs.evolve(plain, phase=float(ellipkinc(half, plain.parameter)))
        modulus, rate = math.sqrt(plain.parameter), plain.rate
        delta = math.sqrt(max(1 - plain.parameter + (u / (2 * rate)) ** 2, 0.0))
        amplitude = math.atan2(across / (2 * modulus * rate**2 * delta), u / (2 * modulus * rate))
        return attrs.evolve(plain, phase=float(ellipkinc(amplitude, plain.parameter)), side=1)

    @property
    def regime(self) -> str:
        """One of ARC, INFLECTED, SOLITARY, TURNING."""
        return _regime(self.energy, self.tension)

    @property
    def parameter(self) -> float:
        """m = k^2 of the elliptic functions, within [0, 1]."""
        if self.regime == INFLECTED:
            return (1 + self.energy / self.tension) / 2
        return 2 * self.tension / (self.energy + self.tension) if self.regime == TURNING else 1.0

    @property
    def rate(self) -> float:
        """w: the elliptic functions' argument is w t + phase."""
        return math.sqrt((self.energy + self.tension) / 2 if self.regime == TURNING else self.tension)

    def curvature(self, t: np.ndarray | float) -> np.ndarray:
        """u at times t."""
        t = np.asarray(t, dtype=float)
        if self.regime == ARC:
            return np.full(t.shape, self.side * math.sqrt(2 * max(self.energy, 0.0)))
        argument = self.rate * t + self.phase
        if self.regime == SOLITARY:
            decay = np.exp(-np.abs(argument))  # 1/cosh without its overflow
            return 4 * self.side * self.rate * decay / (1 + decay**2)
        _, cn, dn, _ = ellipj(argument, self.parameter)
        if self.regime == TURNING:
            return 2 * self.side * self.rate * dn
        return 2 * math.sqrt(self.parameter) * self.rate * cn

    def poses(self, t: np.ndarray, start: tuple[float, float, float] = (0.0, 0.0, 0.0)) -> np.ndarray:
        """x, y, heading at times t, shape (K, 3), from a pose at t = 0; heading unwrapped."""
        t = np.asarray(t, dtype=float)
        if self.regime == ARC:
            angle = self.curvature(t) * t
            local = t * np.sinc(angle / 2 / np.pi) * np.exp(1j * angle / 2)
        else:
            along, across, angles = self._against_force(np.concatenate([[0.0], t]))
            angle = angles[1:] - angles[0]
            local = ((along + 1j * across)[1:] - (along + 1j * across)[0]) * np.exp(-1j * angles[0])
        moved = local * np.exp(1j * start[2])
        return np.stack([start[0] + moved.real, start[1] + moved.imag, start[2] + angle], axis=-1)

    def _against_force(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Position along and across p, and heading against p, each up to a constant (the heading exactly)."""
        argument, m, rate = self.rate * t + self.phase, self.parameter, self.rate
        across = self.curvature(t) / self.tension
        if self.regime == SOLITARY:
            return t - 2 * np.tanh(argument) / rate, across, np.pi + 4 * self.side * np.arctan(np.tanh(argument / 2))
        sn, _, dn, amplitude = ellipj(argument, m)
        second_kind = ellipeinc(amplitude, m)
        if self.regime == TURNING:
            along = (self.energy * t - 2 * rate * second_kind) / self.tension
            return along, across, np.pi + 2 * self.side * amplitude
        return t - 2 * second_kind / rate, across, 2 * np.arctan2(-dn, math.sqrt(m) * sn)

    def cost(self, duration: float) -> float:
        """1/2 integral of u^2 from 0 to the duration: h T - p . displacement."""
        if self.regime == ARC:
            return self.energy * duration
        along, _, _ = self._against_force(np.array([0.0, duration]))
        return self.energy * duration - self.tension * float(along[1] - along[0])


def _regime(energy: float, tension: float) -> str:
    scale = abs(energy) + tension
    if tension <= _REL * scale or energy <= -tension * (1 - _REST) or scale == 0:
        return ARC
    if abs(energy - tension) <= _REL * scale:
        return SOLITARY
    return TURNING if energy > tension else INFLECTED
