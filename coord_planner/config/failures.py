# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Failures kept as problem files, for ``coord-planner solve`` to reproduce them; their number and size are capped."""

from __future__ import annotations

import json
import os
import re
import threading
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Optional

from ..core.case import PlannerCase
from ..core.coordinator import Refused, Solve
from ..core.plan import Plan
from ..core.problem import Problem
from ..core.solver import Start
from ..core.tick import usable
from ..errors import SolveError
from .groups import Failures
from .problem_file import to_problem_file

_OURS = re.compile(r"problem_(\d{6})(?:_[A-Za-z0-9_-]*)?\.json\Z")
_WORD = re.compile(r"[^A-Za-z0-9_-]+")


class FailureStore:
    """A folder with the newest failures. Safe to use from several threads; never raises because of the disk.

    Args:
        directory: made when the first failure is kept.
        most: files that are kept; the oldest are removed. max_bytes: of all of them together; a problem that alone is
            larger is not kept.
        said: is told in words, in the caller's thread, what became of each failure.

    ``trouble`` says in words why the last failure was not kept, "" when it was.
    """

    def __init__(
        self, directory: str | Path, most: int = 20, max_bytes: int = 20_000_000,
        said: Callable[[str], None] = lambda _words: None,
    ) -> None:
        if most < 1 or max_bytes < 1:
            raise ValueError(f"most {most}, max_bytes {max_bytes}; allowed: both at least 1")
        self._directory, self._most, self._max_bytes = Path(directory), most, max_bytes
        self._lock, self._said = threading.Lock(), said
        self.trouble = ""

    def save(self, document: Mapping[str, Any], label: str = "") -> Optional[Path]:
        """Keep a problem (as ``to_problem_file`` writes it); the file, or None when it is not kept.

        Args:
            label: a few words for the file's name, e.g. the manoeuvre.
        """
        file = self._saved(document, label)
        self._said(f"no plan was found: the problem is kept in {file}" if file else f"not kept: {self.trouble}")
        return file

    def _saved(self, document: Mapping[str, Any], label: str) -> Optional[Path]:
        with self._lock:
            self.trouble = ""
            try:
                raw = json.dumps(document, allow_nan=False).encode()
            except ValueError:
                self.trouble = "the problem holds numbers that are not finite, which no problem file can hold"
                return None
            if len(raw) > self._max_bytes:
                self.trouble = f"a problem of {len(raw)} bytes is larger than all may be together, {self._max_bytes}"
                return None
            try:
                return self._write(raw, _WORD.sub("_", label)[:40].strip("_"))
            except OSError as error:
                self.trouble = f"{self._directory}: {error.strerror or error}"
                return None

    def files(self) -> list[Path]:
        """What is kept, oldest first."""
        try:
            found = [file for file in self._directory.iterdir() if _OURS.match(file.name)]
        except OSError:
            return []
        return sorted(found, key=lambda file: file.name)

    def _write(self, raw: bytes, label: str) -> Path:
        self._directory.mkdir(parents=True, exist_ok=True)
        kept = self.files()
        sizes = [file.stat().st_size for file in kept]
        while kept and (len(kept) >= self._most or sum(sizes) + len(raw) > self._max_bytes):
            kept[0].unlink(missing_ok=True)
            del kept[0], sizes[0]
        last = _OURS.match(kept[-1].name) if kept else None
        number = int(last[1]) + 1 if last else 1
        file = self._directory / f"problem_{number:06d}{'_' if label else ''}{label}.json"
        unfinished = file.with_suffix(".part")
        unfinished.write_bytes(raw)
        os.replace(unfinished, file)  # whoever looks never finds half a file
        return file


def kept(
    group: Failures, solve: Solve, least_clearance: float, said: Callable[[str], None] = lambda _words: None
) -> tuple[Solve, Refused]:
    """What a Coordinator is given as ``solve`` and ``refused``, so that failures are kept where the file asks for it.

    Args:
        said: is told in words what became of each failure, in the thread that solves.
    """
    if not group.folder:
        return solve, lambda _case: None
    store = FailureStore(group.folder, group.most, int(1e6 * group.max_megabytes), said)

    def refused(case: PlannerCase) -> None:
        store.save(to_problem_file(case), "refused")

    return keeping(solve, store, least_clearance, "tick"), refused


def keeping(solve: Solve, store: FailureStore, least_clearance: float, label: str = "") -> Solve:
    """A tick's solve that keeps what fails: hand it to the Coordinator in the place of ``solve``.

    Of failures that follow one another only the first is kept: the others are its consequences.

    Args:
        least_clearance: the site's, metres: an unfinished plan that keeps it and its end is no failure.
    """
    failing = False

    def kept(problem: Problem, start: Start, warm: bool, budget: float) -> Plan:
        nonlocal failing
        before, failing = failing, True
        try:
            plan = solve(problem, start, warm, budget)
        except SolveError as error:
            if not before:
                store.save(to_problem_file(PlannerCase(problem, start, warm, str(error))), label)
            raise
        failing = usable(problem, plan, least_clearance) is None
        if failing and not before:
            reason = f"not finished in {plan.iterations} iterations and {1e3 * plan.solve_time:.0f} ms"
            store.save(to_problem_file(PlannerCase(problem, start, warm, reason)), label)
        return plan

    return kept
