# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What planners and robots said of themselves in a recording: state, ends, warnings, events."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from ..core.messages import Caution, Level
from .bag_clock import Clock
from .bag_content import Content, Report

_PAUSE = 0.5  # seconds after which a planner's warning is another one; its status comes at least five times a second
_PAUSE_OF_DIAGNOSTICS = 2.5  # seconds; diagnostics come once a second (REP-107)


class Said:
    """Everything that was said, on the common time.

    Attributes:
        manoeuvre, state: "" and ``recorded`` where no planner of ours was recorded. completed: by the planner's word.
        ends: asked ends, shape (N, 3), NaN where none is known.
        cautions: (first_s, last_s, Caution). events: (seconds, text), changes of state.
    """

    def __init__(self, content: Content, clock: Clock, names: Sequence[str]) -> None:
        self._names = names
        statuses = [report for report in content.reports if _is_planner(report)]
        times = clock.received(np.array([report.received for report in statuses])).times
        self.manoeuvre, self.state, self.completed = "", "recorded", False
        self.ends = np.full((len(names), 3), math.nan)
        self._rates: list[tuple[float, float]] = []
        spans, events = _Spans(_PAUSE), list[tuple[float, str]]()
        for time, report in zip(times.tolist(), statuses):
            values = report.values
            if values["state"] != self.state:
                events.append((time, report.text or values["state"]))
            self.state = values["state"]
            self.manoeuvre = values.get("manoeuvre") or self.manoeuvre
            self.completed = self.completed or values.get("completed") == "true"
            self._rates.append((time, _number(values.get("progress_rate"), 1.0)))
            self._take_ends(values.get("ends", "{}"))
            for caution in _cautions(values["warnings"]):
                spans.add(time, caution)
        self.events = tuple(events)
        own = {report.name.split(":")[0] for report in statuses}
        others = _Spans(_PAUSE_OF_DIAGNOSTICS)
        loose = [r for r in content.reports if r.level and not _is_planner(r) and r.name.split(":")[0] not in own]
        for time, report in zip(clock.received(np.array([r.received for r in loose])).times.tolist(), loose):
            others.add(time, self._caution(report))
        self.cautions = tuple(sorted([*spans.all(), *others.all()], key=lambda span: span[0]))

    def rate(self, when: float) -> float:
        """How fast the group moved along its reference at a time; 1 where nobody said."""
        if not self._rates:
            return 1.0
        return min(self._rates, key=lambda known: abs(known[0] - when))[1]

    def _take_ends(self, text: str) -> None:
        for name, end in _json(text, {}).items():
            if name in self._names and isinstance(end, list) and len(end) == 3:
                self.ends[self._names.index(name)] = [math.nan if value is None else float(value) for value in end]

    def _caution(self, report: Report) -> Caution:
        words = f"{report.name} {report.subject}"
        subject = next((name for name in self._names if name in words), report.subject)
        return Caution(report.name, subject, Level(min(report.level, 3)), report.text)


class _Spans:
    """Stretches of time in which the same was warned of."""

    def __init__(self, pause: float) -> None:
        self._pause = pause
        self._found: dict[tuple[str, str], list[tuple[float, float, Caution]]] = {}

    def add(self, time: float, caution: Caution) -> None:
        spans = self._found.setdefault((caution.code, caution.subject), [])
        if spans and time - spans[-1][1] <= self._pause:
            spans[-1] = (spans[-1][0], time, spans[-1][2])
        else:
            spans.append((time, time, caution))

    def all(self) -> list[tuple[float, float, Caution]]:
        return [span for spans in self._found.values() for span in spans]


def _is_planner(report: Report) -> bool:
    return "state" in report.values and "warnings" in report.values


def _cautions(text: str) -> list[Caution]:
    found = []
    for item in _json(text, []):
        if isinstance(item, dict) and {"code", "robot", "level", "text"} <= set(item):
            found.append(Caution(str(item["code"]), str(item["robot"]), Level(int(item["level"])), str(item["text"])))
    return found


def _json(text: str, otherwise: Any) -> Any:
    try:
        found = json.loads(text)
    except ValueError:
        return otherwise
    return found if isinstance(found, type(otherwise)) else otherwise


def _number(text: str | None, otherwise: float) -> float:
    try:
        return float(text) if text is not None else otherwise
    except ValueError:
        return otherwise
