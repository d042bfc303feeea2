# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Records as they come, one JSON object a line, so that a sweep that was killed goes on where it stopped."""

from __future__ import annotations

import fcntl
import json
import os
from collections.abc import Iterable, Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, Optional

import attrs

from ...errors import SettingsError
from .plan import Point
from .point import Record, head

NAME = "journal.jsonl"
_REMEDY = "another --out, or --restart to throw away what is there"


class Journal:
    """The journal in a folder, opened for one sweep at a time.

    Raises:
        SettingsError: it belongs to other points, is damaged, or another sweep is writing it.
    """

    def __init__(self, folder: Path, points: Iterable[Point], restart: bool = False) -> None:
        self.file = folder / NAME
        self.records: dict[str, Record] = {}
        self._stream = open(self.file, "a+b")  # noqa: SIM115  closed by __exit__
        try:
            self._claim(folder)
            if restart:
                self._stream.truncate(0)
            self._read({point.key: point for point in points})
        except BaseException:
            self._stream.close()
            raise

    def __enter__(self) -> Journal:
        return self

    def __exit__(
        self, _kind: Optional[type[BaseException]], _error: Optional[BaseException], _trace: Optional[TracebackType]
    ) -> None:
        self._stream.close()

    def add(self, record: Record) -> bool:
        """Write a record so that it outlives this process; False when this point has one already."""
        if record.key in self.records:
            return False
        held: dict[str, Any] = {"key": record.key, "row": record.row, "track": record.track}
        self._stream.write(json.dumps(held, allow_nan=False, separators=(",", ":")).encode() + b"\n")
        self._stream.flush()
        os.fsync(self._stream.fileno())
        self.records[record.key] = record
        return True

    def forget(self, keys: Iterable[str]) -> None:
        """Have these points rehearsed again: of two records of a point the later one counts."""
        for key in keys:
            self.records.pop(key, None)

    def _claim(self, folder: Path) -> None:
        try:
            fcntl.flock(self._stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            raise SettingsError("another sweep is writing into this folder", file=str(folder),
                                allowed="another --out, or wait for it") from None

    def _read(self, known: Mapping[str, Point]) -> None:
        self._stream.seek(0)
        good = 0
        for number, line in enumerate(self._stream, start=1):
            if not line.endswith(b"\n"):
                break  # the sweep was killed while it wrote this
            record = self._record(line, number)
            if record.key not in known:
                raise SettingsError("it holds results of other points than this sweep has",
                                    file=f"{self.file}:{number}", allowed=_REMEDY)
            # The sweep may have grown since: places and names are those of today.
            self.records[record.key] = attrs.evolve(record, row={**record.row, **head(known[record.key])})
            good += len(line)
        self._stream.truncate(good)

    def _record(self, line: bytes, number: int) -> Record:
        try:
            held = json.loads(line)
            return Record(held["key"], dict(held["row"]), held["track"])
        except (ValueError, KeyError, TypeError):
            raise SettingsError("this line is damaged", file=f"{self.file}:{number}", allowed=_REMEDY) from None
