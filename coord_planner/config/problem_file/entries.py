# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Values taken from a tree by key, each checked; everything that is wrong is told together."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any, Optional

import numpy as np

from ...core.parameter import Description
from ..complaints import Complaints, Source, nearest, one_line, shown
from ..values import allowed, convert

_MANY = 1e7  # largest magnitude of a coordinate or an angle: more is a mistake
REQUIRED = object()


class Entries:
    """A mapping of the file: its values are asked for one by one, and ``done`` says what nobody asked for.

    Args:
        tree: keys and values. where: dotted key of the mapping itself, "" at the top.
    """

    def __init__(self, tree: dict[str, Any], source: Source, where: str = "",
                 complaints: Optional[Complaints] = None) -> None:
        self._tree, self._source, self._where = tree, source, where
        self.complaints = complaints or Complaints(source)
        self._known: list[str] = []

    def key(self, name: str) -> str:
        """A key of this mapping as messages name it."""
        return f"{self._where}.{name}" if self._where else name

    def has(self, name: str) -> bool:
        """Whether a value stands behind a key; null counts as none."""
        self._known.append(name)
        return self._tree.get(name) is not None

    def add(self, name: str, problem: str, allowed: str = "") -> None:
        """Complain about a key."""
        self.complaints.add(problem, self.key(name), allowed)

    def raw(self, name: str, what: str) -> Any:
        """What stands behind a key that must be given; None, and a complaint, where nothing does."""
        if not self.has(name):
            self.add(name, "it has to be given", what)
            return None
        return self._tree[name]

    def given(self, chosen: Mapping[str, Description]) -> dict[str, float]:
        """Numbers that are given, by name, each checked by its description."""
        found = {name: self.value(name, description, default=None) for name, description in chosen.items()}
        return {name: value for name, value in found.items() if value is not None}

    def value(self, name: str, description: Description, kind: str = "float", default: Any = REQUIRED) -> Any:
        """A single value, checked as a parameter is; the default (or None, and a complaint) where it cannot be had."""
        if not self.has(name):
            if default is REQUIRED:
                self.add(name, "it has to be given", allowed(kind, description))
                return None
            return default
        with self.complaints.about(self.key(name)):
            return convert(self._tree[name], kind, name, description)
        return None

    def word(self, name: str, choices: Sequence[str], default: str) -> str:
        """One of a few words."""
        found: str = self.value(name, Description(name, choices=tuple(choices)), "str", default)
        return found if found is not None else default

    def numbers(self, name: str, what: str, count: Optional[int] = None) -> Optional[list[float]]:
        """A list of finite numbers; None, and a complaint, where it is none."""
        value = self.raw(name, what)
        return None if value is None else checked_numbers(self.complaints, self.key(name), value, what, count)

    def array(self, name: str, shape: tuple[int, ...], what: str) -> Optional[np.ndarray]:
        """Numbers in nested lists of a given shape."""
        value = self.raw(name, what)
        if value is None:
            return None
        size = " by ".join(map(str, shape))
        try:
            found = np.array(value, dtype=float)
        except (TypeError, ValueError):
            found = None
        if found is None or found.shape != shape or not np.isfinite(found).all():
            self.add(name, f"{shown(value)} is not what is expected", f"{what}: {size} finite numbers")
            return None
        return found

    def mapping(self, name: str, what: str) -> Optional[Entries]:
        """A mapping below a key, or None where there is none."""
        if not self.has(name):
            return None
        value = self._tree[name]
        if not isinstance(value, dict):
            self.add(name, f"{shown(value)} is no mapping", what)
            return None
        return Entries(value, self._source, self.key(name), self.complaints)

    def listed(self, name: str, what: str, required: bool = False) -> list[Any]:
        """A list below a key; empty, with a complaint where it must be there, when there is none."""
        value = self.raw(name, what) if required else (self._tree[name] if self.has(name) else None)
        if value is None:
            return []
        if not isinstance(value, list):
            self.add(name, f"{shown(value)} is no list", what)
            return []
        return value

    def at(self, name: str, index: int) -> Entries:
        """A mapping that stands in a list."""
        return Entries(self._tree[name][index], self._source, f"{self.key(name)}[{index}]", self.complaints)

    def plainly(self, name: str) -> Any:
        """What stands behind a key, unchecked; None where nothing does."""
        return self._tree[name] if self.has(name) else None

    def is_mapping(self) -> bool:
        """Whether this is a mapping at all (an entry of a list may be anything)."""
        return isinstance(self._tree, dict)

    def done(self, elsewhere: Optional[dict[str, str]] = None) -> None:
        """Complain about keys that nobody asked for.

        Args:
            elsewhere: for keys that are known but not of use here: what to do instead.
        """
        for name in self._tree:
            if name in self._known:
                continue
            if elsewhere and name in elsewhere:
                self.add(name, "it is of no use here", elsewhere[name])
                continue
            close = nearest(name, self._known)
            known = list(dict.fromkeys(self._known))
            self.complaints.add(f"it is not a known key{close}", one_line(self.key(name)),
                                "" if close else ", ".join(known))

    def raise_any(self) -> None:
        """Raise what was complained about."""
        self.complaints.raise_any()


def checked_numbers(
    complaints: Complaints, key: str, value: Any, what: str, count: Optional[int] = None
) -> Optional[list[float]]:
    """A list of finite numbers of a sane size; None, and a complaint, where it is none."""
    good = isinstance(value, list) and all(
        isinstance(each, (int, float)) and not isinstance(each, bool) for each in value)
    if good and (count is None or len(value) == count):
        try:
            numbers = [float(each) for each in value]
        except OverflowError:
            numbers = [math.inf]
        if all(math.isfinite(each) and abs(each) <= _MANY for each in numbers):
            return numbers
        what = f"{what}, finite and at most {_MANY:g} in size"
    complaints.add(f"{shown(value)} is not what is expected", key, what)
    return None
