# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Recordings (rosbag2) read as a stream, whatever shape they come in; no ROS is needed.

The storage files are the truth; `metadata.yaml` only says which they are, and is contradicted in
`notes` where it is wrong. Every file is looked through once, so that the topics, the counts and
the order of the files are known before the first message; then the messages stream.
"""

from __future__ import annotations

import heapq
import pathlib
import re
import typing
from collections.abc import Iterable, Iterator, Mapping

import yaml

from servo_nodes.offline.bags_files import Volume
from servo_nodes.offline.bags_salvage import CutOff

SUFFIXES = ('.mcap', '.db3', '.zstd')
MOST_METADATA = 32 * 1024 * 1024


class BagError(ValueError):
    """Nothing of a recording can be read; the sentence names the file and the reason."""


class Message(typing.NamedTuple):
    """A recorded message: `time` in ns, when it was recorded; `kind` with `/msg/`; `data` CDR."""

    time: int
    topic: str
    kind: str
    data: bytes


class Bag:
    """A recording: a folder of storage files, with or without metadata, or one storage file.

    Attributes
    ----------
    path : pathlib.Path
    volumes : list of Volume, the storage files that hold something, by their first message
    damages : list of str, a sentence for every file that is not whole
    notes : list of str, what is odd and does not hurt

    Raises
    ------
    BagError
        When there is nothing to read at all.
    """

    def __init__(self, path: str | pathlib.Path) -> None:
        _require_rosbags()
        self.path = pathlib.Path(path)
        self.damages: list[str] = []
        self.notes: list[str] = []
        announced, files = self._files()
        volumes = [self._surveyed(file) for file in files]
        self.volumes = sorted((volume for volume in volumes if volume.count),
                              key=lambda volume: (volume.start, volume.path.name))
        self.counts: dict[str, int] = {}
        self.kinds: dict[str, str] = {}
        for volume in volumes:
            for (topic, kind), count in volume.counts.items():
                self.counts[topic] = self.counts.get(topic, 0) + count
                if self.kinds.setdefault(topic, full_kind(kind)) != full_kind(kind):
                    self.notes.append(f'{topic}: expected one type, got {self.kinds[topic]} and '
                                      f'{full_kind(kind)}; the first is used')
        if announced is not None and announced != self.count and not self.damages:
            self.notes.append(f'{self.path / "metadata.yaml"}: it announces {announced} messages, '
                              f'the files hold {self.count}')
        if not self.count:
            raise BagError(self.damages[0] if self.damages else (
                f'{self.path}: expected messages, got '
                f'{"none, though metadata.yaml announces some" if announced else "none"}'))

    @property
    def count(self) -> int:
        """Return how many messages are readable."""
        return sum(self.counts.values())

    @property
    def start(self) -> int:
        """Return the time of the first message, ns."""
        return min(volume.start for volume in self.volumes)

    @property
    def end(self) -> int:
        """Return the time of the last message, ns."""
        return max(volume.end for volume in self.volumes)

    def messages(self, topics: Iterable[str] | None = None) -> Iterator[Message]:
        """Yield the messages of `topics` (None: of all), in order of time over all files.

        A file that turns out to be damaged ends there, and adds its sentence to `damages`.
        """
        wanted = None if topics is None else frozenset(topics)
        opened = [self._stream(index, volume, wanted)
                  for index, volume in enumerate(self.volumes)]
        # A file is opened when its first message is due, so that few are open at a time.
        heap: list[tuple[int, int, int, Message | None]] = [
            (volume.start, index, -1, None) for index, volume in enumerate(self.volumes)]
        heapq.heapify(heap)
        while heap:
            _, index, number, message = heap[0]
            if message is not None:
                yield message
            following = next(opened[index], None)
            if following is None:
                heapq.heappop(heap)
            else:
                heapq.heapreplace(heap, (following.time, index, number + 1, following))

    def _stream(self, index: int, volume: Volume,
                topics: frozenset[str] | None) -> Iterator[Message]:
        try:
            for found in volume.messages(topics):
                kind = full_kind(found.kind)
                if self.kinds.get(found.topic) == kind:
                    yield Message(found.time, found.topic, kind, found.data)
        except CutOff as error:
            self._damaged(volume.path, str(error))

    def _damaged(self, path: pathlib.Path, reason: str) -> None:
        sentence = f'{path}: {reason}'
        if sentence not in self.damages:
            self.damages.append(sentence)

    def _surveyed(self, path: pathlib.Path) -> Volume:
        volume = Volume(path)
        if volume.damage:
            self._damaged(path, f'{volume.damage}; {volume.count} messages are readable')
        if volume.note:
            self.notes.append(volume.note)
        return volume

    def _files(self) -> tuple[int | None, list[pathlib.Path]]:
        """Return how many messages metadata announce (None: not known), and the files."""
        if self.path.is_file():
            return None, [self._checked_file()]
        if not self.path.is_dir():
            raise BagError(f'{self.path}: expected a recording, got no such file or folder')
        present = sorted((path for path in self.path.iterdir()
                          if path.is_file() and path.suffix in SUFFIXES), key=_natural)
        path = self.path / 'metadata.yaml'
        try:
            page = _metadata(path)
            named = [self.path / pathlib.PurePosixPath(str(name)).name
                     for name in page['relative_file_paths']]
            announced: int | None = int(page['message_count'])
        except FileNotFoundError:
            self.notes.append(f'{path}: not there; every storage file in the folder is read')
            named, announced = present, None
        except (ValueError, KeyError, TypeError, OSError) as error:
            words = ' '.join(str(error).split())
            self.notes.append(f'{path}: expected the metadata of a recording, got {words:.200}; '
                              'every storage file in the folder is read')
            named, announced = present, None
        return announced, self._existing(named, present)

    def _existing(self, named: list[pathlib.Path],
                  present: list[pathlib.Path]) -> list[pathlib.Path]:
        missing = [path for path in named if path not in present]
        others = [path for path in present if path not in named]
        if missing and others and len(missing) == len(named):
            self.notes.append(f'{self.path / "metadata.yaml"}: it names {missing[0].name}, which '
                              f'is not there; {", ".join(path.name for path in others)} is read')
            return others
        for path in missing:
            self._damaged(path, 'expected this storage file, named in metadata.yaml, got none')
        if others:
            self.notes.append(f'{self.path}: metadata.yaml does not name '
                              f'{", ".join(path.name for path in others)}, which is left out')
        if not named:
            raise BagError(f'{self.path}: expected storage files (.mcap, .db3, or one of them '
                           'with .zstd), got none')
        return [path for path in named if path in present]

    def _checked_file(self) -> pathlib.Path:
        with self.path.open('rb') as file:
            if file.read(13) == b'#ROSBAG V2.0\n':
                raise BagError(f'{self.path}: expected a rosbag2 recording, got one of ROS 1; '
                               'convert it with rosbags-convert')
        return self.path


def full_kind(kind: str) -> str:
    """Return a type name in its full form, `package/msg/Name`."""
    parts = kind.split('/')
    return f'{parts[0]}/msg/{parts[1]}' if len(parts) == 2 else kind


def _require_rosbags() -> None:
    try:
        import rosbags.rosbag2.storage_mcap  # noqa: F401
    except ImportError as error:
        raise BagError('recordings: expected the package rosbags (0.11 or later), got none; '
                       "install it with pip install 'servo_nodes[bags]'") from error


def _metadata(path: pathlib.Path) -> Mapping[str, typing.Any]:
    if path.stat().st_size > MOST_METADATA:
        raise ValueError(f'more than {MOST_METADATA} bytes')
    try:
        page = yaml.load(path.read_text('utf-8'), getattr(yaml, 'CSafeLoader', yaml.SafeLoader))
    except yaml.YAMLError as error:
        raise ValueError(f'no YAML: {error}') from error
    if not isinstance(page, dict) or not isinstance(
            page.get('rosbag2_bagfile_information'), dict):
        raise ValueError('no rosbag2_bagfile_information')
    found: Mapping[str, typing.Any] = page['rosbag2_bagfile_information']
    return found


def _natural(path: pathlib.Path) -> list[tuple[int, str]]:
    """Return a key that sorts part 10 after part 9."""
    return [(int(part), '') if part.isdigit() else (-1, part)
            for part in re.split(r'(\d+)', path.name)]
