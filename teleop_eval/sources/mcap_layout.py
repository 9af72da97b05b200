# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Where the messages of an MCAP file lie: from its summary, or found by a scan."""

from __future__ import annotations

import os
import struct
from dataclasses import dataclass, field
from io import BytesIO
from pathlib import Path
from typing import BinaryIO

from mcap.data_stream import ReadDataStream
from mcap.exceptions import McapError
from mcap.records import Channel, Footer, Schema, Statistics

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources import mcap_chunk as mc
from teleop_eval.sources.stored_file import Loss

MAGIC = b'\x89MCAP0\r\n'
_FOOTER_SIZE = 29
_RUN = 1 << 20
_MESSAGE_HEAD = struct.Struct('<H4xQ')
_CHUNK_INDEX = struct.Struct('<QQQQI')
_INDEX_OFFSET = struct.Struct('<HQ')
_INDEX_LENGTH = struct.Struct('<QI')
_LENGTH = struct.Struct('<Q')


@dataclass(frozen=True, slots=True)
class Block:
    """
    A stretch of the file that is read at once: records with chunks or messages among them.

    `channels` is empty where it is not known which channels occur; `partial` marks the chunk
    inside which the file ends.
    """

    offset: int
    size: int
    start_ns: int
    end_ns: int
    partial: bool = False
    channels: frozenset[int] = frozenset()


@dataclass
class Layout:
    """Content of the file apart from the messages themselves."""

    schemas: dict[int, Schema] = field(default_factory=dict)
    channels: dict[int, Channel] = field(default_factory=dict)
    blocks: list[Block] = field(default_factory=list)
    counts: dict[int, int] = field(default_factory=dict)
    start_ns: int | None = None
    end_ns: int | None = None
    notes: list[str] = field(default_factory=list)

    def take(self, opcode: int, content: bytes) -> None:
        """Remember a schema or channel; other records are none of ours."""
        if opcode == mc.SCHEMA:
            schema = Schema.read(_stream(content))
            self.schemas[schema.id] = schema
        elif opcode == mc.CHANNEL:
            channel = Channel.read(_stream(content))
            self.channels[channel.id] = channel


def read_layout(path: Path) -> Layout:
    """
    Find out what an MCAP file holds.

    Raises
    ------
    RecordingError
        If it holds nothing that can be read.

    """
    with path.open('rb') as stream:
        size = os.fstat(stream.fileno()).st_size
        if stream.read(len(MAGIC)) != MAGIC:
            raise RecordingError(f'{path} is not an MCAP file: it does not begin like one.')
        summary_start = _summary_start(stream, size)
        if summary_start:
            layout = _from_summary(stream, summary_start, size)
            if layout is not None:
                return layout
        return _Scan(path, stream, size, complete=summary_start is not None).run()


def _stream(content: bytes) -> ReadDataStream:
    return ReadDataStream(BytesIO(content))


def _summary_start(stream: BinaryIO, size: int) -> int | None:
    """Return where the summary begins: 0 where there is none, None without a valid end."""
    end = _FOOTER_SIZE + len(MAGIC)
    if size < len(MAGIC) + end:
        return None
    stream.seek(size - end)
    tail = stream.read(end)
    if tail[_FOOTER_SIZE:] != MAGIC or tail[:9] != mc.PREFIX.pack(mc.FOOTER, 20):
        return None
    start = Footer.read(_stream(tail[9:_FOOTER_SIZE])).summary_start
    return start if start < size else None


def _from_summary(stream: BinaryIO, start: int, size: int) -> Layout | None:
    """Read the summary; None where it is damaged or does not cover the file."""
    layout, chunks = Layout(), _Chunks()
    total: Statistics | None = None
    stream.seek(start)
    position = start
    try:
        while position < size:
            opcode, length = mc.PREFIX.unpack(stream.read(mc.PREFIX.size))
            position += mc.PREFIX.size + length
            if position > size:
                return None
            content = stream.read(length)
            if opcode == mc.FOOTER:
                break
            if opcode == mc.STATISTICS:
                total = Statistics.read(_stream(content))
            elif opcode == mc.CHUNK_INDEX:
                chunks.add(content)
            else:
                layout.take(opcode, content)
    except (McapError, ValueError, struct.error, EOFError):
        return None
    layout.blocks = chunks.blocks
    if total is None or not _covers(stream, layout, total, chunks=chunks, summary=start):
        return None
    layout.counts = dict(total.channel_message_counts)
    if total.message_count:
        layout.start_ns, layout.end_ns = total.message_start_time, total.message_end_time
    return layout


class _Chunks:
    """
    Chunks of a summary, small neighbours put together to blocks.

    Hours of recording may have 100 000 chunks; so memory grows with the bytes, not with them.
    """

    def __init__(self) -> None:
        self.blocks: list[Block] = []
        self.count = 0
        self.spans: dict[int, int] = {}
        self._span = 0
        self._memory = 0
        self._end = -1
        self._sets: dict[frozenset[int], frozenset[int]] = {}

    def add(self, content: bytes) -> None:
        """Take in a chunk index record."""
        start_ns, end_ns, offset, size, map_size = _CHUNK_INDEX.unpack_from(content)
        place = _CHUNK_INDEX.size + map_size
        offsets = _INDEX_OFFSET.iter_unpack(content[_CHUNK_INDEX.size : place])
        channels = frozenset(channel_id for channel_id, _ in offsets)
        index_length, name_size = _INDEX_LENGTH.unpack_from(content, place)
        (memory,) = _LENGTH.unpack_from(content, place + _INDEX_LENGTH.size + name_size + 8)
        self.count += 1
        if offset == self._end and self._joins(memory, start_ns):
            last = self.blocks.pop()
            self._memory += memory
            # Unknown channels on either side stay unknown.
            both = last.channels | channels if last.channels and channels else frozenset()
            new = Block(
                last.offset,
                offset + size - last.offset,
                last.start_ns,
                max(last.end_ns, end_ns),
                channels=self._sets.setdefault(both, both),
            )
        else:
            known = self._sets.setdefault(channels, channels)
            self._memory = memory
            new = Block(offset, size, start_ns, end_ns, channels=known)
        self.blocks.append(new)
        if offset != self._end:
            self._span = offset
        self._end = offset + size + index_length
        self.spans[self._span] = self._end

    def _joins(self, memory: int, start_ns: int) -> bool:
        return self._memory + memory <= _RUN and start_ns >= self.blocks[-1].end_ns


def _covers(
    stream: BinaryIO, layout: Layout, total: Statistics, *, chunks: _Chunks, summary: int
) -> bool:
    """Tell whether the summary's chunks and channels are all there is."""
    # A writer killed within a commit leaves totals that are one chunk behind.
    if chunks.count != total.chunk_count or len(layout.channels) < total.channel_count:
        return False
    if any(block.offset + block.size > summary for block in layout.blocks):
        return False
    schemas = {channel.schema_id for channel in layout.channels.values()} - {0}
    if not schemas <= set(layout.schemas):
        return False
    # Messages may also lie outside of chunks; then the gaps between chunks begin with them.
    position = len(MAGIC)
    while position < summary:
        end = chunks.spans.get(position)
        if end is not None and end > position:
            position = end
            continue
        stream.seek(position)
        prefix = stream.read(mc.PREFIX.size)
        if len(prefix) < mc.PREFIX.size:
            return False
        opcode, length = mc.PREFIX.unpack(prefix)
        if opcode == mc.DATA_END:
            return True
        if opcode in (mc.MESSAGE, mc.CHUNK):
            return False
        position += mc.PREFIX.size + length
    return True


class _Scan:
    """Walk a file record by record, as far as it goes."""

    def __init__(self, path: Path, stream: BinaryIO, size: int, *, complete: bool) -> None:
        self._path, self._stream, self._size = path, stream, size
        self._complete = complete
        self._layout = Layout()
        self._run: list[int] = []
        self._position = len(MAGIC)

    def run(self) -> Layout:
        layout = self._layout
        try:
            ended = self._records()
        except (McapError, ValueError, struct.error, EOFError):
            ended = False
        self._close_run()
        if not ended:
            layout.notes.append(Loss(
                f'{self._path.name} ends early: it is cut or damaged at byte {self._position} '
                f'of {self._size}; the complete messages before are used.'
            ))
        elif not self._complete:
            layout.notes.append(Loss(
                f'{self._path.name} ends early: its closing part is missing; all messages '
                'found are used.'
            ))
        if not layout.channels:
            raise RecordingError(
                f'{self._path} holds no topic that can be read; it was cut before its first '
                'message or is damaged.'
            )
        return layout

    def _records(self) -> bool:
        while self._position < self._size:
            self._stream.seek(self._position)
            prefix = self._stream.read(mc.PREFIX.size)
            if len(prefix) < mc.PREFIX.size:
                return False
            opcode, length = mc.PREFIX.unpack(prefix)
            if opcode in (mc.DATA_END, mc.FOOTER):
                return True
            after = self._position + mc.PREFIX.size + length
            cut = after > self._size
            if opcode == mc.CHUNK:
                self._close_run()
                self._chunk(min(after, self._size), cut=cut)
            elif cut or opcode == 0:
                return False
            elif opcode == mc.MESSAGE:
                self._message(length)
            elif opcode in (mc.SCHEMA, mc.CHANNEL):
                self._layout.take(opcode, self._stream.read(length))
            if cut:
                return False
            self._position = after
        return False

    def _message(self, length: int) -> None:
        """Add a message outside of chunks to the present run."""
        head = self._stream.read(_MESSAGE_HEAD.size)
        channel_id, log_ns = _MESSAGE_HEAD.unpack(head)
        self._count(channel_id, log_ns)
        if not self._run:
            self._run = [self._position, log_ns, log_ns]
        self._run[1] = min(self._run[1], log_ns)
        self._run[2] = max(self._run[2], log_ns)
        if self._position + mc.PREFIX.size + length - self._run[0] >= _RUN:
            self._position += mc.PREFIX.size + length
            self._close_run()
            self._position -= mc.PREFIX.size + length

    def _close_run(self) -> None:
        if self._run:
            start, first, last = self._run
            self._layout.blocks.append(Block(start, self._position - start, first, last))
            self._run = []

    def _chunk(self, after: int, *, cut: bool) -> None:
        content = self._stream.read(after - self._position - mc.PREFIX.size)
        try:
            records = mc.chunk_records(content, partial=cut)
        except mc.DamagedError as error:
            self._layout.notes.append(damage_note(self._path, self._position, str(error)))
            return
        mc.for_each_record(records, self._layout.take)
        every = {channel_id: str(channel_id) for channel_id in self._layout.channels}
        messages = mc.walk_messages(records, every).messages
        if not messages:
            return
        for message in messages:
            self._count(int(message.topic), message.log_ns)
        stamps = [message.log_ns for message in messages]
        self._layout.blocks.append(
            Block(
                self._position,
                after - self._position,
                min(stamps),
                max(stamps),
                partial=cut,
            )
        )

    def _count(self, channel_id: int, log_ns: int) -> None:
        layout = self._layout
        layout.counts[channel_id] = layout.counts.get(channel_id, 0) + 1
        layout.start_ns = log_ns if layout.start_ns is None else min(layout.start_ns, log_ns)
        layout.end_ns = log_ns if layout.end_ns is None else max(layout.end_ns, log_ns)


def damage_note(path: Path, offset: int, reason: str) -> Loss:
    """Say that a chunk is left out."""
    return Loss(f'A chunk of {path.name} at byte {offset} {reason}; its messages are left out.')
