# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parameters that describe themselves: unit, range and meaning stand beside the default.

A settings group is a frozen attrs class whose fields are made by :func:`parameter`. The
configuration reader, the ROS node and the documentation all read the same descriptions.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, Optional

import attrs

from ..errors import SettingsError


@attrs.frozen
class Description:
    """What a reader of a parameter file must know about one key.

    Attributes:
        text: one sentence, plain English.
        unit: SI unit, or "" for a plain number, a word or a list.
        minimum, maximum: closed range of allowed numbers.
        above: open lower end (value must be larger).
        choices: the allowed words, when the value is one of a few.
        live: True when it may be changed while the planner runs.
    """

    text: str
    unit: str = ""
    minimum: Optional[float] = None
    maximum: Optional[float] = None
    above: Optional[float] = None
    choices: tuple[str, ...] = ()
    live: bool = False

    def allowed(self) -> str:
        """The allowed values in words, for error messages and documentation."""
        if self.choices:
            return "one of " + ", ".join(self.choices)
        ends = []
        if self.above is not None:
            ends.append(f"above {self.above:g}")
        if self.minimum is not None:
            ends.append(f"at least {self.minimum:g}")
        if self.maximum is not None:
            ends.append(f"at most {self.maximum:g}")
        return " and ".join(ends) or "any value of its type"

    def check(self, key: str, value: Any) -> None:
        """Raise SettingsError when a value of the right type is out of range."""
        if self.choices and value not in self.choices:
            raise SettingsError(f"{value!r} is not known", key=key, allowed=self.allowed())
        numbers = value if isinstance(value, tuple) else (value,)
        for number in numbers:
            if isinstance(number, (int, float)) and not isinstance(number, bool):
                self._check_number(key, float(number))

    def _check_number(self, key: str, number: float) -> None:
        out = (
            not math.isfinite(number)
            or (self.minimum is not None and number < self.minimum)
            or (self.maximum is not None and number > self.maximum)
            or (self.above is not None and number <= self.above)
        )
        if out:
            unit = f" {self.unit}" if self.unit else ""
            raise SettingsError(f"{number:g}{unit} is out of range", key=key, allowed=self.allowed())


def parameter(
    default: Any,
    text: str,
    unit: str = "",
    *,
    minimum: Optional[float] = None,
    maximum: Optional[float] = None,
    above: Optional[float] = None,
    choices: tuple[str, ...] = (),
    live: bool = False,
) -> Any:
    """A field of a settings group; ``attrs.NOTHING`` as default makes it a key that must be given."""
    description = Description(text, unit, minimum, maximum, above, choices, live)
    return attrs.field(default=default, validator=_validator(description), metadata={"description": description})


def _validator(description: Description) -> Callable[[Any, Any, Any], None]:
    def validate(_instance: Any, attribute: Any, value: Any) -> None:
        if value is not None:
            description.check(attribute.name, value)

    return validate


def describe(group: type) -> dict[str, Description]:
    """Descriptions of a settings group, by field name, in the order of declaration."""
    return {
        field.name: field.metadata["description"]
        for field in attrs.fields(group)
        if "description" in field.metadata
    }
