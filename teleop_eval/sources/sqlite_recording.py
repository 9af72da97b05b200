# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Messages of a rosbag2 SQLite file in log-time order."""

from __future__ import annotations

import os
import sqlite3
from collections import Counter
from collections.abc import Collection, Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from urllib.parse import quote

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources.clock_step import STEP_QUERIES
from teleop_eval.sources.qos_profiles import read_qos
from teleop_eval.sources.sqlite_pages import SalvagedMessages
from teleop_eval.sources.stored_file import Loss, Message, TopicInfo, add_note, definition_format

_BATCH = 2000


class SqliteFile:
    """
    One `.db3` file, complete or cut.

    Parameters
    ----------
    path
        The file.
    counts
        Messages by topic as metadata.yaml states them; saves counting if the sum is right.

    Raises
    ------
    RecordingError
        If nothing in it can be read.

    """

    def __init__(self, path: Path, *, counts: dict[str, int] | None = None) -> None:
        self.path = path
        self.notes: list[str] = []
        self._names: dict[int, str] = {}
        self._salvaged: SalvagedMessages | None = None
        self.topics: dict[str, TopicInfo] = {}
        self.start_ns: int | None = None
        self.end_ns: int | None = None
        self.message_count: int | None = None
        try:
            with closing(self._connect()) as database:
                self._read_topics(database)
                if _is_cut(path):
                    self._salvage()
                else:
                    self._read_totals(database, counts or {})
        except sqlite3.Error as error:
            if not self._names:
                raise RecordingError(
                    f'{path} cannot be read as a rosbag2 database ({error}); it is cut too early '
                    'or damaged.'
                ) from error
            self._salvage()

    def batches(self, topics: Collection[str]) -> Iterator[list[Message]]:
        """
        Yield the messages of these topics in log-time order, some at a time.

        If the recorder's clock was put back, they come in the order of writing instead.
        """
        wanted = {key: name for key, name in self._names.items() if name in topics}
        last = (-(2**63), -1)
        if self._salvaged is None:
            try:
                with closing(self._connect()) as database:
                    for rows in self._select(database, wanted):
                        yield [Message(stamp, wanted[key], data) for stamp, _, key, data in rows]
                        last = rows[-1][:2]
                return
            except sqlite3.Error:
                self._salvage()
        yield from self._salvaged_batches(wanted, last)

    def _select(
        self, database: sqlite3.Connection, wanted: dict[int, str]
    ) -> Iterator[list[tuple[int, int, int, bytes]]]:
        marks = ','.join(str(key) for key in wanted)
        stepped = all(database.execute(query).fetchone() for query in STEP_QUERIES)
        # The unary plus keeps SQLite on the timestamp index, so that nothing is sorted.
        cursor = database.execute(
            'SELECT timestamp, id, topic_id, data FROM messages '
            f'WHERE +topic_id IN ({marks}) ORDER BY {"id" if stepped else "timestamp, id"}'
        )
        while rows := cursor.fetchmany(_BATCH):
            yield rows

    def _salvaged_batches(
        self, wanted: dict[int, str], after: tuple[int, int]
    ) -> Iterator[list[Message]]:
        assert self._salvaged is not None
        batch: list[Message] = []
        for stamp, key, data in self._salvaged.rows(wanted, after=after):
            batch.append(Message(stamp, wanted[key], data))
            if len(batch) == _BATCH:
                yield batch
                batch = []
        if batch:
            yield batch

    def _connect(self) -> sqlite3.Connection:
        """Open for reading; a log of committed messages beside the file is honoured."""
        address = 'file:' + quote(str(self.path.resolve()))
        for options in ('?mode=ro', '?mode=ro&immutable=1'):
            database = sqlite3.connect(address + options, uri=True, check_same_thread=False)
            try:
                # Makes SQLite open a database that is shorter than it should be.
                database.execute('PRAGMA writable_schema=ON')
                database.execute('SELECT count(*) FROM sqlite_master').fetchone()
                if 'immutable' in options:
                    add_note(
                        self.notes,
                        Loss(f'{self.path.name} was left in the middle of a write and its log '
                             'cannot be used here; messages of that write may be missing.'),
                    )
                return database
            except sqlite3.OperationalError:
                database.close()
                if 'immutable' in options:
                    raise
            except sqlite3.Error:
                database.close()
                raise
        raise AssertionError('not reached')

    def _read_topics(self, database: sqlite3.Connection) -> None:
        tables = {row[0] for row in database.execute('SELECT name FROM sqlite_master')}
        if not {'topics', 'messages'} <= tables:
            raise RecordingError(
                f'{self.path} is an SQLite database but no recording: it has no tables '
                '"topics" and "messages".'
            )
        definitions = {}
        if 'message_definitions' in tables:
            query = (
                'SELECT topic_type, encoding, encoded_message_definition FROM message_definitions'
            )
            definitions = {name: (kind, text) for name, kind, text in database.execute(query)}
        present = {row[1] for row in database.execute('PRAGMA table_info(topics)')}
        optional = [
            name if name in present else "''"
            for name in ('offered_qos_profiles', 'type_description_hash')
        ]
        query = f'SELECT id, name, type, serialization_format, {", ".join(optional)} FROM topics'
        for key, name, type_name, encoding, qos, type_hash in database.execute(query):
            kind, text = definitions.get(type_name, ('', ''))
            kind = definition_format(kind)
            found = TopicInfo(
                name, type_name, text if kind else '', kind, read_qos(qos), None, encoding,
                type_hash,
            )
            known = self.topics.setdefault(name, found)
            if known.same_kind(found):
                self._names[key] = name
            else:
                self.topics[name] = known.with_other(found)

    def _read_totals(self, database: sqlite3.Connection, stated: dict[str, int]) -> None:
        query = 'SELECT min(timestamp), max(timestamp), count(*) FROM messages'
        self.start_ns, self.end_ns, self.message_count = database.execute(query).fetchone()
        if sum(stated.get(name, 0) for name in self.topics) == self.message_count:
            counts = stated
        else:
            query = 'SELECT topic_id, count(*) FROM messages GROUP BY topic_id'
            counts = Counter()
            for key, count in database.execute(query):
                counts[self._names.get(key, '')] += count
        self._set_counts(counts)

    def _set_counts(self, counts: dict[str, int]) -> None:
        for name, topic in self.topics.items():
            self.topics[name] = replace(topic, message_count=counts.get(name, 0))

    def _salvage(self) -> None:
        """Switch to reading page by page."""
        self._salvaged = SalvagedMessages(self.path)
        stamps = [item for item in self._salvaged.stamps if item[1] in self._names]
        add_note(
            self.notes,
            Loss(f'{self.path.name} ends early: the database is cut or damaged; the '
                 f'{len(stamps)} messages still complete in it are used.'),
        )
        self.message_count = len(stamps)
        self.start_ns = stamps[0][0] if stamps else None
        self.end_ns = stamps[-1][0] if stamps else None
        counts: dict[str, int] = {}
        for _, key in stamps:
            counts[self._names[key]] = counts.get(self._names[key], 0) + 1
        self._set_counts(counts)


def _is_cut(path: Path) -> bool:
    """Tell whether the file is shorter than its own header says."""
    with path.open('rb') as stream:
        head = stream.read(100)
    size = int.from_bytes(head[16:18], 'big')
    pages = int.from_bytes(head[28:32], 'big')
    # The count holds only if the version that wrote it is the one that changed the file last.
    valid = head[24:28] == head[92:96]
    page_size = 65536 if size == 1 else size
    wal = path.with_name(path.name + '-wal')
    has_log = wal.exists() and os.path.getsize(wal) > 0
    return valid and not has_log and os.path.getsize(path) < pages * page_size
