# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Damaged and wrong recordings: what is whole is delivered, the rest is one sentence."""

from __future__ import annotations

import os
import random
import struct
import sys
from pathlib import Path

import pytest
import zstandard
from mcap.reader import make_reader
from mcap.writer import CompressionType
from mcap.writer import Writer as McapWriter
from rosbags.rosbag2 import CompressionFormat, CompressionMode, StoragePlugin, Writer
from rosbags.typesys import Stores, get_typestore

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources.recording import open_recording

STRING = 'std_msgs/msg/String'
STORE = get_typestore(Stores.ROS2_HUMBLE)
# Text that does not compress well, so that a cut falls inside it and not into padding.
CHANCE = random.Random(3)
ITEMS = [(1000 + k, '/t', b'\0\1\0\0' + CHANCE.randbytes(60)) for k in range(1500)]


def write_mcap(path: Path, **options) -> bytes:
    with path.open('wb') as stream:
        writer = McapWriter(stream, **options)
        writer.start(profile='ros2')
        channel = writer.register_channel(
            '/t', 'cdr', writer.register_schema(STRING, 'ros2msg', b'string data')
        )
        for stamp, _, data in ITEMS:
            writer.add_message(channel, stamp, data, stamp)
        writer.finish()
    return path.read_bytes()


def write_rosbags(folder: Path, **compression) -> None:
    writer = Writer(folder, version=9, storage_plugin=StoragePlugin.SQLITE3)
    if compression:
        writer.set_compression(**compression)
    with writer:
        conn = writer.add_connection('/t', STRING, typestore=STORE)
        for stamp, _, data in ITEMS:
            writer.write(conn, stamp, data)


def read(path: Path) -> tuple[list[tuple[int, str, bytes]], list[str]]:
    with open_recording(path) as recording:
        found = [tuple(message) for message in recording.messages()]
        assert all(note.endswith('.') and '\n' not in note for note in recording.notes)
        return found, recording.notes


def chunk_places(path: Path) -> list[tuple[int, int, int]]:
    """Return offset, length and first log time of each chunk, from the `mcap` package."""
    with path.open('rb') as stream:
        return [
            (c.chunk_start_offset, c.chunk_length, c.message_start_time)
            for c in make_reader(stream).get_summary().chunk_indexes
        ]


@pytest.mark.parametrize('share', [0.05, 0.31, 0.5, 0.77, 0.97])
@pytest.mark.parametrize('compression', list(CompressionType))
def test_a_cut_mcap_gives_all_messages_before_the_cut(tmp_path, compression, share):
    path = tmp_path / 'cut.mcap'
    whole = write_mcap(path, compression=compression, chunk_size=5000)
    cut = int(len(whole) * share)
    complete = sum(1 for offset, length, _ in chunk_places(path) if offset + length <= cut)
    starts = [(start - 1000) for _, _, start in chunk_places(path)] + [len(ITEMS)]
    path.write_bytes(whole[:cut])
    found, notes = read(path)
    assert found == ITEMS[: len(found)]
    assert starts[complete] <= len(found) <= starts[min(complete + 1, len(starts) - 1)]
    assert 'ends early' in notes[0]


@pytest.mark.parametrize('chunking', [True, False])
def test_a_cut_at_any_byte_of_plain_records(tmp_path, chunking):
    """Exact without compression: a message is there if its last byte is."""
    path = tmp_path / 'cut.mcap'
    whole = write_mcap(
        path, compression=CompressionType.NONE, use_chunking=chunking, chunk_size=3000
    )
    ends = []
    for _, _, data in ITEMS[:200]:
        ends.append(whole.index(data) + len(data))
    first_end = ends[0]
    for cut in list(range(first_end - 2, first_end + 70)) + random.Random(5).sample(
        range(first_end, ends[-1]), 40
    ):
        path.write_bytes(whole[:cut])
        expected = sum(end <= cut for end in ends)
        found, notes = read(path)
        assert len(found) == expected and found == ITEMS[:expected] and notes


@pytest.mark.parametrize('compression', list(CompressionType))
def test_a_damaged_chunk_is_left_out_and_named(tmp_path, compression):
    path = tmp_path / 'bad.mcap'
    data = bytearray(write_mcap(path, compression=compression, chunk_size=5000))
    offset, length, first = chunk_places(path)[3]
    following = chunk_places(path)[4][2]
    data[offset + length // 2] ^= 0x55
    path.write_bytes(data)
    found, notes = read(path)
    assert found == [row for row in ITEMS if not first <= row[0] < following]
    assert f'byte {offset}' in notes[0] and 'left out' in notes[0]
    # The same without a summary that could help.
    path.write_bytes(data[:-60])
    again, notes = read(path)
    assert again == found and len(notes) == 2


def test_random_damage_never_shows_as_a_traceback(tmp_path):
    path = tmp_path / 'bad.mcap'
    whole = write_mcap(path, chunk_size=20_000)
    chance = random.Random(11)
    for _ in range(150):
        data = bytearray(whole)
        for _ in range(chance.choice([1, 1, 3, 30])):
            data[chance.randrange(len(data))] = chance.randrange(256)
        path.write_bytes(data[: chance.choice([len(data), chance.randrange(len(data))])])
        try:
            found, _ = read(path)
        except RecordingError as error:
            assert '\n' not in str(error)
        else:
            assert len(found) <= len(ITEMS)


def test_random_damage_of_a_database_never_shows_as_a_traceback(tmp_path):
    write_rosbags(tmp_path / 'bag')
    path = tmp_path / 'bag/bag.db3'
    whole = path.read_bytes()
    chance = random.Random(12)
    for _ in range(150):
        data = bytearray(whole)
        for _ in range(chance.choice([1, 5, 50])):
            data[chance.randrange(len(data))] = chance.randrange(256)
        path.write_bytes(data[: chance.choice([len(data), chance.randrange(len(data))])])
        try:
            read(tmp_path / 'bag')
        except RecordingError as error:
            assert '\n' not in str(error)


@pytest.mark.parametrize('share', [0.2, 0.5, 0.9])
def test_a_cut_database_gives_the_complete_rows(tmp_path, share):
    write_rosbags(tmp_path / 'bag')
    path = tmp_path / 'bag/bag.db3'
    whole = path.read_bytes()
    pages = int(len(whole) / 4096 * share)
    path.write_bytes(whole[: pages * 4096 + 1000])
    found, notes = read(tmp_path / 'bag')
    # Every row whose bytes are in a page before the cut, found by searching for them; the
    # index holds stamps, not data.
    kept = whole[: pages * 4096]
    assert found == [row for row in ITEMS if row[2] in kept]
    assert len(found) > 100 * share and 'ends early' in notes[0]


def test_a_cut_database_with_large_messages(tmp_path):
    """Rows that span overflow pages are whole or absent."""
    rows = [(k, '/t', b'\0\1\0\0' + CHANCE.randbytes(9000 + k)) for k in range(60)]
    with Writer(tmp_path / 'bag', version=9, storage_plugin=StoragePlugin.SQLITE3) as writer:
        conn = writer.add_connection('/t', STRING, typestore=STORE)
        for stamp, _, data in rows:
            writer.write(conn, stamp, data)
    path = tmp_path / 'bag/bag.db3'
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    found, notes = read(path)
    assert 10 < len(found) < 60 and found == rows[: len(found)] and notes


def test_one_damaged_file_of_several_is_left_out(tmp_path):
    folder = tmp_path / 'bag'
    folder.mkdir()
    write_mcap(folder / 'a_0.mcap')
    (folder / 'a_1.mcap').write_bytes(b'')
    found, notes = read(folder)
    assert found == ITEMS and any('a_1.mcap is empty' in note for note in notes)


@pytest.mark.parametrize('plugin', [StoragePlugin.MCAP, StoragePlugin.SQLITE3])
def test_cut_compressed_file(tmp_path, plugin):
    rows = [(k, '/t', b'\0\1\0\0' + CHANCE.randbytes(5000)) for k in range(400)]
    writer = Writer(tmp_path / 'bag', version=9, storage_plugin=plugin)
    writer.set_compression(CompressionMode.FILE, CompressionFormat.ZSTD)
    with writer:
        conn = writer.add_connection('/t', STRING, typestore=STORE)
        for stamp, _, data in rows:
            writer.write(conn, stamp, data)
    path = next((tmp_path / 'bag').glob('*.zstd'))
    path.write_bytes(path.read_bytes()[: path.stat().st_size * 2 // 3])
    found, notes = read(tmp_path / 'bag')
    assert 230 < len(found) < 280 and found == rows[: len(found)]
    assert 'compressed data is cut' in notes[0]


def test_damaged_compressed_message_is_left_out(tmp_path):
    path = tmp_path / 'bag' / 'bag_0.mcap'
    path.parent.mkdir()
    good = zstandard.ZstdCompressor().compress(b'\0\1\0\0good')
    with path.open('wb') as stream:
        writer = McapWriter(stream)
        writer.start()
        channel = writer.register_channel('/t', 'cdr', writer.register_schema(STRING, '', b''))
        for stamp, data in enumerate([good, b'bad', good], 1):
            writer.add_message(channel, stamp, data, stamp)
        writer.finish()
    (path.parent / 'metadata.yaml').write_text(
        'rosbag2_bagfile_information: {version: 5, relative_file_paths: [bag_0.mcap], '
        'compression_mode: MESSAGE, compression_format: zstd}'
    )
    found, notes = read(path.parent)
    assert [row[0] for row in found] == [1, 3] and 'cannot be decompressed' in notes[0]


def test_unknown_chunk_compression(tmp_path):
    path = tmp_path / 'one.mcap'
    data = write_mcap(path, compression=CompressionType.ZSTD, chunk_size=5000)
    path.write_bytes(data.replace(b'\x04\0\0\0zstd', b'\x04\0\0\0rare'))
    found, notes = read(path)
    assert found == [] and "unknown compression 'rare'" in notes[0]


def test_a_record_that_states_an_absurd_length(tmp_path):
    path = tmp_path / 'one.mcap'
    data = write_mcap(path)[:30] + struct.pack('<BQ', 6, 2**63) + bytes(200)
    path.write_bytes(data)
    with pytest.raises(RecordingError, match='no topic that can be read'):
        open_recording(path)


@pytest.mark.parametrize(
    ('name', 'content', 'text'),
    [
        ('a.mcap', b'', 'is empty'),
        ('a.db3', b'', 'is empty'),
        ('a.mcap', b'\x89MCAP0\r\n', 'no topic that can be read'),
        ('a.mcap', b'MCAP-something-else', 'neither an MCAP file nor an SQLite database'),
        ('a.bag', b'#ROSBAG V2.0\n....', 'ROS 1 bag'),
        ('a.db3', b'SQLite format 3\0' + bytes(50), 'cannot be read as a rosbag2 database'),
        ('a.txt', b'hello', 'neither an MCAP file nor an SQLite database'),
        ('a.mcap.zstd', b'\x28\xb5\x2f\xfdnonsense', 'cut or damaged'),
    ],
)
def test_wrong_files(tmp_path, name, content, text):
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(RecordingError, match=text) as caught:
        open_recording(path)
    assert str(path).removesuffix('.zstd') in str(caught.value)
    assert '\n' not in str(caught.value)


def test_wrong_folders(tmp_path):
    (tmp_path / 'empty').mkdir()
    with pytest.raises(RecordingError, match='is empty; give the folder'):
        open_recording(tmp_path / 'empty')
    with pytest.raises(RecordingError, match='There is no recording'):
        open_recording(tmp_path / 'absent')
    (tmp_path / 'session/inputs').mkdir(parents=True)
    (tmp_path / 'session/report.html').write_text('x')
    with pytest.raises(RecordingError, match='holds no .mcap or .db3 file'):
        open_recording(tmp_path / 'session')
    write_mcap(tmp_path / 'session/inputs/inputs_0.mcap')
    with pytest.raises(RecordingError, match='such as .*session/inputs'):
        open_recording(tmp_path / 'session')


def test_a_database_that_is_no_recording(tmp_path):
    import sqlite3

    base = sqlite3.connect(tmp_path / 'a.db3')
    base.execute('CREATE TABLE other(x)')
    base.commit()
    base.close()
    with pytest.raises(RecordingError, match='no tables "topics" and "messages"'):
        open_recording(tmp_path / 'a.db3')


def test_unknown_compression_format(tmp_path):
    write_mcap(tmp_path / 'a_0.mcap')
    (tmp_path / 'metadata.yaml').write_text(
        'rosbag2_bagfile_information: {version: 5, relative_file_paths: [a_0.mcap], '
        'compression_mode: FILE, compression_format: rare}'
    )
    with pytest.raises(RecordingError, match="'rare', and only zstd is known"):
        open_recording(tmp_path)


@pytest.mark.skipif(
    sys.platform == 'win32' or os.geteuid() == 0, reason='the superuser may read everything'
)
def test_a_file_without_permission(tmp_path):
    write_mcap(tmp_path / 'a.mcap')
    (tmp_path / 'a.mcap').chmod(0)
    with pytest.raises(RecordingError, match='Permission denied'):
        open_recording(tmp_path / 'a.mcap')
