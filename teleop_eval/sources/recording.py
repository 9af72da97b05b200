# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Read recordings: rosbag2 folders of any version, and single MCAP or SQLite files.

Messages come in log-time order, as serialized bytes, with the memory of a few chunks. What
cannot be read is left out and named in `Recording.notes`; only a recording of which nothing
can be read is an error.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Iterable, Iterator
from contextlib import suppress
from dataclasses import replace
from operator import itemgetter
from pathlib import Path

import zstandard

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources.bag_metadata import BagMetadata, read_bag_metadata
from teleop_eval.sources.recording_files import Scratch, data_files, open_file
from teleop_eval.sources.stored_file import Loss, Message, StoredFile, TopicInfo, add_note

__all__ = ['Message', 'Recording', 'TopicInfo', 'open_recording', 'several_types']

Progress = Callable[[float], None]


def open_recording(path: Path | str, *, progress: Progress | None = None) -> Recording:
    """
    Open a recording.

    Parameters
    ----------
    path
        A rosbag2 folder, or one `.mcap` or `.db3` file.
    progress
        Called with the fraction done, 0 to 1, while files are decompressed and messages read.

    Returns
    -------
    Recording
        Topics, span and messages; a context manager.

    Raises
    ------
    RecordingError
        If nothing in it can be read: one sentence says why.

    """
    path = Path(path)
    notes: list[str] = []
    scratch = Scratch(progress)
    try:
        if path.is_dir():
            metadata = read_bag_metadata(path)
            notes += metadata.notes
            files = data_files(path, metadata, notes)
        elif path.exists():
            files = [path]
            metadata = read_bag_metadata(path.parent)
            if path.name not in metadata.files:
                metadata = BagMetadata()
        else:
            raise RecordingError(f'There is no recording {path}; check the path.')
        _check_compression(path, metadata)
        stored = _open_all(files, metadata, scratch=scratch, notes=notes)
    except OSError as error:
        scratch.close()
        raise RecordingError(f'{path} cannot be read: {error.strerror or error}.') from error
    except BaseException:
        scratch.close()
        raise
    return Recording(path, stored, metadata, scratch=scratch, notes=notes, progress=progress)


def _check_compression(path: Path, metadata: BagMetadata) -> None:
    if metadata.compression_mode and metadata.compression_format != 'zstd':
        raise RecordingError(
            f'{path} is compressed with {metadata.compression_format or "an unnamed method"!r}, '
            'and only zstd is known; decompress it with `ros2 bag convert` first.'
        )


def _open_all(
    files: list[Path], metadata: BagMetadata, *, scratch: Scratch, notes: list[str]
) -> list[StoredFile]:
    """Open the files; one that cannot be read is left out if others can."""
    stored, errors = [], []
    for path in files:
        try:
            stored.append(open_file(path, metadata, scratch))
        except RecordingError as error:
            errors.append(error)
    if not stored:
        raise errors[0]
    notes += [Loss(f'One file is left out: {error}') for error in errors]
    return stored


class Recording:
    """
    An open recording; make it with `open_recording`.

    Attributes
    ----------
    topics
        What is known of each topic, by name.
    start_ns, end_ns
        First and last log time in nanoseconds, None if there is no message.
    message_count
        Number of messages in the files.

    """

    def __init__(
        self,
        path: Path,
        files: list[StoredFile],
        metadata: BagMetadata,
        *,
        scratch: Scratch,
        notes: list[str],
        progress: Progress | None,
    ) -> None:
        self.path = path
        self._files = files
        self._metadata = metadata
        self._scratch = scratch
        self._notes = notes
        self._progress = progress
        self.topics = _all_topics(files, metadata)
        self._notes += [
            f'{several_types(self, topic)}; only the first is read.'
            for topic in self.topics.values() if topic.others
        ]
        self.start_ns = min((f.start_ns for f in files if f.start_ns is not None), default=None)
        self.end_ns = max((f.end_ns for f in files if f.end_ns is not None), default=None)
        self.message_count = sum(f.message_count or 0 for f in files)

    @property
    def notes(self) -> list[str]:
        """What was left out or is unusual, one sentence each; grows while messages are read."""
        notes = list(self._notes)
        for stored in self._files:
            for note in stored.notes:
                add_note(notes, note)
        return notes

    @property
    def losses(self) -> list[str]:
        """Those of the notes that tell of lost messages."""
        return [note for note in self.notes if isinstance(note, Loss)]

    def messages(self, topics: Iterable[str] | None = None) -> Iterator[Message]:
        """
        Iterate over messages in log-time order, equal times in the order of the file.

        Where the clock was put back within a file, the order of that file is kept.

        Parameters
        ----------
        topics
            Topics wanted; one that the recording does not have gives nothing. None: all
            whose messages are CDR.

        Returns
        -------
        iterator of Message
            (log_ns, topic, data), data being CDR with its 4-byte header.

        Raises
        ------
        RecordingError
            If a topic asked for is not CDR.

        """
        wanted = self._wanted(topics)
        merged = self._merged(wanted)
        return self._decompressed(merged) if self._by_message else merged

    def close(self) -> None:
        """Remove what was decompressed."""
        self._scratch.close()

    def __enter__(self) -> Recording:
        """Return the recording itself."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close the recording."""
        self.close()

    @property
    def _by_message(self) -> bool:
        return self._metadata.compression_mode == 'message'

    def _wanted(self, topics: Iterable[str] | None) -> frozenset[str]:
        foreign = {name: t.encoding for name, t in self.topics.items() if t.encoding != 'cdr'}
        if topics is None:
            for name, encoding in foreign.items():
                add_note(
                    self._notes, f'Topic {name} has the encoding {encoding!r} and is left out.'
                )
            return frozenset(self.topics) - foreign.keys()
        wanted = frozenset(topics)
        for name in sorted(wanted & foreign.keys()):
            raise RecordingError(
                f'Topic {name} of {self.path} has the encoding {foreign[name]!r}; only cdr can '
                'be decoded, choose another topic.'
            )
        return wanted

    def _merged(self, wanted: frozenset[str]) -> Iterator[Message]:
        """Chain files that follow each other in time, merge those that overlap."""
        for group in _overlapping(self._files):
            if len(group) == 1:
                yield from self._flat(group[0], wanted)
            else:
                parts = [self._flat(stored, wanted) for stored in group]
                yield from heapq.merge(*parts, key=itemgetter(0))

    def _flat(self, stored: StoredFile, wanted: frozenset[str]) -> Iterator[Message]:
        # Another file may hold a topic with another type, which the topic's decoder cannot read.
        wanted = frozenset(
            name for name in wanted & stored.topics.keys()
            if stored.topics[name].same_kind(self.topics[name])
        )
        start = self.start_ns or 0
        span = max((self.end_ns or 0) - start, 1)
        for batch in stored.batches(wanted):
            yield from batch
            if self._progress:
                self._progress(min(max((batch[-1].log_ns - start) / span, 0.0), 1.0))

    def _decompressed(self, messages: Iterator[Message]) -> Iterator[Message]:
        decompressor = zstandard.ZstdDecompressor()
        for log_ns, topic, data in messages:
            with suppress(zstandard.ZstdError):
                plain = decompressor.decompressobj().decompress(data)
                yield Message(log_ns, topic, plain)
                continue
            add_note(
                self._notes,
                Loss(f'A message of {topic} at {log_ns} ns cannot be decompressed and is left '
                     'out.'),
            )


def several_types(recording: Recording, topic: TopicInfo) -> str:
    """Return the beginning of a sentence on a topic that occurs with several types."""
    return f'Topic {topic.name} of {recording.path.name} occurs {topic.occurrences()}'


def _overlapping(files: list[StoredFile]) -> list[list[StoredFile]]:
    """Group files whose spans touch, in order of time."""
    filled = [stored for stored in files if stored.start_ns is not None]
    groups: list[list[StoredFile]] = []
    end = None
    for stored in sorted(filled, key=lambda item: item.start_ns or 0):
        if end is None or (stored.start_ns or 0) > end:
            groups.append([])
        groups[-1].append(stored)
        end = max(end or 0, stored.end_ns or 0)
    # Within a group the order of the recording decides between equal times.
    return [sorted(group, key=files.index) for group in groups]


def _all_topics(files: list[StoredFile], metadata: BagMetadata) -> dict[str, TopicInfo]:
    topics: dict[str, TopicInfo] = {}
    for stored in files:
        for name, topic in stored.topics.items():
            known = topics.get(name)
            if known is None:
                topics[name] = topic
            elif not known.same_kind(topic):
                topics[name] = known.with_other(topic)
            else:
                known = known.with_other(topic)
                count = (known.message_count or 0) + (topic.message_count or 0)
                fuller = known if known.definition or not topic.definition else topic
                topics[name] = replace(fuller, message_count=count, others=known.others)
    for name, topic in topics.items():
        stated = metadata.topics.get(name)
        if stated is not None and not topic.qos:
            topics[name] = replace(topic, qos=stated.qos)
    return topics
