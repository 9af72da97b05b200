# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Chunks of an MCAP file: decompressing them and walking the records inside.

References
----------
MCAP format specification, github.com/foxglove/mcap, `website/docs/spec`.

"""

from __future__ import annotations

import zlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from struct import Struct

import lz4.frame
import zstandard

from teleop_eval.sources.stored_file import Message

HEADER, FOOTER, SCHEMA, CHANNEL, MESSAGE, CHUNK = 0x01, 0x02, 0x03, 0x04, 0x05, 0x06
MESSAGE_INDEX, CHUNK_INDEX, STATISTICS, DATA_END = 0x07, 0x08, 0x0B, 0x0F
PADDING = 0x80
PREFIX = Struct('<BQ')

_CHUNK_HEAD = Struct('<QQQII')
_SIZE = Struct('<Q')
_MESSAGE = Struct('<QH4xQ')
_MAX_CHUNK = 4 << 30


class DamagedError(Exception):
    """Part of the file is not what it should be; the text says what."""


@dataclass(frozen=True)
class Walked:
    """Messages in file order, whether that is log-time order, and bytes left unread."""

    messages: list[Message]
    in_order: bool
    unread: int


def chunk_records(content: bytes, *, partial: bool = False) -> bytes:
    """
    Return the records inside a chunk.

    Parameters
    ----------
    content
        The chunk record after its prefix.
    partial
        The file ends inside this chunk: return what can be had, without checksum.

    Raises
    ------
    DamagedError
        If the chunk cannot be decompressed or fails its checksum.

    """
    try:
        _, _, size, crc, name_size = _CHUNK_HEAD.unpack_from(content)
        compression = content[32 : 32 + name_size].decode()
        (stored,) = _SIZE.unpack_from(content, 32 + name_size)
    except (ValueError, ArithmeticError, OSError) as error:
        raise DamagedError('has an unreadable head') from error
    except Exception as error:  # struct.error is a plain Exception
        raise DamagedError('has an incomplete head') from error
    data = content[40 + name_size : 40 + name_size + stored]
    if partial:
        return _decompress_start(data, compression)
    if len(data) < stored or size > _MAX_CHUNK:
        raise DamagedError('states an impossible size')
    records = _decompress(data, compression, size)
    if crc and zlib.crc32(records) != crc:
        raise DamagedError('fails its checksum')
    return records


def _decompress(data: bytes, compression: str, size: int) -> bytes:
    try:
        if compression == '':
            records = data
        elif compression == 'zstd':
            # A damaged head may state gigabytes, which would be reserved at once.
            if zstandard.frame_content_size(data) not in (-1, size):
                raise DamagedError('has another size than stated')
            records = zstandard.ZstdDecompressor().decompress(data, max_output_size=size)
        elif compression == 'lz4':
            records = lz4.frame.decompress(data)
        else:
            raise DamagedError(f'has the unknown compression {compression!r}')
    except (zstandard.ZstdError, RuntimeError, MemoryError) as error:
        raise DamagedError(f'cannot be decompressed ({compression})') from error
    if len(records) != size:
        raise DamagedError('has another size than stated')
    return records


def _decompress_start(data: bytes, compression: str) -> bytes:
    """Decompress as much as the beginning of a compressed stream gives."""
    try:
        if compression == 'zstd':
            return zstandard.ZstdDecompressor().decompressobj().decompress(data)
        if compression == 'lz4':
            return lz4.frame.LZ4FrameDecompressor().decompress(data)
    except (zstandard.ZstdError, RuntimeError, MemoryError):
        return b''
    return data if compression == '' else b''


def walk_messages(records: bytes, topics: Mapping[int, str]) -> Walked:
    """
    Collect the messages of the wanted channels out of packed records.

    Parameters
    ----------
    records
        Records back to back.
    topics
        Topic of each wanted channel id.

    Returns
    -------
    Walked
        The messages; `unread` counts bytes of an incomplete record at the end.

    """
    messages: list[Message] = []
    append, topic_of, unpack = messages.append, topics.get, _MESSAGE.unpack_from
    new, kind = tuple.__new__, Message
    position, end, last, in_order = 0, len(records), 0, True
    while position + 9 <= end:
        if records[position] == MESSAGE and position + 31 <= end:
            length, channel_id, log_ns = unpack(records, position + 1)
            after = position + 9 + length
            if after > end or length < 22:
                break
            topic = topic_of(channel_id)
            if topic is not None:
                append(new(kind, (log_ns, topic, records[position + 31 : after])))
                if log_ns < last:
                    in_order = False
                last = log_ns
        else:
            after = position + 9 + _SIZE.unpack_from(records, position + 1)[0]
            if after > end:
                break
        position = after
    return Walked(messages, in_order, end - position)


def for_each_record(records: bytes, take: Callable[[int, bytes], None]) -> None:
    """Hand opcode and content of each complete record to `take`."""
    position, end = 0, len(records)
    while position + 9 <= end:
        opcode, length = PREFIX.unpack_from(records, position)
        after = position + 9 + length
        if after > end:
            return
        take(opcode, records[position + 9 : after])
        position = after
