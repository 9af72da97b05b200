# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The recorder, read back by the `mcap` package, rosbags and our own reader."""

from __future__ import annotations

import errno
import os
import struct
import subprocess
from pathlib import Path

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from mcap.reader import make_reader
from mcap.records import Message as McapMessage
from mcap.stream_reader import StreamReader
from rosbags.highlevel import AnyReader
from rosbags.interfaces import QosDurability, QosReliability
from rosbags.typesys import Stores, get_typestore

from teleop_eval.core.errors import OutputError
from teleop_eval.sinks import bag_writer
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.recording import open_recording

STRING = 'std_msgs/msg/String'
JOINTS = 'sensor_msgs/msg/JointState'
START = 1_700_000_000_000_000_000


def cdr_string(text: str) -> bytes:
    """Write std_msgs/String by hand (OMG CDR: 4-byte header, length with NUL, text, NUL)."""
    data = text.encode() + b'\0'
    return b'\x00\x01\x00\x00' + struct.pack('<I', len(data)) + data


def read_all(folder: Path, *, settled: bool = True) -> dict[str, list[tuple[int, str, bytes]]]:
    """
    Read a folder with four readers, of which three are not ours.

    Between the writes of a commit (not `settled`) the totals may lag behind the messages.
    """
    path = next(folder.glob('*.mcap'))
    result = {}
    with path.open('rb') as stream:
        reader = make_reader(stream, validate_crcs=True)
        result['mcap'] = [(m.log_time, c.topic, m.data) for _, c, m in reader.iter_messages()]
        stated = reader.get_summary().statistics.message_count
        assert stated == len(result['mcap']) or not settled and stated < len(result['mcap'])
    with path.open('rb') as stream:
        channels, linear = {}, []
        for item in StreamReader(stream, validate_crcs=True).records:
            if isinstance(item, McapMessage):
                linear.append((item.log_time, channels[item.channel_id], item.data))
            elif hasattr(item, 'message_encoding'):
                channels[item.id] = item.topic
        result['linear'] = linear
    with AnyReader([folder]) as reader:
        result['rosbags'] = [(t, c.topic, bytes(d)) for c, t, d in reader.messages()]
        if result['rosbags']:
            assert reader.start_time == result['rosbags'][0][0]
    with open_recording(folder) as recording:
        result['ours'] = [tuple(m) for m in recording.messages()]
        assert recording.notes == []
    return result


def rows(count: int, *, first: int = 0) -> list[tuple[str, int, bytes]]:
    return [(f'/t{k % 2}', START + k * 10**6, cdr_string(f'{k}')) for k in range(first, count)]


def expected(items: list[tuple[str, int, bytes]]) -> list[tuple[int, str, bytes]]:
    return [(stamp, topic, data) for topic, stamp, data in items]


def new_writer(folder: Path, **options) -> BagWriter:
    writer = BagWriter(folder, **options)
    writer.add_topic('/t0', STRING)
    writer.add_topic('/t1', STRING)
    return writer


def test_all_readers_agree_live_and_closed(tmp_path):
    items = rows(500)
    writer = new_writer(tmp_path / 'bag')
    writer.write_many(items[:300])
    writer.flush()
    for name, found in read_all(tmp_path / 'bag').items():
        assert found == expected(items[:300]), name
    writer.write_many(items[300:])
    writer.close()
    for name, found in read_all(tmp_path / 'bag').items():
        assert found == expected(items), name
    assert sorted(p.name for p in (tmp_path / 'bag').iterdir()) == ['bag_0.mcap', 'metadata.yaml']


def test_messages_decode_to_what_was_written(tmp_path):
    store = get_typestore(Stores.ROS2_KILTED)
    types = store.types
    header = types['std_msgs/msg/Header'](types['builtin_interfaces/msg/Time'](7, 8), 'base')
    import numpy as np

    state = types[JOINTS](header, ['a', 'b'], np.array([0.25, -1.5]), np.zeros(0), np.zeros(0))
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/joints', JOINTS)
        writer.add_topic('/text', STRING)
        writer.write('/joints', START, bytes(store.serialize_cdr(state, JOINTS)))
        writer.write('/text', START, cdr_string('grüße'))
    with AnyReader([tmp_path / 'bag']) as reader:
        found = {c.topic: reader.deserialize(d, c.msgtype) for c, _, d in reader.messages()}
        # rosbags compares the definition with the hash when it opens the bag.
        assert {c.digest for c in reader.connections} == {
            store.hash_rihs01(JOINTS),
            store.hash_rihs01(STRING),
        }
    assert found['/text'].data == 'grüße'
    assert list(found['/joints'].position) == [0.25, -1.5]
    assert found['/joints'].header.stamp.nanosec == 8


def test_metadata_has_what_rosbag2_requires_of_version_9(tmp_path):
    """Keys and forms: github.com/ros2/rosbag2 `bag_metadata.hpp`, `yaml.hpp`, `qos.cpp`."""
    custom = {'config': 'a: "b"\nc: ü\x7f\u2028 \\ {x}', 'k:': ''}
    with BagWriter(tmp_path / 'bag', custom_data=custom) as writer:
        writer.add_topic('/t0', STRING, qos=[{'durability': 'transient_local', 'depth': 1}])
        writer.add_topic('/silent', STRING)
        writer.write('/t0', START, cdr_string('x'))
        writer.write('/t0', START + 5, cdr_string('y'))
    info = yaml.safe_load((tmp_path / 'bag/metadata.yaml').read_text())[
        'rosbag2_bagfile_information'
    ]
    assert info['version'] == 9 and info['storage_identifier'] == 'mcap'
    assert info['duration'] == {'nanoseconds': 5}
    assert info['starting_time'] == {'nanoseconds_since_epoch': START}
    assert info['message_count'] == 2
    assert info['relative_file_paths'] == ['bag_0.mcap']
    assert info['compression_format'] == info['compression_mode'] == ''
    assert info['files'] == [
        {
            'path': 'bag_0.mcap',
            'starting_time': {'nanoseconds_since_epoch': START},
            'duration': {'nanoseconds': 5},
            'message_count': 2,
        }
    ]
    assert info['custom_data'] == custom and 'ros_distro' in info
    topics = {t['topic_metadata']['name']: t for t in info['topics_with_message_count']}
    assert topics['/t0']['message_count'] == 2 and topics['/silent']['message_count'] == 0
    meta = topics['/t0']['topic_metadata']
    assert meta['type'] == STRING and meta['serialization_format'] == 'cdr'
    assert meta['type_description_hash'].startswith('RIHS01_')
    assert meta['offered_qos_profiles'][0]['durability'] == 'transient_local'
    with AnyReader([tmp_path / 'bag']) as reader:
        qos = next(c for c in reader.connections if c.topic == '/t0').ext.offered_qos_profiles[0]
        assert qos.durability is QosDurability.TRANSIENT_LOCAL and qos.depth == 1
        assert qos.reliability is QosReliability.RELIABLE
        assert reader.duration == 6  # rosbags counts one nanosecond more than the span


def test_metadata_is_also_in_the_closed_file(tmp_path):
    with new_writer(tmp_path / 'bag') as writer:
        writer.write_many(rows(3))
    with (tmp_path / 'bag/bag_0.mcap').open('rb') as stream:
        reader = make_reader(stream)
        (stored,) = reader.iter_metadata()
        assert reader.get_header().profile == 'ros2'
    assert stored.name == 'rosbag2'
    inner = yaml.safe_load(stored.metadata['serialized_metadata'])
    outer = yaml.safe_load((tmp_path / 'bag/metadata.yaml').read_text())
    assert inner == outer['rosbag2_bagfile_information']


def test_equal_and_decreasing_log_times_are_kept(tmp_path):
    items = [('/t0', START + d, cdr_string(str(n))) for n, d in enumerate([0, 0, 9, 3, 3, 10])]
    with new_writer(tmp_path / 'bag') as writer:
        writer.write_many(items)
    ordered = sorted(expected(items), key=lambda row: row[0])
    found = read_all(tmp_path / 'bag')
    assert found['ours'] == found['mcap'] == found['rosbags'] == ordered
    assert found['linear'] == expected(items)


@settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    plan=st.lists(
        st.tuples(st.sampled_from(['write', 'flush', 'topic']), st.integers(0, 200_000)),
        max_size=25,
    )
)
def test_any_order_of_calls_gives_a_whole_file(tmp_path_factory, plan):
    """Sizes cross pages, chunks and the reserved space; topics come at any moment."""
    folder = tmp_path_factory.mktemp('any') / 'bag'
    writer = new_writer(folder, commit_interval_s=1e9)
    items, topics = [], ['/t0', '/t1']
    for number, (action, size) in enumerate(plan):
        if action == 'topic':
            topics.append(f'/more{number}')
            writer.add_topic(topics[-1], STRING)
        elif action == 'write':
            items.append((topics[size % len(topics)], START + number, cdr_string('x' * size)))
            writer.write(*items[-1])
        else:
            writer.flush()
            found = read_all(folder)
            assert all(value == expected(items) for value in found.values())
    writer.close()
    assert all(value == expected(items) for value in read_all(folder).values())


def test_a_long_recording_moves_its_tail_often(tmp_path, monkeypatch):
    from teleop_eval.sinks import mcap_file

    monkeypatch.setattr(mcap_file, '_MIN_SPACE', 2000)
    monkeypatch.setattr(mcap_file, '_INDEX_SPACE', 700)
    items = rows(3000)
    writer = new_writer(tmp_path / 'bag', commit_interval_s=1e9)
    for number, row in enumerate(items):
        writer.write(*row)
        if number % 7 == 0:
            writer.flush()
    writer.flush()
    assert all(found == expected(items) for found in read_all(tmp_path / 'bag').values())
    writer.close()
    assert all(found == expected(items) for found in read_all(tmp_path / 'bag').values())


def test_a_type_without_known_definition_is_recorded(tmp_path):
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/own', 'lab_msgs/msg/Own')
        writer.add_topic('/given', 'lab_msgs/msg/Given', definition='int32 data\n')
        writer.write('/own', START, b'\x00\x01\x00\x00\x01')
        writer.write('/given', START + 1, b'\x00\x01\x00\x00\x07\x00\x00\x00')
    with open_recording(tmp_path / 'bag') as recording:
        assert recording.topics['/own'].definition_format == ''
        assert recording.topics['/given'].definition == 'int32 data\n'
    with AnyReader([tmp_path / 'bag']) as reader:
        conn = [c for c in reader.connections if c.topic == '/given']
        ((_, _, data),) = reader.messages(conn)
        assert reader.deserialize(data, 'lab_msgs/msg/Given').data == 7


def test_what_cannot_be_recorded_is_said(tmp_path):
    (tmp_path / 'full').mkdir()
    (tmp_path / 'full/notes.txt').write_text('x')
    with pytest.raises(OutputError, match='not empty'):
        BagWriter(tmp_path / 'full')
    (tmp_path / 'file').write_text('x')
    with pytest.raises(OutputError, match='Cannot write the recording'):
        BagWriter(tmp_path / 'file' / 'bag')
    (tmp_path / 'empty').mkdir()
    with new_writer(tmp_path / 'empty') as writer:
        with pytest.raises(OutputError, match='/unknown was not announced'):
            writer.write('/unknown', 1, b'')
        with pytest.raises(OutputError, match='already recorded as std_msgs/msg/String'):
            writer.add_topic('/t0', JOINTS)
    with pytest.raises(OutputError, match='is closed'):
        writer.write('/t0', 1, b'')


@pytest.mark.parametrize('partial', [False, True])
def test_a_full_disk_at_any_write_loses_nothing(tmp_path, monkeypatch, partial):
    """Each write in turn is refused once; everything is there exactly once in the end."""
    from teleop_eval.sinks import mcap_file

    monkeypatch.setattr(mcap_file, '_MIN_SPACE', 4000)
    monkeypatch.setattr(mcap_file, '_INDEX_SPACE', 1500)
    real = os.pwrite

    def run(folder: Path, refuse: int) -> tuple[int, int]:
        calls = [0]

        def pwrite(fd, data, place):
            calls[0] += 1
            if calls[0] == refuse:
                if partial and len(data) > 40:
                    real(fd, data[: len(data) // 2], place)
                raise OSError(errno.ENOSPC, 'No space left on device')
            return real(fd, data, place)

        monkeypatch.setattr(os, 'pwrite', pwrite)
        failures = 0
        writer, items = None, []
        while writer is None:
            try:
                writer = new_writer(folder, commit_interval_s=1e9)
            except OutputError:
                failures += 1
        for part in range(4):
            more = rows(40 * part + 40, first=40 * part)
            writer.write_many(more)
            items += more
            if part == 2:
                writer.add_topic('/late', STRING)
            try:
                writer.flush()
            except OutputError as error:
                failures += 1
                assert 'No space left' in str(error) and writer.note
                committed = writer.message_count
                for found in read_all(folder, settled=False).values():
                    assert found == expected(items)[: len(found)]
                    assert len(found) >= len(items) - 40
                assert committed >= len(items) - 40
                writer.flush()
        try:
            writer.close()
        except OutputError:
            # What a closing that was refused leaves is a whole recording too.
            failures += 1
        assert all(found == expected(items) for found in read_all(folder).values())
        return calls[0], failures

    total, failures = run(tmp_path / 'plain', 0)
    assert failures == 0
    for refuse in range(1, total + 1):
        assert run(tmp_path / f'refuse{refuse}', refuse)[1] == 1


def test_a_full_file_system_keeps_what_was_committed(tmp_path):
    mount = tmp_path / 'small'
    mount.mkdir()
    command = ['mount', '-t', 'tmpfs', '-o', 'size=1m', 'tmpfs', str(mount)]
    try:
        done = subprocess.run(command, capture_output=True, text=True)
    except OSError as error:
        pytest.skip(f'cannot mount a small file system: {error}')
    if done.returncode:
        pytest.skip(f'cannot mount a small file system: {done.stderr.strip()}')
    try:
        writer = new_writer(mount / 'bag', commit_interval_s=1e9)
        items, refused = [], None
        for number in range(400):
            items.append(('/t0', START + number, cdr_string('x' * 10_000)))
            writer.write(*items[-1])
            try:
                writer.flush()
            except OutputError as error:
                refused = refused or error
        assert refused is not None and 'No space left on device' in str(refused)
        committed = writer.message_count
        assert 0 < committed < 400 and writer.queued == 400 - committed
        for found in read_all(mount / 'bag').values():
            assert found == expected(items[:committed])
        with pytest.raises(OutputError):
            writer.close()
        for found in read_all(mount / 'bag').values():
            assert found == expected(items[:committed])
    finally:
        subprocess.run(['umount', str(mount)], check=False)


def test_the_queue_is_bounded_and_counts_what_it_drops(tmp_path, monkeypatch):
    monkeypatch.setattr(bag_writer, 'MAX_QUEUED_BYTES', 10_000)
    writer = new_writer(tmp_path / 'bag', commit_interval_s=1e9)
    items = rows(200)
    writer.write_many(items)
    kept = writer.queued
    assert 0 < kept < 200 and writer.dropped == 200 - kept
    writer.flush()
    assert f'{writer.dropped} messages are missing' in writer.note
    writer.close()
    for found in read_all(tmp_path / 'bag').values():
        assert found == expected(items[:kept])
