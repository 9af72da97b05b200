# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Messages out of a damaged rosbag2 database, read page by page.

SQLite refuses a database that is cut, and reaches a row only through the pages above it. The
rows themselves lie in leaf pages that can be understood one at a time.

References
----------
SQLite database file format, sqlite.org/fileformat2.html, sections 1.3, 1.6 and 2.1.

"""

from __future__ import annotations

from collections.abc import Collection, Iterator
from pathlib import Path
from typing import BinaryIO, NamedTuple

_LEAF = 0x0D
_INTEGER_SIZES = {1: 1, 2: 2, 3: 3, 4: 4, 5: 6, 6: 8, 8: 0, 9: 0}


class _Row(NamedTuple):
    timestamp: int
    row_id: int
    topic_id: int
    page: int
    payload: int
    payload_size: int
    data_start: int


class SalvagedMessages:
    """
    Rows of the `messages` table that are still whole, sorted by timestamp.

    Only their places are kept in memory (about 150 bytes each), not the data.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        with path.open('rb') as stream:
            head = stream.read(100)
            size = int.from_bytes(head[16:18], 'big')
            self._page_size = 65536 if size == 1 else size
            self._usable = self._page_size - head[20]
            rows: dict[int, _Row] = {}
            if self._page_size >= 512 and self._usable >= 480:
                for row in self._scan(stream):
                    rows.setdefault(row.row_id, row)
        self._rows = sorted(rows.values())

    @property
    def stamps(self) -> list[tuple[int, int]]:
        """Timestamp and topic id of each row."""
        return [(row.timestamp, row.topic_id) for row in self._rows]

    def rows(
        self, topic_ids: Collection[int], *, after: tuple[int, int]
    ) -> Iterator[tuple[int, int, bytes]]:
        """Yield (timestamp, topic id, data) of the rows beyond `after` = (timestamp, id)."""
        with self._path.open('rb') as stream:
            for row in self._rows:
                if row.topic_id in topic_ids and row[:2] > after:
                    data = self._payload(stream, row)
                    if data is not None:
                        yield row.timestamp, row.topic_id, data[row.data_start :]

    def _scan(self, stream: BinaryIO) -> Iterator[_Row]:
        stream.seek(self._page_size)
        number = 1
        while True:
            page = stream.read(self._page_size)
            if len(page) < self._page_size:
                return
            number += 1
            if page[0] != _LEAF:
                continue
            for cell in range(int.from_bytes(page[3:5], 'big')):
                place = int.from_bytes(page[8 + 2 * cell : 10 + 2 * cell], 'big')
                try:
                    row = _read_row(page, place, number)
                except IndexError:
                    break
                if row is None:
                    continue
                if row.payload_size > self._usable - 35:
                    whole = self._payload(stream, row) is not None
                    stream.seek(number * self._page_size)
                    if not whole:
                        continue
                yield row

    def _payload(self, stream: BinaryIO, row: _Row) -> bytes | None:
        """Put a row's payload together, following its overflow pages; None if one is lost."""
        size, usable = row.payload_size, self._usable
        most, least = usable - 35, (usable - 12) * 32 // 255 - 23
        local = size
        if size > most:
            local = least + (size - least) % (usable - 4)
            local = local if local <= most else least
        stream.seek((row.page - 1) * self._page_size + row.payload)
        data = stream.read(local + (4 if size > local else 0))
        parts = [data[:local]]
        missing, following = size - local, int.from_bytes(data[local:], 'big')
        while missing > 0:
            if not following:
                return None
            stream.seek((following - 1) * self._page_size)
            page = stream.read(usable)
            if len(page) < min(usable, 4 + missing):
                return None
            parts.append(page[4 : 4 + missing])
            missing -= len(parts[-1])
            following = int.from_bytes(page[:4], 'big')
        payload = b''.join(parts)
        return payload if len(payload) == size else None


def _varint(page: bytes, place: int) -> tuple[int, int]:
    value = 0
    for count in range(8):
        byte = page[place + count]
        value = value << 7 | byte & 0x7F
        if byte < 0x80:
            return value, place + count + 1
    return value << 8 | page[place + 8], place + 9


def _read_row(page: bytes, place: int, number: int) -> _Row | None:
    """Read the row at `place` if it has the shape (id, topic, timestamp, data)."""
    size, position = _varint(page, place)
    row_id, payload = _varint(page, position)
    head_size, position = _varint(page, payload)
    kinds: list[int] = []
    head_end = payload + head_size
    while position < head_end and len(kinds) < 5:
        kind, position = _varint(page, position)
        kinds.append(kind)
    if len(kinds) != 4 or kinds[0] != 0 or kinds[3] < 12 or kinds[3] % 2:
        return None
    values = []
    for kind in kinds[1:3]:
        if kind not in _INTEGER_SIZES:
            return None
        width = _INTEGER_SIZES[kind]
        value = int.from_bytes(page[head_end : head_end + width], 'big', signed=True)
        values.append(value if width else kind - 8)
        head_end += width
    data_start = head_end - payload
    if size != data_start + (kinds[3] - 12) // 2:
        return None
    return _Row(values[1], row_id, values[0], number, payload, size, data_start)
