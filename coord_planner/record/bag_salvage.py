# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Reading what is left of a recording whose index is missing or wrong, record by record."""

from __future__ import annotations

import sqlite3
import struct
from collections.abc import Iterator
from contextlib import closing
from io import BytesIO
from pathlib import Path
from typing import Any, Optional

import lz4.frame
import zstandard
from mcap.exceptions import McapError
from mcap.opcode import Opcode
from mcap.records import Channel, Chunk, Message, Schema
from mcap.stream_reader import CRCValidationError, StreamReader, breakup_chunk

from .bag_source import Message as Read
from .bag_source import Topic

_LARGEST = 1 << 30  # bytes of a record; a larger length is itself damage
_ZSTD = b"\x28\xb5\x2f\xfd"  # how a compressed frame begins (RFC 8878, section 3.1.1)
# What the decompressors and the parser throw at bytes that are not what they seem.
_BROKEN = (McapError, CRCValidationError, struct.error, RuntimeError, ValueError, EOFError, MemoryError, OverflowError)


def has_journal(file: Path) -> bool:
    """Whether a database has rows that were not yet moved into its file: rosbags would not see them."""
    journal = file.with_name(file.name + "-wal")
    return journal.exists() and journal.stat().st_size > 0


class _Unopened:
    """What is opened only while it is read."""

    def close(self) -> None:
        """Nothing is open."""


class Nothing(_Unopened):
    """A file without content."""

    def __init__(self) -> None:
        self.topics: list[Topic] = []
        self.losses: list[str] = []

    def messages(self, start: Optional[int], stop: Optional[int]) -> Iterator[Read]:
        """No messages."""
        return iter(())


class McapRecords(_Unopened):
    """An MCAP file from its beginning, as far as it goes. Chunks that are broken are left out.

    ``topics`` and ``losses`` are known after reading.
    """

    def __init__(self, file: Path) -> None:
        self._file = file
        self.topics: list[Topic] = []
        self.losses: list[str] = []

    def messages(self, start: Optional[int], stop: Optional[int]) -> Iterator[Read]:
        self.topics.clear()
        self.losses, broken = [], 0
        channels = _Channels(self.topics)
        for record in self._records():
            try:
                inside: list[Any] = breakup_chunk(record, validate_crc=True) if isinstance(record, Chunk) else [record]
            except _BROKEN:
                broken += 1
                continue
            for item in inside:
                if not isinstance(item, Message):
                    channels.learn(item)
                elif item.channel_id in channels.topics and _inside(item.log_time, start, stop):
                    yield channels.topics[item.channel_id], item.log_time, item.data
        if broken:
            self.losses.append(f"{self._file.name}: {broken} chunks of messages are broken and were left out")

    def _records(self) -> Iterator[Any]:
        size = self._file.stat().st_size
        with self._file.open("rb") as stream:
            records = StreamReader(stream, emit_chunks=True, record_size_limit=_LARGEST).records
            while True:
                before = stream.tell()
                try:
                    record = next(records)
                except StopIteration:
                    return
                except _BROKEN:
                    self.losses.append(f"{self._file.name} breaks off within its last {size - before} of {size} bytes")
                    break
                yield record
            stream.seek(before)
            yield from _of_broken_chunk(stream.read())


def _of_broken_chunk(rest: bytes) -> Iterator[Any]:
    """The records of a chunk that breaks off, as far as they go; ``rest`` begins with it.

    A chunk: opcode, length, first and last time, size, checksum (each 8 bytes but the first, 1, and the last, 4), name
    of the compression, length, records (MCAP specification).
    """
    head = struct.Struct("<BQQQQI")
    try:
        opcode, *_ = head.unpack_from(rest)
        (length,) = struct.unpack_from("<I", rest, head.size)
        compression = rest[head.size + 4:head.size + 4 + length].decode()
        if opcode != Opcode.CHUNK:
            return
        data = _decompressed(rest[head.size + 4 + length + 8:], compression)
        yield from StreamReader(BytesIO(data), skip_magic=True, record_size_limit=_LARGEST).records
    except _BROKEN:
        return


def _decompressed(data: bytes, compression: str) -> bytes:
    """As much as can be had of compressed bytes that break off."""
    if compression == "zstd":
        return zstandard.ZstdDecompressor().decompressobj().decompress(data)
    if compression == "lz4":
        return bytes(lz4.frame.LZ4FrameDecompressor().decompress(data))
    return data


def unpacked(data: bytes) -> bytes:
    """A message that was compressed by itself, unpacked; any other as it is, also one that cannot be unpacked.

    Only metadata.yaml tells of such compression, and it may be lost. A message in CDR begins with a zero byte, so it
    cannot be taken for one.
    """
    if data[:4] != _ZSTD:
        return data
    try:
        return zstandard.ZstdDecompressor().decompressobj().decompress(data)
    except zstandard.ZstdError:
        return data


class _Channels:
    """Topics by channel, as they are met."""

    def __init__(self, found: list[Topic]) -> None:
        self._schemas: dict[int, Schema] = {}
        self._found = found
        self.topics: dict[int, Topic] = {}

    def learn(self, record: Any) -> None:
        if isinstance(record, Schema):
            self._schemas[record.id] = record
        elif isinstance(record, Channel) and record.id not in self.topics:
            schema = self._schemas.get(record.schema_id)
            written = schema is not None and schema.encoding == "ros2msg"
            definition = schema.data.decode("utf-8", "replace") if schema is not None and written else ""
            topic = Topic(record.topic, schema.name if schema is not None else "unknown", definition)
            self.topics[record.id] = topic
            self._found.append(topic)


class SqliteRows(_Unopened):
    """A sqlite3 file row by row, as far as it goes."""

    def __init__(self, file: Path) -> None:
        self._file = file
        self.losses: list[str] = []
        self.topics: list[Topic] = []
        self._by_number: dict[int, Topic] = {}
        self._learn()

    def _connect(self) -> sqlite3.Connection:
        base = sqlite3.connect(f"{self._file.absolute().as_uri()}?mode=ro", uri=True)
        base.execute("PRAGMA writable_schema=ON")  # else sqlite refuses a file that is shorter than its head says
        return base

    def _learn(self) -> None:
        try:
            with closing(self._connect()) as base:
                definitions = _definitions(base)
                for number, name, kind in base.execute("SELECT id, name, type FROM topics"):
                    self._by_number[number] = Topic(name, kind, definitions.get(kind, ""))
        except sqlite3.Error as error:
            self.losses.append(f"{self._file.name}: its topics cannot be read ({error})")
        self.topics = list(self._by_number.values())

    def messages(self, start: Optional[int], stop: Optional[int]) -> Iterator[Read]:
        try:
            with closing(self._connect()) as base:
                for number, nanoseconds, data in base.execute("SELECT topic_id, timestamp, data FROM messages"):
                    if number in self._by_number and _inside(nanoseconds, start, stop):
                        yield self._by_number[number], nanoseconds, data
        except sqlite3.Error as error:
            self.losses.append(f"{self._file.name} breaks off ({error}): later messages are lost")


def _definitions(base: sqlite3.Connection) -> dict[str, str]:
    try:
        rows = base.execute("SELECT topic_type, encoded_message_definition FROM message_definitions "
                            "WHERE encoding = 'ros2msg'")
        return dict(rows)
    except sqlite3.Error:  # recorders before ROS 2 Iron kept no definitions
        return {}


def _inside(nanoseconds: int, start: Optional[int], stop: Optional[int]) -> bool:
    return (start is None or nanoseconds >= start) and (stop is None or nanoseconds < stop)
