# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Messages of an MCAP file in log-time order, with the memory of a few chunks."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Collection, Iterator, Mapping
from dataclasses import replace
from operator import itemgetter
from pathlib import Path
from typing import BinaryIO

from teleop_eval.sources import mcap_chunk as mc
from teleop_eval.sources.clock_step import steps_back
from teleop_eval.sources.feed_order import STEP_NS
from teleop_eval.sources.mcap_layout import Block, Layout, damage_note, read_layout
from teleop_eval.sources.qos_profiles import read_qos
from teleop_eval.sources.stored_file import Loss, Message, TopicInfo, add_note, definition_format

_LOG_NS = itemgetter(0)


class McapFile:
    """
    One MCAP file, complete or cut.

    Raises
    ------
    RecordingError
        If nothing in it can be read.

    """

    def __init__(self, path: Path) -> None:
        self.path = path
        layout = read_layout(path)
        self.notes = list(layout.notes)
        self.start_ns, self.end_ns = layout.start_ns, layout.end_ns
        self.message_count: int | None = sum(layout.counts.values())
        self._blocks = layout.blocks
        self._topic_of: dict[int, str] = {}
        self.topics: dict[str, TopicInfo] = {}
        for channel_id in sorted(layout.channels):
            self._add_channel(layout, channel_id)

    def batches(self, topics: Collection[str]) -> Iterator[list[Message]]:
        """
        Yield the messages of these topics in log-time order, some at a time.

        If the recorder's clock was put back, they come in the order of the file instead.
        """
        wanted = {key: name for key, name in self._topic_of.items() if name in topics}
        blocks = [
            block
            for block in self._blocks
            if not block.channels or not wanted.keys().isdisjoint(block.channels)
        ]
        blocks.sort(key=lambda block: block.offset)
        with self.path.open('rb') as stream:
            if self._clock_stepped(stream, blocks, wanted):
                for block in blocks:
                    if messages := self._load(stream, block, wanted, sort=False):
                        yield messages
                return
            blocks.sort(key=lambda block: (block.start_ns, block.offset))
            yield from self._merge(stream, blocks, wanted)

    def _clock_stepped(
        self, stream: BinaryIO, blocks: list[Block], wanted: Mapping[int, str]
    ) -> bool:
        """Look for a step of the clock where the blocks' times leave room for one."""
        for number, block in enumerate(blocks):
            before = blocks[number - 1] if number else block
            outermost = number in (0, len(blocks) - 1)
            room = max(before.end_ns, block.end_ns if outermost else 0) - block.start_ns
            if room > STEP_NS:
                latest: dict[str, int] = {}
                for one in (before, block)[not number :]:
                    if steps_back(self._load(stream, one, wanted, sort=False), latest):
                        return True
        return False

    def _merge(
        self, stream: BinaryIO, blocks: list[Block], wanted: Mapping[int, str]
    ) -> Iterator[list[Message]]:
        """
        Merge blocks that overlap in time, equal times in the order of the file.

        A block is loaded when the messages before its start are through; `open_blocks` maps
        its place in the file to its messages and to how many of them are through.
        """
        open_blocks: dict[int, tuple[list[Message], int]] = {}
        for number, block in enumerate(blocks):
            messages = self._load(stream, block, wanted)
            if messages:
                open_blocks[block.offset] = messages, 0
            following = blocks[number + 1].start_ns if number + 1 < len(blocks) else None
            batch = _take_before(open_blocks, following)
            if batch:
                yield batch

    def _load(
        self, stream: BinaryIO, block: Block, wanted: Mapping[int, str], *, sort: bool = True
    ) -> list[Message]:
        """Read a block's messages in log-time order, or as they are."""
        stream.seek(block.offset)
        data = stream.read(block.size)
        if len(data) < block.size:
            self._leave_out(block.offset, 'is not where the summary says')
        parts: list[mc.Walked] = []
        position = 0
        while position + mc.PREFIX.size <= len(data):
            opcode, length = mc.PREFIX.unpack_from(data, position)
            start = position + mc.PREFIX.size
            if opcode == mc.CHUNK:
                walked = self._chunk(block, position, data[start : start + length], wanted)
                if walked is not None:
                    parts.append(walked)
            elif opcode == mc.MESSAGE:
                parts.append(mc.walk_messages(data[position:], wanted))
                break
            elif opcode not in (mc.MESSAGE_INDEX, mc.PADDING):
                self._leave_out(block.offset + position, 'is not where the summary says')
                break
            position = start + length
        if len(parts) == 1:
            messages, in_order = parts[0].messages, parts[0].in_order
        else:
            messages = [message for walked in parts for message in walked.messages]
            in_order = False
        if sort and not in_order:
            messages.sort(key=_LOG_NS)
        return messages

    def _chunk(
        self, block: Block, position: int, content: bytes, wanted: Mapping[int, str]
    ) -> mc.Walked | None:
        offset = block.offset + position
        try:
            walked = mc.walk_messages(mc.chunk_records(content, partial=block.partial), wanted)
        except mc.DamagedError as error:
            self._leave_out(offset, str(error))
            return None
        if walked.unread and not block.partial:
            add_note(
                self.notes,
                Loss(f'A chunk of {self.path.name} at byte {offset} ends inside a record; its '
                     'complete messages are used.'),
            )
        return walked

    def _leave_out(self, offset: int, reason: str) -> None:
        add_note(self.notes, damage_note(self.path, offset, reason))

    def _add_channel(self, layout: Layout, channel_id: int) -> None:
        channel = layout.channels[channel_id]
        schema = layout.schemas.get(channel.schema_id)
        type_name = schema.name if schema else ''
        kind = definition_format(schema.encoding) if schema else ''
        count = layout.counts.get(channel_id, 0)
        found = TopicInfo(
            channel.topic,
            type_name,
            schema.data.decode('utf-8', 'replace') if schema and kind else '',
            kind,
            read_qos(channel.metadata.get('offered_qos_profiles')),
            count,
            channel.message_encoding,
            channel.metadata.get('topic_type_hash', ''),
        )
        known = self.topics.get(channel.topic)
        if known is None:
            self.topics[channel.topic] = found
        elif known.same_kind(found):
            self.topics[channel.topic] = _with_more(known, count)
        else:
            self.topics[channel.topic] = known.with_other(found)
            return
        self._topic_of[channel_id] = channel.topic


def _with_more(topic: TopicInfo, count: int) -> TopicInfo:
    return replace(topic, message_count=(topic.message_count or 0) + count)


def _take_before(
    open_blocks: dict[int, tuple[list[Message], int]], cutoff: int | None
) -> list[Message]:
    """Take the messages before `cutoff` (all of them if None) out of the open blocks."""
    parts: list[list[Message]] = []
    for offset in sorted(open_blocks):
        messages, start = open_blocks[offset]
        stop = len(messages)
        if cutoff is not None and messages[-1].log_ns >= cutoff:
            stop = bisect_left(messages, cutoff, start, key=_LOG_NS)
        if stop > start:
            parts.append(messages if stop - start == len(messages) else messages[start:stop])
        if stop == len(messages):
            del open_blocks[offset]
        else:
            open_blocks[offset] = messages, stop
    if len(parts) < 2:
        return parts[0] if parts else []
    # Stable: equal log times keep the order of the file.
    return sorted((message for part in parts for message in part), key=_LOG_NS)
