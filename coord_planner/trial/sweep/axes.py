# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Values that a parameter goes through in a sweep."""

from __future__ import annotations

import json
import math
from typing import Any, Union

import attrs
import numpy as np

_DIGITS = 6  # significant ones: what comes out is written into parameter files, for people to read


@attrs.frozen
class Listed:
    """Values one by one, each with the word that tables and pages call it by; lists are values too (edges)."""

    key: str
    values: tuple[Any, ...]
    labels: tuple[str, ...]

    def grid(self) -> tuple[Any, ...]:
        """Every value."""
        return self.values

    def at(self, part: float) -> Any:
        """The value at a part of the way, 0 <= part < 1: each has the same share of it."""
        return self.values[min(int(part * len(self.values)), len(self.values) - 1)]

    def label(self, value: Any) -> Any:
        """The value as a table shows it: numbers as they are, the rest by name."""
        at = self.values.index(value)
        return value if isinstance(value, (bool, int, float)) else self.labels[at]

    @property
    def ordered(self) -> bool:
        """Whether larger and smaller mean something."""
        return all(isinstance(value, (int, float)) and not isinstance(value, bool) for value in self.values)


@attrs.frozen
class Ranged:
    """Numbers between two, evenly spread on a straight or a logarithmic scale.

    Attributes:
        low, high: both ends. count: of values on a grid. logarithmic: the scale. whole: whole numbers only.
    """

    key: str
    low: float
    high: float
    count: int
    logarithmic: bool
    whole: bool

    ordered = True

    def grid(self) -> tuple[Any, ...]:
        """``count`` values, both ends among them; whole numbers that fall together count once."""
        spread = np.geomspace if self.logarithmic else np.linspace
        return tuple(dict.fromkeys(self._rounded(float(value)) for value in spread(self.low, self.high, self.count)))

    def at(self, part: float) -> Any:
        """The value at a part of the way, 0 <= part < 1."""
        if self.whole and not self.logarithmic:
            return int(self.low) + int(part * (self.high - self.low + 1))
        if self.logarithmic:
            return self._rounded(math.exp((1 - part) * math.log(self.low) + part * math.log(self.high)))
        return self._rounded((1 - part) * self.low + part * self.high)

    def label(self, value: Any) -> Any:
        """The value as a table shows it."""
        return value

    def _rounded(self, value: float) -> Any:
        return round(value) if self.whole else float(f"{value:.{_DIGITS}g}")


Axis = Union[Listed, Ranged]


def in_words(value: Any) -> str:
    """A value as a word for tables: lists joined, text as it is."""
    if isinstance(value, str):
        return value
    if isinstance(value, (list, tuple)):
        return ", ".join(map(in_words, value)) or "none"
    return json.dumps(value)
