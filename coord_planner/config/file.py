# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A ROS 2 parameter file as flat dotted keys, each with the line it stands on.

Values are read as ROS reads them, which is not quite as YAML 1.1 has it: ``1e-3`` is a number, a date is a word,
there are no aliases and no lists in lists.
"""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import yaml

from ..errors import SettingsError
from .complaints import one_line, shown

_LARGEST = 4_000_000  # bytes; a parameter file has some thousands
_BOOLEANS = dict.fromkeys(("y", "yes", "true", "on"), True) | dict.fromkeys(("n", "no", "false", "off"), False)
_SECTION = "ros__parameters"
_EXPECTED = "/**: with ros__parameters: below it and the keys below that"
Flat = dict[str, Any]
Lines = dict[str, int]


class _Loader(yaml.SafeLoader):
    """Resolves plain words as the ROS parser does."""


_Loader.yaml_implicit_resolvers = {}
for _tag, _pattern, _first in (
    ("bool", r"(?:y|Y|yes|Yes|YES|n|N|no|No|NO|true|True|TRUE|false|False|FALSE|on|On|ON|off|Off|OFF)\Z", "yYnNtTfFoO"),
    ("int", r"[-+]?(?:0|[1-9][0-9]*|0x[0-9a-fA-F]+)\Z", "-+0123456789"),
    ("float", r"[-+]?(?:(?:[0-9]+\.[0-9]*|\.[0-9]+|[0-9]+)(?:[eE][-+]?[0-9]+)?|\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN))\Z",
     "-+0123456789."),
    ("null", r"(?:~|null|Null|NULL|)\Z", ["~", "n", "N", ""]),
):
    _Loader.add_implicit_resolver(f"tag:yaml.org,2002:{_tag}", re.compile(_pattern), list(_first))


def read(path: str | Path) -> tuple[Flat, Lines]:
    """Flat keys of the planner's section, and the line of each key.

    Raises:
        SettingsError: the file cannot be read, is no YAML, or holds no section for the planner.
    """
    file = str(path)
    node = _compose(_text(file), file)
    sections = _sections(node, "", file)
    # A section for every node first, so that one for the planner alone wins, as with ROS.
    ours = sorted((name for name in sections if _is_ours(name)), key=lambda name: "planner" in name.split("/"))
    if not ours:
        others = f"only {', '.join(map(one_line, sections))}" if sections else f"no {_SECTION} in it"
        raise SettingsError(f"it holds no parameters for the planner ({others})", file=file, allowed=_EXPECTED)
    flat: Flat = {}
    lines: Lines = {}
    for name in ours:
        _Section(file, name).add_to(flat, lines, sections[name])
    return flat, lines


def _text(file: str) -> str:
    try:
        if Path(file).is_dir():
            raise SettingsError("it is a folder", file=file, allowed="a parameter file (YAML)")
        with open(file, "rb") as stream:
            raw = stream.read(_LARGEST + 1)
    except FileNotFoundError:
        raise SettingsError("there is no such file", file=file, allowed="the path of a parameter file (YAML)") from None
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


def _compose(text: str, file: str) -> yaml.MappingNode:
    try:
        for event in yaml.parse(text, Loader=_Loader):
            if isinstance(event, yaml.AliasEvent):
                raise SettingsError(f"the alias *{one_line(str(event.anchor))} is not understood by ROS",
                                    file=_at(file, event.start_mark), allowed="the value itself")
        node = yaml.compose(text, Loader=_Loader)
    except yaml.YAMLError as error:
        raise _broken(error, file) from None
    except RecursionError:
        raise SettingsError("it is nested too deeply", file=file, allowed=_EXPECTED) from None
    if not isinstance(node, yaml.MappingNode):
        what = "it is empty" if node is None or node.value == "" else "it is no list of `key: value`"
        raise SettingsError(what, file=file, allowed=_EXPECTED)
    return node


def _broken(error: yaml.YAMLError, file: str) -> SettingsError:
    mark = getattr(error, "problem_mark", None) or getattr(error, "context_mark", None)
    problem = getattr(error, "problem", None) or getattr(error, "reason", None) or str(error)
    column = f", column {mark.column + 1}" if mark else ""
    problem = one_line(" ".join(str(problem).split())[:120])
    return SettingsError(f"broken YAML{column}: {problem}", file=_at(file, mark),
                         allowed="YAML: `key: value`, two spaces deeper for what belongs to a key, no tabs")


def _at(file: str, mark: Any) -> str:
    return f"{file}:{mark.line + 1}" if mark else file


def _is_ours(section: str) -> bool:
    last = section.rsplit("/", 1)[-1]
    return section == "/**" or last == "planner"


def _sections(node: yaml.MappingNode, prefix: str, file: str) -> dict[str, yaml.Node]:
    """Every ``ros__parameters`` by the name of its node."""
    found: dict[str, yaml.Node] = {}
    for key, value in _pairs(node, file, prefix):
        if key == _SECTION:
            found[prefix] = value
        elif isinstance(value, yaml.MappingNode):
            found |= _sections(value, f"{prefix}/{key}" if prefix else key, file)
    return found


def _pairs(node: yaml.MappingNode, file: str, where: str) -> list[tuple[str, yaml.Node]]:
    """Keys and values of a mapping; a key that stands twice is an error."""
    lines: Lines = {}
    pairs = []
    for key_node, value in node.value:
        if not isinstance(key_node, yaml.ScalarNode):
            raise SettingsError("a key is no word", key=where, file=_at(file, key_node.start_mark), allowed="words")
        key = str(key_node.value)
        line = key_node.start_mark.line + 1
        if key in lines:
            raise SettingsError(f"{one_line(key)} stands there twice, first on line {lines[key]}", key=where,
                                file=f"{file}:{line}", allowed="each key once")
        lines[key] = line
        pairs.append((key, value))
    return pairs


class _Section:
    """One ``ros__parameters`` section on its way to flat keys."""

    def __init__(self, file: str, name: str) -> None:
        self._file, self._name = file, name
        self._seen: Lines = {}

    def add_to(self, flat: Flat, lines: Lines, node: yaml.Node) -> None:
        if not isinstance(node, yaml.MappingNode) or not node.value:
            raise SettingsError(f"{_SECTION} of {one_line(self._name)} is empty", file=_at(self._file, node.start_mark),
                                allowed="the planner's keys below it")
        values: Flat = {}
        self._walk(node, "", values)
        flat |= values
        lines |= self._seen

    def _walk(self, node: yaml.MappingNode, prefix: str, values: Flat) -> None:
        for key, value in _pairs(node, self._file, prefix):
            dotted = f"{prefix}.{key}" if prefix else key
            if isinstance(value, yaml.MappingNode):
                self._walk(value, dotted, values)
                continue
            line = value.start_mark.line + 1
            if dotted in values:
                raise SettingsError(f"stands there twice, first on line {self._seen[dotted]}", key=one_line(dotted),
                                    file=f"{self._file}:{line}", allowed="each key once")
            self._seen[dotted] = line
            values[dotted] = self._value(value, dotted)

    def _value(self, node: yaml.Node, key: str) -> Any:
        if isinstance(node, yaml.SequenceNode):
            values = [self._entry(each, key) for each in node.value]
            kinds = {type(value) for value in values}
            if len(kinds) > 1:
                raise self._error(node, key, f"{shown(values)} mixes kinds, which ROS refuses",
                                  "entries of one kind: all numbers with a decimal point, or all words")
            return values
        return self._scalar(node, key)

    def _entry(self, node: yaml.Node, key: str) -> Any:
        if not isinstance(node, yaml.ScalarNode):
            raise self._error(node, key, "a list or a group inside a list, which ROS refuses", "a flat list")
        return self._scalar(node, key)

    def _scalar(self, node: yaml.Node, key: str) -> Any:
        text = str(node.value)
        kind = node.tag.rsplit(":", 1)[-1] if node.tag.startswith("tag:yaml.org,2002:") else node.tag
        try:
            if kind == "bool":
                return _BOOLEANS[text.lower()]
            if kind == "int":
                return int(text, 0)
            if kind == "float":
                return float(text.lower().replace(".inf", "inf").replace(".nan", "nan"))
        except (ValueError, KeyError):
            raise self._error(node, key, f"{shown(text)} is no {kind}", "a plain value") from None
        if kind == "null":
            return None
        if kind == "str":
            return text
        raise self._error(node, key, f"the tag {shown(kind)} is not understood by ROS", "a plain value")

    def _error(self, node: yaml.Node, key: str, problem: str, allowed: str) -> SettingsError:
        return SettingsError(problem, key=one_line(key), file=_at(self._file, node.start_mark), allowed=allowed)


def scalar_or_list(text: str) -> Any:
    """A value as it would stand behind a key in a parameter file, for values given on the command line.

    Raises:
        SettingsError: it is no YAML value.
    """
    node = _compose(f"value: {text}" if text.strip() else "value: ''", "")
    values: Flat = {}
    _Section("", "").add_to(values, {}, node)
    if set(values) != {"value"}:
        raise SettingsError(f"{shown(text)} is no single value", allowed="a number, a word or a flat list [a, b]")
    return values["value"]
