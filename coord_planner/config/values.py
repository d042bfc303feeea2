# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The kinds of values a ROS parameter can have, and how a raw value becomes one."""

from __future__ import annotations

import array
import types
import typing
from typing import Any, Union

from ..core.parameter import Description
from ..errors import SettingsError
from .complaints import shown

# The words for a kind in error messages; the keys are the kinds.
KINDS = {
    "bool": "true or false",
    "int": "a whole number",
    "float": "a number",
    "str": "text",
    "floats": "a flat list of numbers",
    "strs": "a list of words",
}
_HINTS = {bool: "bool", int: "int", float: "float", str: "str", tuple[str, ...]: "strs", tuple[float, ...]: "floats"}


def kind_of(hint: Any) -> str:
    """The kind of a settings field by its type hint; ``Optional[X]`` is the kind of X.

    Raises:
        TypeError: a hint that no ROS parameter can hold (an error of the programmer).
    """
    if typing.get_origin(hint) in (Union, types.UnionType):
        hint = next(part for part in typing.get_args(hint) if part is not type(None))
    try:
        return _HINTS[hint]
    except KeyError:
        raise TypeError(f"no ROS parameter holds a {hint}") from None


def convert(value: Any, kind: str, key: str, description: Description) -> Any:
    """A raw value as its kind: bool, int, float, str or a tuple of str or float.

    A whole number is taken for a real one. Raises SettingsError for the wrong type or a value out of range.
    """
    if kind in ("floats", "strs"):
        if not isinstance(value, (list, tuple, array.array)):
            raise _wrong(value, kind, key, description)
        converted: Any = tuple(_single(each, kind[:-1], kind, key, description) for each in value)
    else:
        converted = _single(value, kind, kind, key, description)
    description.check(key, converted)
    return converted


def _single(value: Any, kind: str, wanted: str, key: str, description: Description) -> Any:
    if kind == "bool":
        fits = isinstance(value, bool)
    elif kind == "int":
        fits = isinstance(value, int) and not isinstance(value, bool)
    elif kind == "float":
        fits = isinstance(value, (int, float)) and not isinstance(value, bool)
    else:
        fits = isinstance(value, str)
    if not fits:
        raise _wrong(value, wanted, key, description)
    if kind in ("int", "float"):
        try:
            as_float = float(value)
        except OverflowError:
            raise SettingsError(f"{shown(value)} is out of range", key=key,
                                allowed=allowed(kind, description)) from None
        return as_float if kind == "float" else value
    return value


def _wrong(value: Any, kind: str, key: str, description: Description) -> SettingsError:
    if value is None:
        return SettingsError("no value stands behind the key", key=key, allowed=allowed(kind, description))
    quote = "; put it in quotes" if kind == "str" and isinstance(value, (bool, int, float)) else ""
    return SettingsError(f"{shown(value)} is not {KINDS[kind]}{quote}", key=key, allowed=allowed(kind, description))


def allowed(kind: str, description: Description) -> str:
    """What may stand behind a key, in words: its kind, range and unit."""
    if description.choices:
        return description.allowed()
    ranged = any(end is not None for end in (description.minimum, description.maximum, description.above))
    unit = f" (in {description.unit})" if description.unit else ""
    return KINDS[kind] + unit + (f" {description.allowed()}" if ranged else "")
