# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One point -> one record, whatever happens to it."""

from __future__ import annotations

import os
import platform
import threading
import time
import traceback
from collections.abc import Callable, Mapping
from typing import Any, Optional

import attrs

from ... import config
from ...config import Configuration
from ...errors import CoordPlannerError, RefusedError
from ..rehearsal import rehearse
from ..run import Run
from .plan import Point

DONE, REFUSED, FAILED = "done", "refused", "failed"
TIMED = "time_"  # columns that begin with it differ from run to run and are never compared

# Run -> figures for the table, and the track of the turn for the page.
Measurer = Callable[[Run, Configuration], tuple[Mapping[str, Any], Mapping[str, Any]]]
_one_at_a_time = threading.Lock()  # a worker with several threads still rehearses one point after the other


@attrs.frozen(eq=False)
class Record:
    """What became of a point.

    Attributes:
        key: of the point. row: plain values by column. track: of the turn, plain values; None where there was none.
    """

    key: str
    row: Mapping[str, Any]
    track: Optional[Mapping[str, Any]] = None


def carry_out(point: Point, measure: Measurer) -> Record:
    """Rehearse a point; a refusal or an error becomes a row with its reason."""
    with _one_at_a_time:
        began = time.perf_counter()
        try:
            configuration = attrs.evolve(config.from_parameters(point.flat), file=point.file)
            run = rehearse(configuration, point.manoeuvre, seed=point.seed, faults=point.faults)
            figures, track = measure(run, configuration)
        except RefusedError as refused:
            return _without_figures(point, REFUSED, str(refused), began)
        except CoordPlannerError as error:
            return _without_figures(point, FAILED, str(error), began)
        except Exception as error:  # a point that fails must not take the sweep with it
            where = traceback.extract_tb(error.__traceback__)[-1]
            reason = f"{type(error).__name__} in {os.path.basename(where.filename)}:{where.lineno}: {error}"
            return _without_figures(point, FAILED, reason, began)
    return Record(point.key, {**head(point), "status": DONE, "reason": "", **figures, **_timing(began)}, track)


def given_up(point: Point, reason: str) -> Record:
    """The record of a point that no process lived to finish."""
    return Record(point.key, {**head(point), "status": FAILED, "reason": reason})


def _without_figures(point: Point, status: str, reason: str, began: float) -> Record:
    return Record(point.key, {**head(point), "status": status, "reason": reason, **_timing(began)})


def head(point: Point) -> dict[str, Any]:
    """The columns that say which point a row is of."""
    return {"point": point.number, "setting": point.setting, "key": point.key, **point.labels,
            "manoeuvre": point.manoeuvre, "seed": point.seed}


def _timing(began: float) -> dict[str, Any]:
    return {f"{TIMED}wall_s": round(time.perf_counter() - began, 3),
            f"{TIMED}process": f"{platform.node()}:{os.getpid()}"}
