# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A parameter file with other values, its comments and its order kept."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from typing import Any

import yaml

from .file import _SECTION, _compose, _is_ours, _sections

_DEEPER = 2  # columns


def rewritten(text: str, changes: Mapping[str, Any]) -> str:
    """The text of a sound parameter file with some values changed; keys that are not in it yet are put in.

    Args:
        changes: by dotted key; bool, int, float, str, or a list of numbers or words.
    """
    text = text.removeprefix("\ufeff")
    if not text.endswith("\n"):
        text += "\n"
    for key, value in changes.items():
        text = _changed(text, key, value)
    return text


def as_yaml(value: Any) -> str:
    """A value as it stands behind a key; ROS takes a number for real only when it shows it."""
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(map(as_yaml, value)) + "]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return repr(value) if "." in repr(value) or "e" not in repr(value) else repr(value).replace("e", ".0e")
    return str(value) if isinstance(value, int) else json.dumps(value, ensure_ascii=False)


def _changed(text: str, key: str, value: Any) -> str:
    # Of a section for every node and one for the planner alone the latter wins: it is changed first.
    found = list(_sections(_compose(text, ""), "", "").items())
    ours = sorted((name for name, _ in found if _is_ours(name)), key=lambda name: "planner" not in name.split("/"))
    sections = dict(found)
    for name in ours:
        section = sections[name]
        assert isinstance(section, yaml.MappingNode)
        for path, node in _leaves(section, ""):
            if path == key:
                return _replaced(text, node, as_yaml(value))
    section = sections[ours[0]]
    assert isinstance(section, yaml.MappingNode), _SECTION
    return _inserted(text, section, key, as_yaml(value))


def _leaves(node: yaml.MappingNode, prefix: str) -> Iterator[tuple[str, yaml.Node]]:
    for key_node, value in node.value:
        path = f"{prefix}.{key_node.value}" if prefix else str(key_node.value)
        if isinstance(value, yaml.MappingNode):
            yield from _leaves(value, path)
        else:
            yield path, value


def _replaced(text: str, node: yaml.Node, value: str) -> str:
    start, end = node.start_mark.index, _end(node)
    rest = text[end:]
    blanks = len(rest) - len(rest.lstrip(" "))
    if rest[blanks : blanks + 1] == "#":  # the comment stays in its column where there is room
        rest = " " * max(2, blanks + (end - start) - len(value)) + rest[blanks:]
    return text[:start] + value + rest


def _end(node: yaml.Node) -> int:
    """Index behind the last character of a value; a block's own mark lies behind the comments that follow it."""
    if isinstance(node, (yaml.SequenceNode, yaml.MappingNode)) and not node.flow_style and node.value:
        last = node.value[-1]
        return _end(last[1] if isinstance(last, tuple) else last)
    return int(node.end_mark.index)


def _inserted(text: str, section: yaml.MappingNode, key: str, value: str) -> str:
    """Put in a key, into the deepest group that is there already."""
    group, words = section, key.split(".")
    while len(words) > 1:
        inside = next((node for name, node in group.value if str(name.value) == words[0]
                       and isinstance(node, yaml.MappingNode)), None)
        if inside is None:
            break
        group, words = inside, words[1:]
    if group.flow_style:
        at = group.start_mark.index + 1
        opening = "".join(f"{word}: {{" for word in words[:-1])
        more = f"{opening}{words[-1]}: {value}{'}' * (len(words) - 1)}" + (", " if group.value else "")
        return text[:at] + more + text[at:]
    column = group.value[0][0].start_mark.column
    lines = [f"{' ' * (column + _DEEPER * n)}{word}:" for n, word in enumerate(words)]
    at = text.index("\n", _end(group)) + 1
    return text[:at] + "\n".join(lines) + f" {value}\n" + text[at:]
