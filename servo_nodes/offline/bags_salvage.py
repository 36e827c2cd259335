# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""What can still be read of a storage file whose index or end is lost, in the order of writing.

A recorder that dies leaves an MCAP file without its index, or a sqlite3 file shorter than its
header says. Both hold whole messages up to the cut. Layouts: the MCAP specification, version 0
(https://mcap.dev/spec, from memory); "Database File Format" of sqlite.org (from memory).
"""

from __future__ import annotations

import pathlib
import sqlite3
import struct
import typing
from collections.abc import Iterator

MCAP_MAGIC = b'\x89MCAP0\r\n'
_SCHEMA, _CHANNEL, _MESSAGE, _CHUNK, _DATA_END = 0x03, 0x04, 0x05, 0x06, 0x0F
_MOST_CHUNK = 256 * 1024 * 1024


class Found(typing.NamedTuple):
    """One stored message: `time` in ns, when it was recorded; `data` as stored."""

    time: int
    topic: str
    kind: str
    data: bytes


class CutOff(ValueError):
    """The file ends, or makes no sense any more, after what was yielded."""


def found_in_sqlite(path: pathlib.Path) -> Iterator[Found]:
    """Yield the messages of a sqlite3 recording up to the first unreadable page.

    Raises
    ------
    CutOff
        At the first page that is missing or makes no sense.
    """
    try:
        connection = sqlite3.connect(f'{path.resolve().as_uri()}?immutable=1', uri=True)
    except sqlite3.Error as error:
        raise CutOff(str(error)) from error
    try:
        # Only with this does sqlite open a file that is shorter than its header says.
        connection.execute('PRAGMA writable_schema = ON')
        topics = {row[0]: (str(row[1]), str(row[2])) for row in
                  connection.execute('SELECT id, name, type FROM topics')}
        for topic, time, data in connection.execute(
                'SELECT topic_id, timestamp, data FROM messages NOT INDEXED'):
            if topic in topics and isinstance(time, int) and isinstance(data, bytes):
                yield Found(time, *topics[topic], data)
    except sqlite3.Error as error:
        raise CutOff(str(error)) from error
    finally:
        connection.close()


def found_in_mcap(path: pathlib.Path) -> Iterator[Found]:
    """Yield the messages of an MCAP file record by record; its index is not asked.

    Raises
    ------
    CutOff
        Where a record is incomplete or makes no sense.
    """
    scan = _McapScan()
    with path.open('rb') as file:
        size = path.stat().st_size
        if file.read(len(MCAP_MAGIC)) != MCAP_MAGIC:
            raise CutOff('the file does not begin as MCAP does')
        while True:
            at = file.tell()
            head = file.read(9)
            if len(head) < 9:
                raise CutOff(f'the file ends at byte {at} without a last record')
            code, length = struct.unpack('<BQ', head)
            if code == _DATA_END:
                return
            if code == 0 or min(length, size - at) > _MOST_CHUNK:
                raise CutOff(f'no record begins at byte {at}')
            body = file.read(length)
            yield from scan.messages(code, body, whole=len(body) == length)
            if len(body) < length:
                raise CutOff(f'the record at byte {at} ends after {len(body)} of {length} bytes')


class _McapScan:
    """Remembers schemas and channels while records go by."""

    def __init__(self) -> None:
        self._schemas: dict[int, str] = {0: ''}
        self._channels: dict[int, tuple[str, str]] = {}

    def messages(self, code: int, body: bytes, *, whole: bool) -> Iterator[Found]:
        try:
            if code == _CHUNK:
                yield from sorted(self._chunked(body, whole), key=lambda found: found.time)
            elif whole:
                found = self._taken(code, body)
                if found is not None:
                    yield found
        except (struct.error, UnicodeDecodeError, IndexError) as error:
            raise CutOff(f'a record makes no sense: {error}') from error

    def _taken(self, code: int, body: bytes) -> Found | None:
        if code == _SCHEMA:
            self._schemas[struct.unpack_from('<H', body)[0]] = _text(body, 2)[0]
        elif code == _CHANNEL:
            channel, schema = struct.unpack_from('<HH', body)
            self._channels[channel] = (_text(body, 4)[0], self._schemas.get(schema, ''))
        elif code == _MESSAGE:
            channel, _, time, _ = struct.unpack_from('<HIQQ', body)
            if channel in self._channels:
                return Found(time, *self._channels[channel], body[22:])
        return None

    def _chunked(self, body: bytes, whole: bool) -> Iterator[Found]:
        name, at = _text(body, 28)
        records = _unpacked(body[at + 8:], name, whole)
        at = 0
        while at + 9 <= len(records):
            code, length = struct.unpack_from('<BQ', records, at)
            at += 9
            if at + length > len(records):
                return
            found = self._taken(code, records[at:at + length])
            at += length
            if found is not None:
                yield found


def _unpacked(data: bytes, compression: str, whole: bool) -> bytes:
    """Return what a chunk, or the beginning of one, holds."""
    if not compression:
        return data
    if compression == 'zstd':
        return zstd_prefix(data, _MOST_CHUNK)
    if not whole:
        raise CutOff(f'a chunk packed with {compression} is incomplete')
    import lz4.frame  # type: ignore[import-untyped]
    if compression != 'lz4':
        raise CutOff(f'expected chunks packed with zstd or lz4, got {compression!r}')
    try:
        return bytes(lz4.frame.decompress(data))
    except RuntimeError as error:
        raise CutOff(f'a chunk does not unpack: {error}') from error


def zstd_prefix(data: bytes, most: int) -> bytes:
    """Return what zstd data, perhaps cut off, unpack to; at most `most` bytes."""
    zstd = zstd_module()
    try:
        return bytes(zstd.ZstdDecompressor().decompress(data, most))
    except zstd.ZstdError as error:
        raise CutOff(f'zstd data do not unpack: {error}') from error


def zstd_module() -> typing.Any:
    """Return Python's zstd, which came with 3.14, or the same for earlier ones."""
    try:
        from compression import zstd  # type: ignore[import-not-found, unused-ignore]
    except ImportError:
        from backports import zstd
    return zstd


def _text(body: bytes, at: int) -> tuple[str, int]:
    """Return the string at an offset, and the offset after it."""
    length = struct.unpack_from('<I', body, at)[0]
    end = at + 4 + length
    if end > len(body):
        raise IndexError(f'a string of {length} bytes at {at} of {len(body)}')
    return body[at + 4:end].decode(), end
