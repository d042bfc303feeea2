# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Messages out of recordings: rosbag2 folders and bare files, MCAP or sqlite3, whole or damaged.

What can be read is read; what cannot is counted and said.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Optional

import attrs
import yaml
from rosbags.interfaces import MessageDefinitionFormat
from rosbags.rosbag2 import Reader

from ..errors import SettingsError
from . import bag_salvage
from .bag_source import Message, Source, Topic

_SUFFIXES = {".mcap": "mcap", ".db3": "sqlite3"}
_KINDS = "a rosbag2 folder, or a file that ends in .mcap or .db3"


class DamagedError(Exception):
    """Reading by the index failed on the way: read again without it."""


@attrs.define
class Recording:
    """A recording that was opened; a context manager.

    Attributes:
        path: what was given.
        expected: messages in it by its own account; None when it has none.
        custom: the bag's custom data. distro: the ROS release that wrote it, "" when it does not say.
        losses: what cannot be read, in words.
        start: time of its first message, nanoseconds; known once a window was asked for.
    """

    path: Path
    expected: Optional[int] = None
    custom: dict[str, str] = attrs.field(factory=dict)
    distro: str = ""
    losses: list[str] = attrs.field(factory=list)
    _sources: list[Source] = attrs.field(factory=list)
    start: Optional[int] = None

    def __enter__(self) -> Recording:
        return self

    def __exit__(self, *_: object) -> None:
        for source in self._sources:
            source.close()

    @property
    def topics(self) -> list[Topic]:
        """Topics by name, each once."""
        found: dict[str, Topic] = {}
        for source in self._sources:
            for topic in source.topics:
                found.setdefault(topic.name, topic)
        return [found[name] for name in sorted(found)]

    def messages(self, from_s: Optional[float], to_s: Optional[float]) -> Iterator[Message]:
        """All messages received in a window of seconds since the first one of the recording.

        Raises:
            DamagedError: the index promises what the file does not hold.
        """
        start, stop = (self._nanoseconds(seconds) for seconds in (from_s, to_s))
        for source in self._sources:
            for topic, nanoseconds, data in source.messages(start, stop):
                yield topic, nanoseconds, bag_salvage.unpacked(data)
            self.losses += source.losses

    def _nanoseconds(self, seconds: Optional[float]) -> Optional[int]:
        if seconds is None:
            return None
        if self.start is None:
            first = (next(source.messages(None, None), None) for source in self._sources)
            self.start = min((message[1] for message in first if message), default=0)
        return self.start + round(seconds * 1e9)


def open_recording(path: str | Path, *, trust_index: bool = True) -> Recording:
    """Open a folder or a file. Without trust in the index everything is read record by record.

    Raises:
        SettingsError: there is nothing that could be a recording.
    """
    place = Path(path)
    if not place.exists():
        raise SettingsError("there is no such recording", file=str(path), allowed=_KINDS)
    if place.is_file():
        return _of_files(place, [place], {}, trust_index)
    metadata, complaint = _metadata(place)
    if trust_index and not complaint:
        whole = _Indexed.attempt(place)
        if whole is not None:
            return _told(Recording(place, sources=[whole]), metadata)
    found = sorted(file for file in place.iterdir() if file.suffix in _SUFFIXES)
    if not found:
        raise SettingsError("there is no recording in this folder", file=str(path), allowed=_KINDS)
    recording = _of_files(place, found, metadata, trust_index)
    recording.losses[:0] = [complaint] if complaint else _missing(place, metadata)
    return recording


def _of_files(place: Path, files: list[Path], metadata: Mapping[str, Any], trust_index: bool) -> Recording:
    recording = _told(Recording(place), metadata)
    for file in files:
        recording._sources.append(_of_file(file, recording, trust_index))
    if recording.expected is None:
        written = [topic.written for source in recording._sources for topic in source.topics]
        recording.expected = None if None in written or not written else sum(count or 0 for count in written)
    return recording


def _of_file(file: Path, recording: Recording, trust_index: bool) -> Source:
    if not file.stat().st_size:
        recording.losses.append(f"{file.name} is empty: 0 bytes")
        return bag_salvage.Nothing()
    kind = _SUFFIXES.get(file.suffix)
    if kind is None:
        remedy = "; convert it with rosbags-convert first" if file.suffix == ".bag" else ""
        raise SettingsError(f"this is no recording of ROS 2{remedy}", file=str(file), allowed=_KINDS)
    if trust_index and not bag_salvage.has_journal(file):
        indexed = _Indexed.attempt(file)
        if indexed is not None:
            return indexed
    recording.losses.append(f"{file.name} is not whole: its index is missing or wrong, so it was read record by record")
    return bag_salvage.McapRecords(file) if kind == "mcap" else bag_salvage.SqliteRows(file)


def _metadata(folder: Path) -> tuple[dict[str, Any], str]:
    """What metadata.yaml says, and what is wrong with it ("" for nothing)."""
    file = folder / "metadata.yaml"
    if not file.exists():
        return {}, "metadata.yaml is missing: the recorder was killed, or the folder is not whole"
    try:
        found = yaml.safe_load(file.read_text(encoding="utf-8"))["rosbag2_bagfile_information"]
        found["message_count"] + 0
    except (OSError, UnicodeDecodeError, yaml.YAMLError, KeyError, TypeError):
        return {}, "metadata.yaml cannot be read"
    return dict(found), ""


def _missing(folder: Path, metadata: Mapping[str, Any]) -> list[str]:
    named = [Path(str(name)).name for name in metadata.get("relative_file_paths") or []]
    return [f"{name} is missing, metadata.yaml names it" for name in named if not (folder / name).exists()]


def _told(recording: Recording, metadata: Mapping[str, Any]) -> Recording:
    """With what metadata.yaml tells."""
    if metadata:
        recording.expected = int(metadata["message_count"])
        recording.custom = {str(key): str(value) for key, value in (metadata.get("custom_data") or {}).items()}
        recording.distro = str(metadata.get("ros_distro") or "")
    return recording


class _Indexed:
    """A folder or file that is as its index says, read by rosbags."""

    def __init__(self, reader: Reader) -> None:
        self._reader = reader
        self.losses: list[str] = []
        self._by_connection = {id(connection): _topic(connection) for connection in reader.connections}
        self.topics = list(self._by_connection.values())

    @classmethod
    def attempt(cls, path: Path) -> Optional[_Indexed]:
        """Opened; None when that fails."""
        reader = Reader(path)
        try:
            reader.open()
            return cls(reader)
        except Exception:  # rosbags lets errors of every layer below through: whatever it is, there is a second way
            return None

    def close(self) -> None:
        self._reader.close()

    def messages(self, start: Optional[int], stop: Optional[int]) -> Iterator[Message]:
        by_connection = self._by_connection
        try:
            for connection, nanoseconds, data in self._reader.messages(start=start, stop=stop):
                yield by_connection[id(connection)], nanoseconds, data
        except GeneratorExit:
            raise
        except Exception as error:  # as above
            raise DamagedError(str(error)) from error


def _topic(connection: Any) -> Topic:
    definition = connection.msgdef.data if connection.msgdef.format is MessageDefinitionFormat.MSG else ""
    return Topic(connection.topic, connection.msgtype, definition, connection.msgcount)
