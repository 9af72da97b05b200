# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Folders of several files, and folders whose metadata.yaml is missing, wrong or too new."""

from __future__ import annotations

import struct
from pathlib import Path

import pytest
import yaml
from mcap.writer import Writer as McapWriter
from rosbags.rosbag2 import StoragePlugin, Writer
from rosbags.typesys import Stores, get_typestore

from teleop_eval.sources.recording import open_recording

STRING = 'std_msgs/msg/String'
START = 1_700_000_000_000_000_000


def sample(count: int) -> list[tuple[int, str, bytes]]:
    """Make messages in log-time order with equal stamps among them."""
    return [
        (START + (k // 3) * 10**6, f'/t{k % 2}', b'\0\1\0\0' + struct.pack('<I', k))
        for k in range(count)
    ]


def read(path: Path) -> list[tuple[int, str, bytes]]:
    with open_recording(path) as recording:
        return [tuple(message) for message in recording.messages()]


def write_mcap(path: Path, items) -> None:
    with path.open('wb') as stream:
        writer = McapWriter(stream)
        writer.start(profile='ros2')
        schema = writer.register_schema(STRING, 'ros2msg', b'string data')
        known = {}
        for stamp, topic, data in items:
            if topic not in known:
                known[topic] = writer.register_channel(topic, 'cdr', schema)
            writer.add_message(known[topic], stamp, data, stamp)
        writer.finish()


def split_folder(folder: Path, parts, *, metadata: bool, name='part_{}.mcap') -> None:
    """Make a bag of several files by hand, version 5 as Humble writes it."""
    folder.mkdir()
    names = [name.format(number) for number in range(len(parts))]
    for file_name, items in zip(names, parts, strict=True):
        write_mcap(folder / file_name, items)
    if metadata:
        info = {
            'version': 5, 'storage_identifier': 'mcap', 'relative_file_paths': names,
            'duration': {'nanoseconds': 0}, 'starting_time': {'nanoseconds_since_epoch': 0},
            'message_count': 0, 'topics_with_message_count': [], 'compression_format': '',
            'compression_mode': '', 'files': [],
        }
        text = yaml.safe_dump({'rosbag2_bagfile_information': info})
        (folder / 'metadata.yaml').write_text(text)


@pytest.mark.parametrize('metadata', [True, False])
def test_split_files_in_natural_order(tmp_path, metadata):
    items = sample(1200)
    parts = [items[100 * k : 100 * k + 100] for k in range(12)]
    split_folder(tmp_path / 'bag', parts, metadata=metadata)
    with open_recording(tmp_path / 'bag') as recording:
        assert [tuple(message) for message in recording.messages()] == items
        assert recording.topics['/t1'].message_count == 600
        assert (len(recording.notes) == 0) == metadata


def test_split_files_that_overlap(tmp_path):
    items = sample(900)
    parts = [items[0:300:2], items[1:300:2] + items[300:600:3], items[301:600:3] + items[302:600:3]
             + items[600:]]
    split_folder(tmp_path / 'bag', parts, metadata=True)
    flat = [row for part in parts for row in part]
    assert read(tmp_path / 'bag') == sorted(flat, key=lambda row: row[0])


def test_metadata_that_names_other_files(tmp_path):
    items = sample(10)
    split_folder(tmp_path / 'bag', [items], metadata=True)
    (tmp_path / 'bag/part_0.mcap').rename(tmp_path / 'bag/renamed.mcap')
    with open_recording(tmp_path / 'bag') as recording:
        assert [tuple(message) for message in recording.messages()] == items
        (note,) = recording.notes
    assert 'names other files than are there (part_0.mcap)' in note


ROOT_KEY = 'rosbag2_bagfile_information: '


@pytest.mark.parametrize(
    'text',
    [
        '',
        'a',
        '[]',
        'a: &a [*a]',
        '\x00',
        '{' * 3000,
        '!!python/object:os.system {}',
        ROOT_KEY + '3',
        ROOT_KEY + '{topics_with_message_count: [{}]}',
        ROOT_KEY + '{topics_with_message_count: [{topic_metadata: x}]}',
        ROOT_KEY + '{version: [1]}',
    ],
)
def test_unusable_metadata_is_noted(tmp_path, text):
    items = sample(10)
    split_folder(tmp_path / 'bag', [items], metadata=False)
    (tmp_path / 'bag/metadata.yaml').write_text(text)
    with open_recording(tmp_path / 'bag') as recording:
        assert [tuple(message) for message in recording.messages()] == items
        assert 'metadata.yaml of bag is not usable' in recording.notes[0]
        assert '\n' not in recording.notes[0]


def test_newer_metadata_is_read_as_far_as_known(tmp_path):
    items = sample(10)
    store = get_typestore(Stores.ROS2_HUMBLE)
    with Writer(tmp_path / 'bag', version=9, storage_plugin=StoragePlugin.MCAP) as writer:
        known = {t: writer.add_connection(t, STRING, typestore=store) for t in ('/t0', '/t1')}
        for stamp, topic, data in items:
            writer.write(known[topic], stamp, data)
    path = tmp_path / 'bag/metadata.yaml'
    path.write_text(path.read_text().replace('version: 9', 'version: 12'))
    with open_recording(tmp_path / 'bag') as recording:
        assert [tuple(message) for message in recording.messages()] == items
        assert 'version 12, newer than 9' in recording.notes[0]
