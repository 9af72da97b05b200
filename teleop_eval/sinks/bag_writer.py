# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Write a rosbag2 folder that opens at every moment, also after the process was killed."""

from __future__ import annotations

import errno
import os
import time
from collections.abc import Iterable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from teleop_eval.core.errors import OutputError
from teleop_eval.sinks import mcap_records as rec
from teleop_eval.sinks.bag_metadata import (
    BagTopic,
    BagTotals,
    flow,
    metadata_document,
    metadata_text,
    qos_text,
)
from teleop_eval.sinks.mcap_file import LiveMcapFile
from teleop_eval.sinks.message_definitions import standard_definition

CHUNK_BYTES = 4 << 20
MAX_QUEUED_BYTES = 64 << 20
# What a queued message costs besides its data.
_ROW_BYTES = 64
_LIBRARY = 'teleop_eval'
_DISK_FULL = {errno.ENOSPC, errno.EDQUOT}


@dataclass
class _Channel:
    channel_id: int
    topic: BagTopic
    sequence: int = 0


class BagWriter:
    """
    Recorder of serialized messages in one folder: MCAP file and metadata.yaml version 9.

    Messages wait in memory for at most `commit_interval_s`, as long as `write` or
    `commit_if_due` is called often enough; no thread is used. A commit makes them part of a
    file that any reader can open from then on, whatever becomes of this process. After a
    failed commit the messages stay queued up to 64 MiB and further ones are counted in
    `dropped`.

    Parameters
    ----------
    folder
        Folder to create; it may exist if it is empty.
    custom_data
        Texts to store in metadata.yaml.
    commit_interval_s
        Longest time between a message's arrival and its commit, in seconds.

    Raises
    ------
    OutputError
        If the folder holds something or cannot be written.

    """

    def __init__(
        self,
        folder: Path | str,
        *,
        custom_data: Mapping[str, str] | None = None,
        commit_interval_s: float = 0.25,
    ) -> None:
        self.folder = Path(folder)
        self.dropped = 0
        self.note = ''
        self._custom_data = dict(custom_data or {})
        self._interval = commit_interval_s
        self._channels: dict[str, _Channel] = {}
        self._schema_ids: dict[tuple[str, str], int] = {}
        self._rows: list[tuple[_Channel, int, bytes]] = []
        self._queued = 0
        self._announce = b''
        self._closed = False
        self._metadata_is_stale = True
        self.path = self.folder / f'{self.folder.resolve().name}_0.mcap'
        self._prepare_folder()
        try:
            self._file = LiveMcapFile(self.path, library=_LIBRARY)
            self._write_metadata()
        except OSError as error:
            raise self._cannot_write(error) from error
        self._last_commit = time.monotonic()

    @property
    def message_count(self) -> int:
        """Number of messages committed."""
        return self._file.counts.messages

    @property
    def queued(self) -> int:
        """Number of messages that wait for the next commit."""
        return len(self._rows)

    def add_topic(
        self,
        name: str,
        type_name: str,
        *,
        qos: Sequence[Mapping[str, object]] = (),
        type_hash: str = '',
        definition: str = '',
    ) -> None:
        """
        Announce a topic before its first message.

        Parameters
        ----------
        name
            Topic name, such as `/joint_states`.
        type_name
            Message type, such as `sensor_msgs/msg/JointState`.
        qos
            Offered QoS profiles with rosbag2's keys and policy names; missing keys get the
            default.
        type_hash
            RIHS01 hash; looked up for standard types.
        definition
            Definition text (ros2msg, with dependencies); looked up for standard types.

        Raises
        ------
        OutputError
            If the topic was announced with another type.

        """
        known = self._channels.get(name)
        if known is not None:
            if known.topic.type_name == type_name:
                return
            raise OutputError(
                f'Topic {name} is already recorded as {known.topic.type_name} and cannot be '
                f'recorded as {type_name} in {self.folder}; use another topic name.'
            )
        if not definition:
            standard = standard_definition(type_name)
            if standard is not None:
                definition, type_hash = standard.text, type_hash or standard.type_hash
        topic = BagTopic(name, type_name, type_hash, qos_text(qos))
        channel = _Channel(len(self._channels) + 1, topic)
        schema_id = self._schema_ids.setdefault(
            (type_name, definition), len(self._schema_ids) + 1
        )
        self._announce += self._file.add_channel(
            channel.channel_id,
            schema_id=schema_id,
            schema=rec.schema(
                schema_id,
                name=type_name,
                encoding='ros2msg' if definition else '',
                definition=definition,
            ),
            channel=rec.channel(
                channel.channel_id,
                schema_id=schema_id,
                topic=name,
                metadata={'offered_qos_profiles': topic.qos, 'topic_type_hash': type_hash},
            ),
        )
        self._channels[name] = channel
        self._metadata_is_stale = True

    def write(self, topic: str, log_ns: int, data: bytes) -> None:
        """
        Queue one serialized message (CDR with its 4-byte header) and commit when that is due.

        Raises
        ------
        OutputError
            If the topic was not announced, or a commit that was due failed.

        """
        self.write_many(((topic, log_ns, data),))

    def write_many(self, rows: Iterable[tuple[str, int, bytes]]) -> None:
        """Queue messages given as (topic, log time in nanoseconds, data), as `write` does."""
        channels, append = self._channels, self._rows.append
        for topic, log_ns, data in rows:
            channel = channels.get(topic)
            if channel is None or self._closed:
                raise self._cannot_queue(topic)
            size = len(data) + _ROW_BYTES
            if self._queued + size > MAX_QUEUED_BYTES:
                self.dropped += 1
            else:
                append((channel, log_ns, data))
                self._queued += size
        self.commit_if_due()

    def commit_if_due(self) -> None:
        """Commit if the interval has passed; call it when no message comes for a while."""
        if time.monotonic() - self._last_commit >= self._interval:
            self.flush()

    def flush(self) -> None:
        """
        Commit what is queued now.

        Raises
        ------
        OutputError
            If the disk refuses; the messages stay queued and earlier commits stay readable.

        """
        self._last_commit = time.monotonic()
        if self._closed or not (self._rows or self._announce or self._metadata_is_stale):
            return
        try:
            while self._rows or self._announce:
                self._append_chunk()
            self._file.publish()
            self._write_metadata()
        except OSError as error:
            raise self._cannot_write(error) from error
        self.note = self._dropped_text()

    def close(self) -> None:
        """
        Commit, then turn the file into a plain MCAP file without reserved space.

        Raises
        ------
        OutputError
            If the disk refuses; earlier commits stay readable.

        """
        if self._closed:
            return
        try:
            self.flush()
            self._file.finish(self._metadata_content())
            self._write_metadata()
        except OSError as error:
            raise self._cannot_write(error) from error
        finally:
            self._closed = True
            self._file.release()

    def __enter__(self) -> BagWriter:
        """Return the writer itself."""
        return self

    def __exit__(self, *_: object) -> None:
        """Close the recording, also after an error in the block."""
        self.close()

    def _prepare_folder(self) -> None:
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            occupied = any(self.folder.iterdir())
        except OSError as error:
            raise self._cannot_write(error) from error
        if occupied:
            raise OutputError(
                f'The folder {self.folder} is not empty; name a new folder for the recording.'
            )

    def _append_chunk(self) -> None:
        """Move rows of at most one chunk's size from the queue into the file."""
        parts = [self._announce] if self._announce else []
        index: dict[int, list[bytes]] = {}
        offset, taken, queued = len(self._announce), 0, 0
        start_ns = end_ns = self._rows[0][1] if self._rows else 0
        for channel, log_ns, data in self._rows:
            if offset >= CHUNK_BYTES:
                break
            channel_id, size = channel.channel_id, len(data)
            entries = index.get(channel_id)
            if entries is None:
                entries = index[channel_id] = []
            parts.append(
                rec.MESSAGE_HEAD.pack(
                    rec.MESSAGE, 22 + size, channel_id, channel.sequence + len(entries),
                    log_ns, log_ns,
                )
            )
            parts.append(data)
            entries.append(rec.INDEX_ENTRY.pack(log_ns, offset))
            offset += rec.MESSAGE_HEAD.size + size
            if log_ns < start_ns:
                start_ns = log_ns
            elif log_ns > end_ns:
                end_ns = log_ns
            taken += 1
            queued += size + _ROW_BYTES
        before = self._file.counts.chunks
        try:
            self._file.append(b''.join(parts), index=index, start_ns=start_ns, end_ns=end_ns)
        finally:
            # A failure after the chunk became visible must not write it twice.
            if self._file.counts.chunks > before:
                self._forget(taken, queued, {key: len(value) for key, value in index.items()})

    def _forget(self, taken: int, queued: int, counts: dict[int, int]) -> None:
        del self._rows[:taken]
        self._queued -= queued
        self._announce = b''
        self._metadata_is_stale = True
        for channel in self._channels.values():
            channel.sequence += counts.get(channel.channel_id, 0)

    def _metadata_content(self) -> str:
        counts = self._file.counts
        return metadata_text(
            file_name=self.path.name,
            totals=BagTotals(counts.start_ns, counts.end_ns - counts.start_ns, counts.messages),
            topics=[(c.topic, counts.per_channel[c.channel_id]) for c in self._channels.values()],
            custom_data=self._custom_data,
        )

    def _write_metadata(self) -> None:
        """Replace metadata.yaml in one step, so that there is always a whole one."""
        final = self.folder / 'metadata.yaml'
        new = self.folder / 'metadata.yaml.new'
        try:
            new.write_text(metadata_document(self._metadata_content()), encoding='utf-8')
            os.replace(new, final)
        except OSError:
            with suppress(OSError):
                new.unlink(missing_ok=True)
            raise
        self._metadata_is_stale = False

    def _dropped_text(self) -> str:
        if not self.dropped:
            return ''
        return (
            f'{self.dropped} messages are missing in {self.folder}, because the disk refused '
            'them for too long.'
        )

    def _cannot_write(self, error: OSError) -> OutputError:
        reason = error.strerror or str(error)
        waiting = len(self._rows)
        advice = 'free some space' if error.errno in _DISK_FULL else 'check the folder'
        text = (
            f'Cannot write the recording {self.folder}: {reason}; {waiting} messages wait, '
            f'{self.dropped} are lost, what was written before is kept; {advice}.'
        )
        self.note = text
        return OutputError(text)

    def _cannot_queue(self, topic: str) -> OutputError:
        if self._closed:
            return OutputError(f'The recording {self.folder} is closed; {topic} came too late.')
        names = flow(sorted(self._channels))
        return OutputError(
            f'Topic {topic} was not announced in the recording {self.folder}, which has '
            f'{names}; add it first.'
        )
