# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Records of the MCAP format, packed.

References
----------
MCAP format specification, github.com/foxglove/mcap, `website/docs/spec`: every record is an
opcode (1 byte), a length (8 bytes, little endian) and that many bytes; opcodes from 0x80 on
are free for applications and skipped by readers.

"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from struct import Struct

MAGIC = b'\x89MCAP0\r\n'
HEADER, FOOTER, SCHEMA, CHANNEL, MESSAGE, CHUNK = 0x01, 0x02, 0x03, 0x04, 0x05, 0x06
MESSAGE_INDEX, CHUNK_INDEX, STATISTICS, METADATA = 0x07, 0x08, 0x0B, 0x0C
METADATA_INDEX, SUMMARY_OFFSET, DATA_END = 0x0D, 0x0E, 0x0F
PADDING = 0x80

PREFIX_SIZE = 9
FOOTER_SIZE = PREFIX_SIZE + 20
"""Bytes of a footer record; the closing magic follows it."""

_PREFIX = Struct('<BQ')
_STRING = Struct('<I')
MESSAGE_HEAD = Struct('<BQHIQQ')
"""Prefix, channel, sequence, log time and publish time of a message, ahead of its data."""
INDEX_ENTRY = Struct('<QQ')
"""Log time and offset of one message within its uncompressed chunk."""
_CHUNK_HEAD = Struct('<QQQIIQ')
_CHUNK_INDEX_HEAD = Struct('<QQQQ')
_STATISTICS = Struct('<QHIIIIQQ')


@dataclass
class Counts:
    """Running totals of one file: what its Statistics record says."""

    start_ns: int = 0
    end_ns: int = 0
    messages: int = 0
    chunks: int = 0
    per_channel: dict[int, int] = field(default_factory=dict)


def record(opcode: int, *parts: bytes) -> bytes:
    """Pack a record out of its parts."""
    body = b''.join(parts)
    return _PREFIX.pack(opcode, len(body)) + body


def prefix(opcode: int, length: int) -> bytes:
    """Pack the opcode and the length that open every record."""
    return _PREFIX.pack(opcode, length)


def string(text: str) -> bytes:
    """Pack a length-prefixed UTF-8 text."""
    data = text.encode()
    return _STRING.pack(len(data)) + data


def _sized(data: bytes) -> bytes:
    return _STRING.pack(len(data)) + data


def _text_map(values: Mapping[str, str]) -> bytes:
    return _sized(b''.join(string(key) + string(value) for key, value in values.items()))


def header(library: str) -> bytes:
    """Pack the header of a ROS 2 file."""
    return record(HEADER, string('ros2'), string(library))


def schema(schema_id: int, *, name: str, encoding: str, definition: str) -> bytes:
    """Pack a message definition; an empty encoding says that the definition is not known."""
    return record(
        SCHEMA, schema_id.to_bytes(2, 'little'), string(name), string(encoding), string(definition)
    )


def channel(channel_id: int, *, schema_id: int, topic: str, metadata: Mapping[str, str]) -> bytes:
    """Pack the channel of one topic whose messages are CDR."""
    ids = channel_id.to_bytes(2, 'little') + schema_id.to_bytes(2, 'little')
    return record(CHANNEL, ids, string(topic), string('cdr'), _text_map(metadata))


def chunk(records: bytes, *, start_ns: int, end_ns: int, crc: int) -> bytes:
    """Pack an uncompressed chunk."""
    size = len(records)
    return record(CHUNK, _CHUNK_HEAD.pack(start_ns, end_ns, size, crc, 0, size), records)


def message_index(channel_id: int, entries: Iterable[bytes]) -> bytes:
    """Pack the index of one channel's messages in the chunk before it."""
    return record(MESSAGE_INDEX, channel_id.to_bytes(2, 'little'), _sized(b''.join(entries)))


def chunk_index(
    *,
    start_ns: int,
    end_ns: int,
    offset: int,
    length: int,
    index_offsets: Mapping[int, int],
    index_length: int,
    size: int,
) -> bytes:
    """Pack the summary's entry of one uncompressed chunk with `size` bytes of records."""
    offsets = b''.join(
        key.to_bytes(2, 'little') + value.to_bytes(8, 'little')
        for key, value in index_offsets.items()
    )
    return record(
        CHUNK_INDEX,
        _CHUNK_INDEX_HEAD.pack(start_ns, end_ns, offset, length),
        _sized(offsets),
        index_length.to_bytes(8, 'little'),
        string(''),
        INDEX_ENTRY.pack(size, size),
    )


def statistics(counts: Counts, *, schemas: int, channels: int, metadata: int) -> bytes:
    """Pack the totals of the file."""
    fixed = _STATISTICS.pack(
        counts.messages,
        schemas,
        channels,
        0,
        metadata,
        counts.chunks,
        counts.start_ns,
        counts.end_ns,
    )
    per_channel = b''.join(
        key.to_bytes(2, 'little') + value.to_bytes(8, 'little')
        for key, value in counts.per_channel.items()
    )
    return record(STATISTICS, fixed, _sized(per_channel))


def metadata(name: str, values: Mapping[str, str]) -> bytes:
    """Pack a named map of texts."""
    return record(METADATA, string(name), _text_map(values))


def metadata_index(name: str, *, offset: int, length: int) -> bytes:
    """Pack the summary's entry of a metadata record."""
    return record(METADATA_INDEX, INDEX_ENTRY.pack(offset, length), string(name))


def summary_offset(opcode: int, *, start: int, length: int) -> bytes:
    """Pack the place of the summary records with one opcode."""
    return record(SUMMARY_OFFSET, opcode.to_bytes(1, 'little'), INDEX_ENTRY.pack(start, length))


def data_end() -> bytes:
    """Pack the end of the data section, without checksum."""
    return record(DATA_END, bytes(4))


def footer_prefix(summary_start: int, summary_offset_start: int = 0) -> bytes:
    """Pack the footer up to its checksum, which covers these bytes too."""
    return prefix(FOOTER, 20) + INDEX_ENTRY.pack(summary_start, summary_offset_start)


def footer(summary_start: int) -> bytes:
    """Pack a footer without checksum and without summary offsets, and the closing magic."""
    return footer_prefix(summary_start) + bytes(4) + MAGIC
