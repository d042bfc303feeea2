# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Copying as it came out, in a plan or in a run, beside what the law says."""

from __future__ import annotations

from collections.abc import Sequence

import attrs
import numpy as np

from ..reference import Reference


@attrs.frozen(eq=False)
class Copied:
    """What N robots made of the turning of the led ones.

    Attributes:
        share: part of the one led robot's turning that each copied, shape (N,), by least squares over time;
            NaN where several are led, or none.
        turned: change of heading, radians, shape (N,). predicted: the same by the law, from the led ones' turning.
        gap: largest difference from the law at any moment over the led ones' largest turning, shape (N,).
    """

    share: np.ndarray
    turned: np.ndarray
    predicted: np.ndarray
    gap: np.ndarray


def copied(
    turning: np.ndarray, steps: np.ndarray, speeds: np.ndarray, shares: np.ndarray, led: Sequence[int]
) -> Copied:
    """Compare.

    Args:
        turning: u, turn rate over asked speed, shape (N, K), 1/m. steps: seconds that each value stands for, (K,).
        speeds: asked speed of each robot, m/s, shape (N,).
        shares: of :func:`copying.led_shares`, shape (N, len(led)). led: robots with ends of their own.
    """
    ahead = turning[list(led)]
    law = shares @ ahead
    largest = max(float(np.abs(ahead).max(initial=0.0)), 1e-12)
    share = np.full(len(turning), np.nan)
    if len(led) == 1:
        energy = float(np.sum(steps * ahead[0] ** 2))
        share = turning @ (steps * ahead[0]) / energy if energy > 0 else share
    return Copied(
        share, speeds * (turning @ steps), speeds * (law @ steps), np.abs(turning - law).max(axis=1) / largest
    )


def planned_turning(made: Reference) -> tuple[np.ndarray, np.ndarray]:
    """Turning in the intervals of a reference, shape (N, M), 1/m, and their lengths, shape (M,), s."""
    steps = np.diff(made.plan.times)
    rates = np.diff(made.plan.poses[:, :, 2], axis=1) / steps
    return rates / made.task.asked[:, None], steps
