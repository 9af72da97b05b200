# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
An MCAP file that is whole after every single write.

While it grows, the file looks like this (P is a padding record that readers skip)::

    header | chunk index | ... | P free space | DataEnd schemas channels statistics
           | chunk indexes ... | P free space | footer magic

A chunk is first written behind the prefix of the free space's padding record, where no reader
looks; then its own prefix, 9 bytes inside one memory page, replaces that of the padding. The
kernel copies such bytes in one go, so that a process killed at any moment leaves the file
either without the chunk or with it. When the space runs out, a new tail is prepared further
out and becomes valid by one write of the 8 bytes in the footer.

This protects against the death of the process. After a loss of power the pages may have
reached the disk in any order; only `finish` waits for the disk.
"""

from __future__ import annotations

import os
import zlib
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from teleop_eval.sinks import mcap_records as rec

_PAGE = 4096
_MIN_SPACE, _MAX_SPACE = 1 << 20, 64 << 20
_INDEX_SPACE = 64 << 10


def fit_in_page(position: int, size: int) -> int:
    """Return the first place from `position` on where `size` bytes lie inside one page."""
    rest = _PAGE - position % _PAGE
    return position if rest >= size else position + rest


@dataclass(frozen=True)
class _Tail:
    """Where the parts of the present tail lie, in bytes from the start of the file."""

    start: int
    summary: int
    statistics: int
    footer: int

    @property
    def end(self) -> int:
        return self.footer + rec.FOOTER_SIZE + len(rec.MAGIC)


class LiveMcapFile:
    """
    Write chunks so that every moment's file opens.

    Raises `OSError` when the disk refuses; the file is then as it was before the call, and
    the same call may be repeated.
    """

    def __init__(self, path: Path, *, library: str) -> None:
        self.counts = rec.Counts()
        self._schemas: dict[int, bytes] = {}
        self._channels: dict[int, bytes] = {}
        self._chunk_indexes = bytearray()
        self._largest_index = 128
        self._unindexed: list[bytes] = []
        self._tail_is_stale = False
        self._free = 0
        self._index_free = 0
        # A temporary name, so that a file under its final name is always whole.
        new = path.with_name(path.name + '.new')
        self._fd = os.open(new, os.O_RDWR | os.O_CREAT | os.O_EXCL, 0o644)
        try:
            head = rec.MAGIC + rec.header(library)
            self._free = fit_in_page(len(head) + rec.PREFIX_SIZE, rec.PREFIX_SIZE)
            self._put(head + _filler(self._free - len(head)), 0)
            self._tail = self._write_tail(self._free + rec.PREFIX_SIZE + _INDEX_SPACE)
            self._put(rec.footer(self._tail.summary), self._tail.footer)
            self._put_free_space(self._free, self._tail.start)
            self._index_free = self._index_place(self._tail)
            os.replace(new, path)
        except OSError:
            os.close(self._fd)
            with suppress(OSError):
                os.unlink(new)
            raise

    def add_channel(
        self, channel_id: int, *, schema: bytes, schema_id: int, channel: bytes
    ) -> bytes:
        """Announce a channel and return the records its first chunk has to begin with."""
        new_schema = schema_id not in self._schemas
        self._schemas.setdefault(schema_id, schema)
        self._channels[channel_id] = channel
        self.counts.per_channel.setdefault(channel_id, 0)
        self._tail_is_stale = True
        return (schema if new_schema else b'') + channel

    def append(
        self, records: bytes, *, index: dict[int, list[bytes]], start_ns: int, end_ns: int
    ) -> None:
        """
        Append one chunk of packed records with the index entries of each channel.

        When this returns, or raises after the chunk became visible, the chunk is in the file;
        `counts.chunks` tells which.
        """
        chunk = rec.chunk(records, start_ns=start_ns, end_ns=end_ns, crc=zlib.crc32(records))
        parts, offsets = [chunk], {}
        size = len(chunk)
        for channel_id, entries in index.items():
            offsets[channel_id] = self._free + size
            parts.append(rec.message_index(channel_id, entries))
            size += len(parts[-1])
        self._make_room(size)
        self._insert(b''.join(parts), self._free, self._tail.start)
        summary_entry = rec.chunk_index(
            start_ns=start_ns,
            end_ns=end_ns,
            offset=self._free,
            length=len(chunk),
            index_offsets=offsets,
            index_length=size - len(chunk),
            size=len(records),
        )
        self._free = _after(self._free + size)
        self._unindexed.append(summary_entry)
        self._largest_index = max(self._largest_index, len(summary_entry))
        self._count(index, start_ns=start_ns, end_ns=end_ns)
        self.publish()

    def publish(self) -> None:
        """Bring the summary up to the chunks written: nothing to do after an error-free call."""
        if self._tail_is_stale:
            self._grow(0)
        while self._unindexed:
            entry = self._unindexed[0]
            if self._index_free + len(entry) + 4 * rec.PREFIX_SIZE > self._tail.footer:
                self._grow(0)
                continue
            self._insert(entry, self._index_free, self._tail.footer)
            self._index_free = _after(self._index_free + len(entry))
            self._chunk_indexes += self._unindexed.pop(0)
        self._put(self._statistics(), self._tail.statistics)

    def finish(self, metadata: str) -> None:
        """
        Turn the file into a plain one: compact, with checksum, without padding at its end.

        `metadata` is stored the way rosbag2 does. The file stays open after an error.
        """
        end = self._closing(metadata, self._free)
        if self._free + len(end) > self._tail.start:
            self._grow(len(end))
        self._put(end[rec.PREFIX_SIZE :], self._free + rec.PREFIX_SIZE)
        self._put(end[: rec.PREFIX_SIZE], self._free)
        os.ftruncate(self._fd, self._free + len(end))
        os.fsync(self._fd)
        self.release()

    def release(self) -> None:
        """Let go of the file as it is."""
        if self._fd >= 0:
            os.close(self._fd)
            self._fd = -1

    def _count(self, index: dict[int, list[bytes]], *, start_ns: int, end_ns: int) -> None:
        counts = self.counts
        if index:
            counts.start_ns = min(counts.start_ns, start_ns) if counts.messages else start_ns
            counts.end_ns = max(counts.end_ns, end_ns)
        counts.chunks += 1
        for channel_id, entries in index.items():
            counts.messages += len(entries)
            counts.per_channel[channel_id] += len(entries)

    def _put(self, data: bytes | bytearray, position: int) -> None:
        # Views are given back even if an error's traceback lives on: it would pin the data.
        done = 0
        with memoryview(data) as whole:
            while done < len(whole):
                with whole[done:] as part:
                    done += os.pwrite(self._fd, part, position + done)

    def _put_free_space(self, position: int, end: int) -> None:
        self._put(rec.prefix(rec.PADDING, end - position - rec.PREFIX_SIZE), position)

    def _insert(self, data: bytes, position: int, end: int) -> None:
        """Replace the start of the padding at `position` by records, shortening the padding."""
        after = _after(position + len(data))
        rest = rec.prefix(rec.PADDING, end - after - rec.PREFIX_SIZE)
        filler = _filler(after - position - len(data))
        self._put(data[rec.PREFIX_SIZE :] + filler + rest, position + rec.PREFIX_SIZE)
        self._put(data[: rec.PREFIX_SIZE], position)

    def _make_room(self, size: int) -> None:
        if self._free + size + 4 * rec.PREFIX_SIZE > self._tail.start:
            self._grow(size)

    def _grow(self, size: int) -> None:
        """Prepare a tail further out, with room for `size` bytes, and let it take over."""
        old = self._tail
        room = max(size + 4 * rec.PREFIX_SIZE, min(max(self._free // 8, _MIN_SPACE), _MAX_SPACE))
        start = max(self._free + rec.PREFIX_SIZE + room, old.end)
        tail = self._plan_tail(start)
        try:
            # The file grows at this write, so it has to end in a valid footer at once.
            self._put(rec.footer(old.summary), tail.footer)
            self._write_tail(start)
            self._put_free_space(self._free, start)
            self._put(tail.summary.to_bytes(8, 'little'), tail.footer + rec.PREFIX_SIZE)
        except OSError:
            with suppress(OSError):
                self._put_free_space(self._free, old.start)
                os.ftruncate(self._fd, old.end)
            raise
        self._tail = tail
        self._index_free = self._index_place(tail)
        self._chunk_indexes += b''.join(self._unindexed)
        self._unindexed = []
        self._tail_is_stale = False

    def _announcements(self) -> bytes:
        return b''.join([*self._schemas.values(), *self._channels.values()])

    def _statistics(self, metadata: int = 0) -> bytes:
        return rec.statistics(
            self.counts,
            schemas=len(self._schemas),
            channels=len(self._channels),
            metadata=metadata,
        )

    def _plan_tail(self, start: int) -> _Tail:
        summary = start + len(rec.data_end())
        statistics = summary + len(self._announcements())
        used = statistics + len(self._statistics()) + self._entries_size()
        # Room for an eighth more chunks than there are, as there is for data.
        per_chunk = self._largest_index + 2 * rec.PREFIX_SIZE
        chunks = max(self.counts.chunks // 8, _INDEX_SPACE // 128)
        footer = fit_in_page(
            used + 4 * rec.PREFIX_SIZE + per_chunk * chunks, rec.FOOTER_SIZE + len(rec.MAGIC)
        )
        return _Tail(start, summary, statistics, footer)

    def _index_place(self, tail: _Tail) -> int:
        return _after(tail.statistics + len(self._statistics()) + self._entries_size())

    def _entries_size(self) -> int:
        return len(self._chunk_indexes) + sum(map(len, self._unindexed))

    def _write_tail(self, start: int) -> _Tail:
        tail = self._plan_tail(start)
        place = self._index_place(tail)
        head = rec.data_end() + self._announcements() + self._statistics()
        self._put(head, start)
        self._put(self._chunk_indexes, start + len(head))
        end = b''.join(self._unindexed)
        position = start + len(head) + len(self._chunk_indexes)
        end += _filler(place - position - len(end))
        end += rec.prefix(rec.PADDING, tail.footer - place - rec.PREFIX_SIZE)
        self._put(end, position)
        return tail

    def _closing(self, metadata: str, position: int) -> bytes:
        stored = rec.metadata('rosbag2', {'serialized_metadata': metadata})
        data = stored + rec.data_end()
        groups = {
            rec.SCHEMA: b''.join(self._schemas.values()),
            rec.CHANNEL: b''.join(self._channels.values()),
            rec.STATISTICS: self._statistics(metadata=1),
            rec.METADATA_INDEX: rec.metadata_index('rosbag2', offset=position, length=len(stored)),
            rec.CHUNK_INDEX: bytes(self._chunk_indexes) + b''.join(self._unindexed),
        }
        summary_start = place = position + len(data)
        summary, offsets = b'', b''
        for opcode, records in groups.items():
            if records:
                offsets += rec.summary_offset(opcode, start=place, length=len(records))
                summary += records
                place += len(records)
        checked = summary + offsets + rec.footer_prefix(summary_start, place)
        return data + checked + zlib.crc32(checked).to_bytes(4, 'little') + rec.MAGIC


def _after(position: int) -> int:
    """Return where the next padding may begin: its prefix must not straddle two pages."""
    if _PAGE - position % _PAGE >= rec.PREFIX_SIZE:
        return position
    return position + rec.PREFIX_SIZE


def _filler(size: int) -> bytes:
    """Pack `size` bytes of padding: none, or at least the prefix of a record."""
    if not size:
        return b''
    return rec.prefix(rec.PADDING, size - rec.PREFIX_SIZE) + bytes(size - rec.PREFIX_SIZE)
