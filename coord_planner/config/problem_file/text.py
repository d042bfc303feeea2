# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A problem file as a tree of plain values, with the line of each key where it is known."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import yaml

from ...errors import SettingsError
from ..complaints import Source, one_line, shown

_LARGEST = 32_000_000  # bytes; a saved program of a large fleet has some millions
_EXPECTED = "a problem file: robots:, duration: and the other keys, as YAML or JSON"


class _Loader(yaml.SafeLoader):
    """Resolves plain words as the core schema of YAML 1.2 does: a robot may be called ``y`` or ``on``."""


_Loader.yaml_implicit_resolvers = {}
for _tag, _pattern, _first in (
    ("bool", r"(?:true|True|TRUE|false|False|FALSE)\Z", "tTfF"),
    ("int", r"[-+]?[0-9]+\Z", "-+0123456789"),
    ("float", r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?\Z", "-+0123456789."),
    ("float", r"(?:[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN))\Z", "-+."),
    ("null", r"(?:~|null|Null|NULL|)\Z", ["~", "n", "N", ""]),
):
    _Loader.add_implicit_resolver(f"tag:yaml.org,2002:{_tag}", re.compile(_pattern), list(_first))


def read(path: str | Path) -> tuple[dict[str, Any], Source]:
    """The top level of a file, and where its keys stand.

    Raises:
        SettingsError: it cannot be read, or is neither YAML nor JSON with keys at the top.
    """
    file = str(path)
    text = _text(file)
    lines: dict[str, int] = {}
    tree = _json(text, file) if text.lstrip().startswith("{") else _yaml(text, file, lines)
    if not isinstance(tree, dict):
        raise SettingsError("it has no keys at the top", file=file, allowed=_EXPECTED)
    return tree, Source(file, lines)


def _text(file: str) -> str:
    try:
        if Path(file).is_dir():
            raise SettingsError("it is a folder", file=file, allowed=_EXPECTED)
        with open(file, "rb") as stream:
            raw = stream.read(_LARGEST + 1)
    except FileNotFoundError:
        raise SettingsError("there is no such file", file=one_line(file),
                            allowed="the path of a problem file") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SettingsError(f"it cannot be read ({reason})", file=one_line(file), allowed="a readable file") from None
    if len(raw) > _LARGEST:
        raise SettingsError("it is too long", file=file, allowed=f"at most {_LARGEST} bytes")
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise SettingsError("it is not UTF-8 text", file=f"{file}:{line}", allowed="UTF-8 text") from None
    if not text.strip():
        raise SettingsError("it is empty", file=file, allowed=_EXPECTED)
    return text


def _json(text: str, file: str) -> Any:
    def once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        keys = [key for key, _ in pairs]
        twice = next((key for key in keys if keys.count(key) > 1), None)
        if twice is not None:
            raise SettingsError(f"{shown(twice)} stands there twice", file=file, allowed="each key once")
        return dict(pairs)

    try:
        return json.loads(text, object_pairs_hook=once)
    except json.JSONDecodeError as error:
        try:  # a YAML file may begin with a brace too
            return _yaml(text, file, {})
        except SettingsError:
            raise SettingsError(f"broken JSON, column {error.colno}: {error.msg}", file=f"{file}:{error.lineno}",
                                allowed=_EXPECTED) from None
    except (RecursionError, ValueError) as error:
        reason = "nested too deeply" if isinstance(error, RecursionError) else str(error)
        raise SettingsError(f"broken JSON: {one_line(reason)[:120]}", file=file, allowed=_EXPECTED) from None


def _yaml(text: str, file: str, lines: dict[str, int]) -> Any:
    try:
        for event in yaml.parse(text, Loader=_Loader):
            if isinstance(event, yaml.AliasEvent):
                place = f"{file}:{event.start_mark.line + 1}" if event.start_mark else file
                raise SettingsError(f"the alias *{one_line(str(event.anchor))} is not understood", file=place,
                                    allowed="the value itself")
        node = yaml.compose(text, Loader=_Loader)
        return None if node is None else _value(node, "", file, lines)
    except yaml.YAMLError as error:
        mark = getattr(error, "problem_mark", None) or getattr(error, "context_mark", None)
        problem = one_line(" ".join(str(getattr(error, "problem", None) or error).split())[:120])
        place = f"{file}:{mark.line + 1}" if mark else file
        column = f", column {mark.column + 1}" if mark else ""
        raise SettingsError(f"broken YAML{column}: {problem}", file=place, allowed=_EXPECTED) from None
    except RecursionError:
        raise SettingsError("it is nested too deeply", file=file, allowed=_EXPECTED) from None


def _value(node: yaml.Node, where: str, file: str, lines: dict[str, int]) -> Any:
    line = node.start_mark.line + 1
    lines.setdefault(where, line)
    if isinstance(node, yaml.MappingNode):
        found: dict[str, Any] = {}
        for key_node, value in node.value:
            key = str(key_node.value)
            place = f"{file}:{key_node.start_mark.line + 1}"
            if not isinstance(key_node, yaml.ScalarNode):
                raise SettingsError("a key is no word", key=where, file=place, allowed="words")
            if key in found:
                raise SettingsError(f"{one_line(key)} stands there twice", key=where, file=place,
                                    allowed="each key once")
            dotted = f"{where}.{key}" if where else key
            lines[dotted] = key_node.start_mark.line + 1
            found[key] = _value(value, dotted, file, lines)
        return found
    if isinstance(node, yaml.SequenceNode):
        return [_value(each, f"{where}[{i}]", file, lines) for i, each in enumerate(node.value)]
    return _scalar(node, where, f"{file}:{line}")


def _scalar(node: yaml.Node, where: str, place: str) -> Any:
    text = str(node.value)
    kind = node.tag.rsplit(":", 1)[-1]
    try:
        if kind == "bool":
            return text.lower() == "true"
        if kind == "int":
            return int(text)
        if kind == "float":
            return float(text.lower().replace(".inf", "inf").replace(".nan", "nan"))
    except ValueError:
        raise SettingsError(f"{shown(text)} is no {kind}", key=one_line(where), file=place,
                            allowed="a plain value") from None
    if kind == "null":
        return None
    if kind == "str":
        return text
    raise SettingsError(f"the tag {shown(kind)} is not understood", key=one_line(where), file=place,
                        allowed="a plain value")
