# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""One storage file of a recording: what it holds, and its messages in order of time.

What a file is, is told by its first bytes, not by its name or by metadata. A file that cannot be
opened as a whole is read as far as it goes, and says so in `damage`.
"""

from __future__ import annotations

import contextlib
import pathlib
import shutil
import sqlite3
import tempfile
import typing
from collections.abc import Callable, Iterator

from servo_nodes.offline.bags_salvage import (
    MCAP_MAGIC,
    CutOff,
    Found,
    found_in_mcap,
    found_in_sqlite,
    zstd_module,
    zstd_prefix,
)

SQLITE_MAGIC = b'SQLite format 3\0'
ZSTD_MAGIC = b'\x28\xb5\x2f\xfd'
MOST_MESSAGE = 160 * 1024 * 1024
_FAR = 2 ** 63 - 1


class Volume:
    """One storage file.

    Attributes
    ----------
    path : pathlib.Path
    counts : mapping of (topic, type) to how many messages of it are readable
    start, end : int, ns, of the first and the last readable message; start > end: none
    damage : str, why not everything is readable, without the file's name; empty when it is
    note : str, what was done to read it; empty for nothing special
    """

    def __init__(self, path: pathlib.Path) -> None:
        self.path = path
        self.counts: dict[tuple[str, str], int] = {}
        self.start, self.end = _FAR, 0
        self.damage = self.note = ''
        self._cut = False
        self._survey()

    @property
    def count(self) -> int:
        """Return how many messages are readable."""
        return sum(self.counts.values())

    def messages(self, topics: frozenset[str] | None = None) -> Iterator[Found]:
        """Yield the messages of `topics` (None: of all) in order of time.

        Raises
        ------
        CutOff
            Where the file cannot be read any further, or at its end when single messages did not
            unpack; what is readable was yielded.
        """
        spoiled, first = 0, ''
        with self._plain() as path:
            for found in self._salvaged(path) if self._cut else self._read(path, topics):
                if topics is not None and found.topic not in topics:
                    continue
                try:
                    whole = found._replace(data=_unpacked(found.data))
                except CutOff as error:
                    spoiled, first = spoiled + 1, first or str(error)
                    continue
                yield whole
        if spoiled:
            raise CutOff(f'{spoiled} messages do not unpack; the first: {first}')

    def _survey(self) -> None:
        try:
            with self._plain() as path:
                try:
                    with _opened(path) as reader:
                        self._take_index(reader)
                except CutOff as error:
                    self.damage = self.damage or str(error)
                    self._cut = _head(path).startswith((MCAP_MAGIC, SQLITE_MAGIC))
                    for found in self._salvaged(path) if self._cut else ():
                        self._take(found)
        except CutOff as error:
            self.damage = self.damage or str(error)

    def _take_index(self, reader: typing.Any) -> None:
        for connection in reader.connections:
            kind = str(connection.msgtype)
            if str(connection.ext.serialization_format) not in ('cdr', ''):
                kind += f' ({connection.ext.serialization_format})'
            key = str(connection.topic), kind
            self.counts[key] = self.counts.get(key, 0) + int(connection.msgcount)
        if reader.metadata.message_count:
            self.start = int(reader.metadata.start_time)
            self.end = int(reader.metadata.end_time) - 1

    def _take(self, found: Found) -> None:
        key = found.topic, found.kind
        self.counts[key] = self.counts.get(key, 0) + 1
        self.start, self.end = min(self.start, found.time), max(self.end, found.time)

    def _read(self, path: pathlib.Path, topics: frozenset[str] | None) -> Iterator[Found]:
        with _opened(path) as reader:
            wanted = [connection for connection in reader.connections
                      if topics is None or connection.topic in topics]
            if not wanted:
                return
            try:
                for connection, time, data in reader.messages(wanted):
                    yield Found(int(time), str(connection.topic), str(connection.msgtype), data)
            except Exception as error:
                raise CutOff(_words(error)) from error

    def _salvaged(self, path: pathlib.Path) -> Iterator[Found]:
        scan: Callable[[pathlib.Path], Iterator[Found]] = (
            found_in_mcap if _head(path).startswith(MCAP_MAGIC) else found_in_sqlite)
        try:
            yield from scan(path)
        except CutOff as error:
            if str(error) not in self.damage:
                self.damage = f'{self.damage}; {error}' if self.damage else str(error)

    @contextlib.contextmanager
    def _plain(self) -> Iterator[pathlib.Path]:
        """Give the path of the file as it was before compression, with its log worked in."""
        head = _head(self.path)
        wal = self.path.with_name(self.path.name + '-wal')
        if head.startswith(ZSTD_MAGIC):
            with tempfile.TemporaryDirectory() as folder:
                inner = pathlib.Path(folder, self.path.stem)
                self._unpack(inner)
                yield inner
        elif head.startswith(SQLITE_MAGIC) and wal.is_file() and wal.stat().st_size:
            with tempfile.TemporaryDirectory() as folder:
                inner = pathlib.Path(folder, self.path.name)
                self._work_in(wal, inner)
                yield inner
        else:
            yield self.path

    def _unpack(self, inner: pathlib.Path) -> None:
        zstd = zstd_module()
        try:
            with zstd.open(self.path, 'rb') as packed, inner.open('wb') as file:
                shutil.copyfileobj(packed, file, 1 << 20)
        except (EOFError, OSError, zstd.ZstdError) as error:
            self.damage = self.damage or f'it does not unpack to its end: {_words(error)}'

    def _work_in(self, wal: pathlib.Path, inner: pathlib.Path) -> None:
        """Copy the file and its write-ahead log, and let sqlite join the two there."""
        try:
            shutil.copyfile(self.path, inner)
            shutil.copyfile(wal, inner.with_name(inner.name + '-wal'))
            with contextlib.closing(sqlite3.connect(inner)) as connection:
                connection.execute('PRAGMA wal_checkpoint(TRUNCATE)')
            self.note = f'the write-ahead log beside {self.path.name} was read, too'
        except (OSError, sqlite3.Error) as error:
            self.note = f'the write-ahead log beside {self.path.name} was left out: {error}'


@contextlib.contextmanager
def _opened(path: pathlib.Path) -> Iterator[typing.Any]:
    """Give a reader of the file's index and messages; CutOff when there is none."""
    from rosbags.rosbag2.storage_mcap import McapReader
    from rosbags.rosbag2.storage_sqlite3 import Sqlite3Reader
    head = _head(path)
    if not head:
        raise CutOff('expected a recording, got an empty file')
    if head.startswith(MCAP_MAGIC):
        reader: typing.Any = McapReader(path)
    elif head.startswith(SQLITE_MAGIC):
        reader = Sqlite3Reader(path)
    else:
        raise CutOff('expected a sqlite3 or MCAP recording, got something else')
    try:
        reader.open()
    except Exception as error:
        raise CutOff(_words(error).replace(f' {path}', '')) from error
    try:
        yield reader
    finally:
        reader.close()


def _unpacked(data: bytes) -> bytes:
    """Return a message as it was before compression; CDR never begins like zstd."""
    return zstd_prefix(data, MOST_MESSAGE) if data[:4] == ZSTD_MAGIC else data


def _head(path: pathlib.Path) -> bytes:
    try:
        with path.open('rb') as file:
            return file.read(16)
    except OSError as error:
        raise CutOff(f'expected a readable file, got {error.strerror}') from error


def _words(error: Exception) -> str:
    text = ' '.join(str(error).split()) or type(error).__name__
    return text[:200].rstrip('.')
