# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A YAML document as plain values, with the line of each key."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import yaml

from ...errors import SettingsError

_LARGEST = 4_000_000  # bytes


class _Loader(yaml.SafeLoader):
    """Takes ``1e-3`` for a number, as parameter files do."""


_Loader.yaml_implicit_resolvers = {
    first: [pair for pair in pairs if pair[0] not in ("tag:yaml.org,2002:float", "tag:yaml.org,2002:timestamp")]
    for first, pairs in yaml.SafeLoader.yaml_implicit_resolvers.items()
}
_Loader.add_implicit_resolver(
    "tag:yaml.org,2002:float",
    re.compile(r"[-+]?(?:[0-9]+\.[0-9]*|\.[0-9]+|[0-9]+(?=[eE]))(?:[eE][-+]?[0-9]+)?\Z|[-+]?\.(?:inf|nan)\Z"),
    list("-+0123456789."),
)


def read_document(path: str | Path, what: str) -> tuple[dict[str, Any], dict[str, int]]:
    """The mapping that a file holds, and the line of each key by its dotted way.

    Args:
        what: the kind of file, for messages, e.g. ``a sweep file (YAML)``.

    Raises:
        SettingsError: it cannot be read, is no YAML, no mapping, or holds a key twice.
    """
    file = str(path)
    loader = _Loader(_text(path, what))
    try:
        node = loader.get_single_node()
        lines: dict[str, int] = {}
        if not isinstance(node, yaml.MappingNode):
            raise SettingsError("it holds no list of `key: value`", file=file, allowed=what)
        _walk(node, "", lines, file)
        return dict(loader.construct_document(node)), lines
    except yaml.YAMLError as error:
        mark = getattr(error, "problem_mark", None)
        problem = " ".join(str(getattr(error, "problem", None) or error).split())[:120]
        raise SettingsError(f"broken YAML: {problem}", file=f"{file}:{mark.line + 1}" if mark else file,
                            allowed="YAML: `key: value`, two spaces deeper for what belongs to a key") from None
    except (RecursionError, ValueError) as error:
        raise SettingsError(f"it cannot be read ({str(error)[:80]})", file=file, allowed=what) from None
    finally:
        loader.dispose()


def _text(path: str | Path, what: str) -> str:
    file = Path(path)
    try:
        if file.is_dir():
            raise SettingsError("it is a folder", file=str(path), allowed=what)
        with open(file, "rb") as stream:
            raw = stream.read(_LARGEST + 1)
        text = raw.decode("utf-8-sig")
    except FileNotFoundError:
        raise SettingsError("there is no such file", file=str(path), allowed=f"the path of {what}") from None
    except UnicodeDecodeError:
        raise SettingsError("it is not UTF-8 text", file=str(path), allowed=what) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise SettingsError(f"it cannot be read ({reason})", file=str(path), allowed="a readable file") from None
    if len(raw) > _LARGEST or not text.strip():
        raise SettingsError("it is too long" if text.strip() else "it is empty", file=str(path), allowed=what)
    return text


def _walk(node: yaml.Node, prefix: str, lines: dict[str, int], file: str) -> None:
    if isinstance(node, yaml.SequenceNode):
        for n, item in enumerate(node.value):
            lines[f"{prefix}[{n}]"] = item.start_mark.line + 1
            _walk(item, f"{prefix}[{n}]", lines, file)
    if not isinstance(node, yaml.MappingNode):
        return
    for key_node, value in node.value:
        key = f"{prefix}.{key_node.value}" if prefix else str(key_node.value)
        line = key_node.start_mark.line + 1
        if key in lines:
            raise SettingsError(f"it stands there twice, first on line {lines[key]}", key=key, file=f"{file}:{line}",
                                allowed="each key once")
        lines[key] = line
        _walk(value, key, lines, file)
