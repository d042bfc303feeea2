# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The group's pace along its reference when somebody is held up."""

import numpy as np
import pytest

from coord_planner.core.progress import GroupProgress
from coord_planner.core.settings import Progress

SETTINGS = Progress(dead_band=0.05, full_lag=0.4, look_ahead=0.5, filter_time=0.2, slowest=0.15, recovery=0.5)
NONE = np.zeros(3)


def after(seconds, behind, deficit=NONE, group=None, fall=9.0, settings=SETTINGS):
    """The pace after so long, updated ten times a second, and the group itself."""
    group = group or GroupProgress(3)
    for _ in range(round(10 * seconds)):
        group.update(0.1, np.array(behind, dtype=float), np.array(deficit, dtype=float), settings, fall)
    return group.pace, group


def test_the_pace_follows_the_largest_lag():
    assert after(5.0, [0.0, 0.04, -0.3])[0] == 1.0  # within the dead band; who is ahead slows nobody
    assert after(5.0, [0.0, 0.25, 0.0])[0] == pytest.approx(1.0 - 0.85 * 0.2 / 0.4)
    assert after(5.0, [0.0, 3.0, 0.0])[0] == pytest.approx(0.15)
    # 0.4 m/s slower than asked: 0.2 m further behind in half a second
    assert after(5.0, NONE, [0.4, 0.0, 0.0])[0] == pytest.approx(1.0 - 0.85 * 0.15 / 0.4)


def test_the_pace_falls_and_recovers_no_faster_than_it_may():
    paces, group = [], GroupProgress(3)
    for _ in range(5):
        paces.append(group.update(0.1, np.array([2.0, 0.0, 0.0]), NONE, SETTINGS, 0.8))
    assert np.diff([1.0, *paces]) == pytest.approx([-0.08] * 5)
    _, group = after(5.0, [2.0, 0.0, 0.0])
    paces = [group.pace, *(group.update(0.1, NONE, NONE, SETTINGS, 9.0) for _ in range(40))]
    assert np.diff(paces).max() <= 0.05 + 1e-12 and paces[-1] == 1.0


def test_noise_alone_slows_nobody():
    """The largest of many noisy lags is biased: each is filtered first (shared/numerics.md)."""
    rng, group = np.random.default_rng(0), GroupProgress(24)
    settings = Progress(dead_band=0.05, filter_time=0.5)
    paces = [group.update(0.1, 0.02 * rng.standard_normal(24), np.zeros(24), settings, 9.0) for _ in range(600)]
    assert np.mean(paces) > 0.999


def test_without_a_filter_it_answers_at_once():
    settings = Progress(dead_band=0.0, full_lag=1.0, filter_time=0.0, slowest=0.1)
    assert after(0.1, [0.5, 0.0, 0.0], settings=settings)[0] == pytest.approx(0.55)
