# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Recordings of other writers (rosbags, mcap, SQLite by hand) and of our own, read back."""

from __future__ import annotations

import sqlite3
import struct
import tracemalloc
from pathlib import Path

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from mcap.reader import make_reader
from mcap.writer import CompressionType
from mcap.writer import Writer as McapWriter
from mcap_ros2.writer import Writer as Ros2Writer
from rosbags.interfaces import (
    Qos,
    QosDurability,
    QosHistory,
    QosLiveliness,
    QosReliability,
    QosTime,
)
from rosbags.rosbag2 import CompressionFormat, CompressionMode, StoragePlugin, Writer
from rosbags.typesys import Stores, get_typestore

from teleop_eval.core.errors import RecordingError
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.qos_profiles import read_qos
from teleop_eval.sources.recording import open_recording

STRING = 'std_msgs/msg/String'
START = 1_700_000_000_000_000_000
STORE = get_typestore(Stores.ROS2_HUMBLE)
LATCHED = Qos(
    QosHistory.KEEP_LAST,
    1,
    QosReliability.RELIABLE,
    QosDurability.TRANSIENT_LOCAL,
    QosTime(1, 2),
    QosTime(3, 4),
    QosLiveliness.AUTOMATIC,
    QosTime(5, 6),
    False,
)


def cdr_string(text: str) -> bytes:
    """Write std_msgs/String by hand (OMG CDR)."""
    data = text.encode() + b'\0'
    return b'\x00\x01\x00\x00' + struct.pack('<I', len(data)) + data


def sample(count: int = 300) -> list[tuple[int, str, bytes]]:
    """Make messages in log-time order with equal stamps among them."""
    return [
        (START + (k // 3) * 10**6, f'/t{k % 2}', cdr_string(f'{k} ' + 'x' * (k % 50)))
        for k in range(count)
    ]


def read(path: Path, topics=None) -> list[tuple[int, str, bytes]]:
    with open_recording(path) as recording:
        return [tuple(message) for message in recording.messages(topics)]


def write_rosbags(
    folder: Path, items, *, version=9, plugin=StoragePlugin.MCAP, mode=CompressionMode.NONE
) -> None:
    writer = Writer(folder, version=version, storage_plugin=plugin)
    writer.set_compression(mode, CompressionFormat.ZSTD)
    with writer:
        known = {}
        for stamp, topic, data in items:
            if topic not in known:
                known[topic] = writer.add_connection(
                    topic, STRING, typestore=STORE, offered_qos_profiles=[LATCHED]
                )
            writer.write(known[topic], stamp, data)


def write_mcap(path: Path, items, **options) -> None:
    """Write messages in the order given with the `mcap` package."""
    with path.open('wb') as stream:
        writer = McapWriter(stream, **options)
        writer.start(profile='ros2')
        schema = writer.register_schema(STRING, 'ros2msg', b'string data')
        known = {}
        for stamp, topic, data in items:
            if topic not in known:
                known[topic] = writer.register_channel(topic, 'cdr', schema)
            writer.add_message(known[topic], stamp, data, stamp)
        writer.finish()


@pytest.mark.parametrize('version', [8, 9])
@pytest.mark.parametrize('plugin', [StoragePlugin.MCAP, StoragePlugin.SQLITE3])
@pytest.mark.parametrize(
    'mode',
    [CompressionMode.NONE, CompressionMode.FILE, CompressionMode.MESSAGE, CompressionMode.STORAGE],
)
def test_what_rosbags_writes(tmp_path, version, plugin, mode):
    if mode is CompressionMode.STORAGE and plugin is StoragePlugin.SQLITE3:
        pytest.skip('SQLite files have no compression of their own')
    items = sample()
    write_rosbags(tmp_path / 'bag', items, version=version, plugin=plugin, mode=mode)
    seen = []
    with open_recording(tmp_path / 'bag', progress=seen.append) as recording:
        assert [tuple(message) for message in recording.messages()] == items
        assert recording.notes == []
        assert (recording.start_ns, recording.end_ns) == (items[0][0], items[-1][0])
        assert recording.message_count == len(items)
        topic = recording.topics['/t0']
        assert (topic.type_name, topic.encoding, topic.message_count) == (STRING, 'cdr', 150)
        assert topic.definition_format == 'ros2msg' and 'string data' in topic.definition
        assert topic.qos[0]['durability'] == 'transient_local'
        assert topic.qos[0]['deadline'] == {'sec': 1, 'nsec': 2}
    assert seen and all(0 <= value <= 1 for value in seen) and seen[-1] == 1
    assert read(tmp_path / 'bag', ['/t1']) == [row for row in items if row[1] == '/t1']
    assert read(tmp_path / 'bag', ['/elsewhere']) == []


@pytest.mark.parametrize('version', [8, 9])
def test_qos_names_of_all_versions_agree_with_rosbags(tmp_path, version):
    """Every member of rosbags' own tables, through both notations."""
    profiles = []
    for enum, field in (
        (QosHistory, 'history'),
        (QosReliability, 'reliability'),
        (QosDurability, 'durability'),
        (QosLiveliness, 'liveliness'),
    ):
        profiles += [(field, member.name.lower(), LATCHED._replace(**{field: member}))
                     for member in enum]
    with Writer(tmp_path / 'bag', version=version, storage_plugin=StoragePlugin.MCAP) as writer:
        conn = writer.add_connection(
            '/t', STRING, typestore=STORE, offered_qos_profiles=[item[2] for item in profiles]
        )
        writer.write(conn, 1, cdr_string(''))
    with open_recording(tmp_path / 'bag') as recording:
        found = recording.topics['/t'].qos
    assert [qos[field] for qos, (field, _, _) in zip(found, profiles, strict=True)] == [
        name for _, name, _ in profiles
    ]


@pytest.mark.parametrize('text', ['', 'a: [', '- 3', '7', '[' * 5000, None, 3])
def test_hopeless_qos_is_empty(text):
    assert read_qos(text) == ()


@pytest.mark.parametrize('compression', list(CompressionType))
@pytest.mark.parametrize('chunking', [True, False])
@pytest.mark.parametrize('indexed', [True, False])
def test_what_the_mcap_package_writes(tmp_path, compression, chunking, indexed):
    options = {} if indexed else {
        'use_statistics': False, 'use_summary_offsets': False, 'repeat_channels': False,
        'repeat_schemas': False,
    }
    items = sample(2000)
    path = tmp_path / 'one.mcap'
    write_mcap(
        path, items, compression=compression, use_chunking=chunking, chunk_size=3000, **options
    )
    with open_recording(path) as recording:
        assert [tuple(message) for message in recording.messages()] == items
        assert recording.message_count == 2000 and recording.notes == []
        assert (recording.start_ns, recording.end_ns) == (items[0][0], items[-1][0])
        assert recording.topics['/t0'].definition == 'string data'


def test_what_mcap_ros2_writes(tmp_path):
    path = tmp_path / 'one.mcap'
    with path.open('wb') as stream:
        writer = Ros2Writer(stream)
        schema = writer.register_msgdef(STRING, 'string data')
        for k in range(50):
            writer.write_message('/t', schema, {'data': str(k)}, START + k, START + k)
        writer.finish()
    found = read(path)
    assert [STORE.deserialize_cdr(data, STRING).data for _, _, data in found] == [
        str(k) for k in range(50)
    ]


def test_what_we_write(tmp_path):
    items = sample()
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/t0', STRING)
        writer.add_topic('/t1', STRING)
        for stamp, topic, data in items:
            writer.write(topic, stamp, data)
    assert read(tmp_path / 'bag') == read(tmp_path / 'bag/bag_0.mcap') == items


@settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    stamps=st.lists(st.integers(0, 40), max_size=120),
    chunk_size=st.sampled_from([1, 200, 1000, 100_000]),
    chunking=st.booleans(),
)
def test_any_disorder_becomes_log_time_order(tmp_path_factory, stamps, chunk_size, chunking):
    """Stable: a plain stable sort of the file order is the rule, `mcap` is the witness."""
    path = tmp_path_factory.mktemp('order') / 'one.mcap'
    items = [(s, '/t0', cdr_string(str(n))) for n, s in enumerate(stamps)] or sample(1)
    write_mcap(path, items, chunk_size=chunk_size, use_chunking=chunking)
    found = read(path)
    assert found == sorted(items, key=lambda row: row[0])
    with path.open('rb') as stream:
        theirs = [(m.log_time, c.topic, m.data) for _, c, m in make_reader(stream).iter_messages()]
    assert sorted(theirs) == sorted(found) and [r[0] for r in theirs] == [r[0] for r in found]


# Statements of rosbag2's SQLite schema 1 and 2 (Foxy to Humble), without definitions.
OLD_TOPICS = {
    4: 'id INTEGER PRIMARY KEY, name TEXT NOT NULL, type TEXT NOT NULL, '
    'serialization_format TEXT NOT NULL',
    5: 'id INTEGER PRIMARY KEY, name TEXT NOT NULL, type TEXT NOT NULL, '
    'serialization_format TEXT NOT NULL, offered_qos_profiles TEXT NOT NULL',
}


@pytest.mark.parametrize('version', [4, 5])
@pytest.mark.parametrize('metadata', [True, False])
def test_sqlite_of_older_versions(tmp_path, version, metadata):
    folder = tmp_path / 'bag'
    folder.mkdir()
    items = [(stamp, '/t0', data) for stamp, _, data in sample(20)]
    shuffled = items[10:] + items[:10]
    base = sqlite3.connect(folder / 'bag_0.db3')
    base.execute(f'CREATE TABLE topics({OLD_TOPICS[version]})')
    base.execute(
        'CREATE TABLE messages(id INTEGER PRIMARY KEY, topic_id INTEGER NOT NULL, '
        'timestamp INTEGER NOT NULL, data BLOB NOT NULL)'
    )
    qos = '- history: 3\n  depth: 0\n  reliability: 2\n  durability: 2\n  liveliness: 1'
    row = (1, '/t0', STRING, 'cdr', qos)
    base.execute(f'INSERT INTO topics VALUES({",".join("?" * version)})', row[:version])
    base.executemany(
        'INSERT INTO messages(topic_id, timestamp, data) VALUES(1, ?, ?)',
        [(stamp, data) for stamp, _, data in shuffled],
    )
    base.commit()
    base.close()
    if metadata:
        topic = {'name': '/t0', 'type': STRING, 'serialization_format': 'cdr',
                 'offered_qos_profiles': qos}
        info = {
            'version': version, 'storage_identifier': 'sqlite3',
            'relative_file_paths': ['bag_0.db3'], 'message_count': 20,
            'duration': {'nanoseconds': 1}, 'starting_time': {'nanoseconds_since_epoch': 0},
            'topics_with_message_count': [{'topic_metadata': topic, 'message_count': 20}],
        }
        text = yaml.safe_dump({'rosbag2_bagfile_information': info})
        (folder / 'metadata.yaml').write_text(text)
    with open_recording(folder) as recording:
        assert [tuple(m) for m in recording.messages()] == sorted(
            shuffled, key=lambda item: item[0]
        )
        topic = recording.topics['/t0']
        assert topic.message_count == 20 and topic.definition_format == ''
        if metadata or version == 5:
            assert topic.qos[0]['reliability'] == 'best_effort'


def test_sqlite_left_with_its_log(tmp_path):
    """Rows that only the write-ahead log holds are read."""
    path = tmp_path / 'one.db3'
    write_rosbags(tmp_path / 'bag', sample(10), plugin=StoragePlugin.SQLITE3)
    (tmp_path / 'bag/bag.db3').rename(path)
    base = sqlite3.connect(path)
    base.execute('PRAGMA journal_mode=WAL')
    base.execute(
        'INSERT INTO messages(topic_id, timestamp, data) VALUES(1, ?, ?)',
        (START * 2, cdr_string('late')),
    )
    base.commit()
    assert read(path)[-1] == (START * 2, '/t0', cdr_string('late'))
    base.close()


def test_a_single_file_with_compressed_messages(tmp_path):
    """Only the metadata beside the file says that its messages are compressed."""
    items = sample(10)
    write_rosbags(tmp_path / 'bag', items, mode=CompressionMode.MESSAGE)
    assert read(tmp_path / 'bag/bag.mcap') == items


def test_other_encodings_are_refused_only_when_asked_for(tmp_path):
    path = tmp_path / 'one.mcap'
    with path.open('wb') as stream:
        writer = McapWriter(stream)
        writer.start()
        writer.add_message(writer.register_channel('/json', 'json', 0), 1, b'{}', 1)
        schema = writer.register_schema(STRING, 'ros2msg', b'string data')
        writer.add_message(writer.register_channel('/t', 'cdr', schema), 2, b'\0\1\0\0', 2)
        writer.finish()
    with open_recording(path) as recording:
        assert [m.topic for m in recording.messages()] == ['/t']
        assert 'encoding' in recording.notes[0]
        assert [m.topic for m in recording.messages(['/t'])] == ['/t']
        with pytest.raises(RecordingError, match="/json .* encoding 'json'"):
            recording.messages(['/json'])


def test_a_topic_with_two_types_gives_the_first(tmp_path):
    path = tmp_path / 'one.mcap'
    with path.open('wb') as stream:
        writer = McapWriter(stream)
        writer.start()
        for name in (STRING, 'std_msgs/msg/Bool'):
            schema = writer.register_schema(name, 'ros2msg', b'')
            writer.add_message(writer.register_channel('/t', 'cdr', schema), 1, name.encode(), 1)
        writer.finish()
    with open_recording(path) as recording:
        assert [m.data.decode() for m in recording.messages()] == [STRING]
        assert 'occurs as std_msgs/msg/String and as std_msgs/msg/Bool' in recording.notes[0]


BOOL = 'std_msgs/msg/Bool'


@pytest.mark.parametrize('plugin', list(StoragePlugin))
@pytest.mark.parametrize('files', [
    [(STRING, BOOL), (BOOL, STRING)], [(STRING, BOOL), (STRING,)], [(STRING,), (BOOL,)]])
def test_a_type_that_changes_between_or_within_files_is_named(tmp_path, plugin, files):
    """Two topics of one name within a file, and from one file to the next."""
    for k, order in enumerate(files):
        with Writer(tmp_path / f'bag{k}', version=9, storage_plugin=plugin) as writer:
            for number, name in enumerate(order):
                connection = writer.add_connection('/t', name, typestore=STORE)
                for _ in range(1 + number):
                    writer.write(connection, START + k, name.encode())
    (tmp_path / 'split').mkdir()
    for k in range(2):
        [file] = [path for path in (tmp_path / f'bag{k}').iterdir() if path.suffix != '.yaml']
        file.rename(tmp_path / 'split' / f'split_{k}{file.suffix}')
    with open_recording(tmp_path / 'split') as recording:
        topic = recording.topics['/t']
        assert (topic.type_name, topic.others) == (STRING, (BOOL,))
        read = [m.data.decode() for m in recording.messages()]
        assert set(read) == {STRING}
        assert topic.message_count == len(read)
        assert [note for note in recording.notes if 'occurs' in note] == [
            'Topic /t of split occurs as std_msgs/msg/String and as std_msgs/msg/Bool; only the '
            'first is read.']


@pytest.mark.parametrize('plugin', ['mcap', 'unindexed', 'sqlite3'])
def test_memory_does_not_grow_with_the_recording(tmp_path, plugin):
    """Peak of Python's allocations while iterating; eight times the length, same peak."""

    def peak(count: int) -> int:
        items = ((START + k * 1000, '/t', bytes(400)) for k in range(count))
        folder = tmp_path / f'{count}'
        if plugin == 'sqlite3':
            write_rosbags(folder, items, plugin=StoragePlugin.SQLITE3)
            path = folder
        else:
            path = folder.with_suffix('.mcap')
            write_mcap(path, items, chunk_size=100_000, use_chunking=plugin == 'mcap')
        with open_recording(path) as recording:
            tracemalloc.start()
            assert sum(1 for _ in recording.messages()) == count
            value = tracemalloc.get_traced_memory()[1]
            tracemalloc.stop()
        return value

    short, long = peak(6000), peak(48_000)
    assert long < 1.2 * short + 100_000
