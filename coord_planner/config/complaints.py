# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Collecting what is wrong with a parameter file, so that a person can mend it in one go."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from contextlib import AbstractContextManager
from typing import Any

import attrs

from ..errors import SettingsError

_LONGEST_SHOWN = 60
_MOST_SHOWN = 12


class SeveralSettingsErrors(SettingsError):
    """More than one thing is wrong: its text has a line for each of them.

    ``errors`` holds them all; ``problem``, ``key``, ``file`` and ``allowed`` are those of the first.
    """

    def __init__(self, errors: Iterable[SettingsError]) -> None:
        self.errors = tuple(errors)
        first = self.errors[0]
        super().__init__(first.problem, key=first.key, file=first.file, allowed=first.allowed)
        lines = [str(error) for error in self.errors[:_MOST_SHOWN]]
        if len(self.errors) > _MOST_SHOWN:
            lines.append(f"... and {len(self.errors) - _MOST_SHOWN} more")
        self.args = ("\n".join(lines),)


@attrs.frozen
class Source:
    """Where values came from: a file (with the line of each key, where known) or a request."""

    file: str = ""
    lines: Mapping[str, int] = attrs.field(factory=dict)

    def error(self, problem: str, key: str = "", allowed: str = "") -> SettingsError:
        """A SettingsError that points at the key's line."""
        line = self.lines.get(key)
        place = f"{self.file}:{line}" if line and self.file else self.file
        return SettingsError(problem, key=one_line(key), file=place, allowed=allowed)


class Complaints:
    """Errors gathered about one source; the same text counts once."""

    def __init__(self, source: Source) -> None:
        self._source = source
        self._errors: dict[str, SettingsError] = {}

    @property
    def count(self) -> int:
        """How many different complaints there are."""
        return len(self._errors)

    def add(self, problem: str, key: str = "", allowed: str = "") -> None:
        error = self._source.error(problem, key, allowed)
        self._errors.setdefault(str(error), error)

    def about(self, key: str) -> AbstractContextManager[None, bool]:
        """Turn a SettingsError raised inside into a complaint about ``key``."""
        return _About(self, key)

    def raise_any(self) -> None:
        """Raise what was gathered: nothing, one SettingsError or SeveralSettingsErrors."""
        errors = list(self._errors.values())
        if len(errors) == 1:
            raise errors[0]
        if errors:
            raise SeveralSettingsErrors(errors)


@attrs.frozen
class _About(AbstractContextManager[None, bool]):
    complaints: Complaints
    key: str

    def __exit__(self, _kind: object, error: BaseException | None, _trace: object) -> bool:
        if not isinstance(error, SettingsError):
            return False
        self.complaints.add(error.problem, self.key, error.allowed)
        return True


def shown(value: Any) -> str:
    """A value as an error message shows it: on one line and not too long."""
    try:
        text = repr(value)
    except (ValueError, RecursionError):  # e.g. an integer with too many digits to print
        text = f"a value of type {type(value).__name__}"
    return text if len(text) <= _LONGEST_SHOWN else text[: _LONGEST_SHOWN - 3] + "..."


def one_line(key: str) -> str:
    """A key as an error message shows it; anything unprintable in it is escaped."""
    return key if key.isprintable() else repr(key)


def nearest(word: str, known: Iterable[str], prefix: str = "") -> str:
    """``; did you mean ...?`` for a word that is close to a known one, else nothing."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.75)
    return f"; did you mean {prefix}{close[0]}?" if close else ""
