# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The last gate before publication: simple, separate from the optimiser, and never open to nonsense.

Whatever comes in, what goes out is finite, within every limit of its robot, and reachable from the last
command at the machine's own rates. A limit lowered below the present speed is met by braking down to it.
"""

from __future__ import annotations

from typing import Optional

import numpy as np

from .fleet import Fleet
from .settings import SiteRules

_TINY = 1e-12


def allow(
    wanted: np.ndarray, last: np.ndarray, elapsed: float, fleet: Fleet, rules: SiteRules,
    caps: np.ndarray | float = np.inf, rolling: Optional[np.ndarray] = None,
) -> tuple[np.ndarray, np.ndarray]:
    """Commands that may be sent.

    Args:
        wanted: speed and curvature of each robot, shape (N, 2). last: as sent before, shape (N, 2), finite.
        elapsed: seconds since then. caps: speed cap of each robot where it is, shape (N,), m/s.
        rolling: which way each robot may still be moving, 1 or -1, 0 for one at rest, shape (N,): nobody is sent the
            other way before it stands. Taken from the last command when left out.

    Returns:
        commands that may be sent, shape (N, 2), and which robots' wishes were not finite, shape (N,) of bool;
        those robots brake along their last curvature.
    """
    nonsense = ~np.isfinite(wanted).all(axis=1)
    wanted = np.where(nonsense[:, None], np.stack([np.zeros(len(last)), last[:, 1]], axis=1), wanted)
    steer = fleet.limit("max_curvature_rate") * elapsed
    top_curvature = fleet.limit("max_curvature")
    curvature = np.clip(wanted[:, 1], -top_curvature, top_curvature)
    curvature = np.clip(curvature, last[:, 1] - steer, last[:, 1] + steer)
    low, high = _reachable(last[:, 0], elapsed, fleet)
    cap = np.minimum(rules.max_speed, caps)
    top = np.minimum(fleet.limit("max_speed"), cap)
    bottom = np.maximum(np.minimum(fleet.limit("min_speed"), 0.0), -cap)
    gear = np.sign(last[:, 0]) if rolling is None else rolling
    asked = np.where(gear * wanted[:, 0] < 0.0, 0.0, wanted[:, 0])
    speed = np.clip(np.clip(asked, bottom, top), low, high)
    fastest = _fastest(curvature, fleet, rules)
    speed = np.clip(np.clip(speed, -fastest, fastest), low, high)
    curvature = _unwound(speed, curvature, last[:, 1], steer, fleet, rules)
    return np.stack([speed, curvature], axis=1), nonsense


def _reachable(last: np.ndarray, elapsed: float, fleet: Fleet) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest speed after the elapsed time: braking towards 0, speeding up away from it."""
    faster, slower = fleet.limit("max_acceleration") * elapsed, fleet.limit("max_braking") * elapsed
    low = np.where(last > 0, last - slower, last - faster)
    high = np.where(last < 0, last + slower, last + faster)
    # Never through zero in one step.
    low = np.where((last > 0) & (low < 0), 0.0, low)
    high = np.where((last < 0) & (high > 0), 0.0, high)
    return low, high


def _fastest(curvature: np.ndarray, fleet: Fleet, rules: SiteRules) -> np.ndarray:
    """Highest speed at which turn rate and lateral acceleration stay within their limits."""
    bend = np.maximum(np.abs(curvature), _TINY)
    lateral = np.minimum(fleet.limit("max_lateral_acceleration"), rules.max_lateral_acceleration)
    return np.minimum(fleet.limit("max_turn_rate") / bend, np.sqrt(lateral / bend))


def _unwound(
    speed: np.ndarray, curvature: np.ndarray, last: np.ndarray, steer: np.ndarray, fleet: Fleet, rules: SiteRules
) -> np.ndarray:
    """Less curvature where braking alone cannot bring the turn within its limits in time."""
    fast = np.maximum(np.abs(speed), _TINY)
    lateral = np.minimum(fleet.limit("max_lateral_acceleration"), rules.max_lateral_acceleration)
    most = np.minimum(fleet.limit("max_turn_rate") / fast, lateral / fast**2)
    return np.clip(np.clip(curvature, -most, most), last - steer, last + steer)
