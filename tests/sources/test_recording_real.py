# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Real recordings of a robot (mcap-bag-parser 0.3.1, MIT).

rosbags cannot open some of them (schema encoding `unknown`, files renamed since); the `mcap`
package is the witness.
"""

from __future__ import annotations

import hashlib
from itertools import pairwise

import pytest
from mcap.reader import make_reader

from teleop_eval.sources.recording import open_recording

# Counted with the mcap package when the recordings were chosen for these tests.
COUNTS = {
    'bagfile': (25387, {'/robot/joint_command': 3998, '/robot/joint_state': 4217}),
    'alternate_bagfile': (129300, {'/robot/joint_command': 4, '/robot/joint_state': 3795}),
    'data/controlled_data_0.mcap': (1356, {'/device/state': 250, '/device/estimated_pose': 250}),
}


@pytest.mark.parametrize('name', COUNTS)
def test_counts(real_recordings, name):
    total, topics = COUNTS[name]
    with open_recording(real_recordings / name) as recording:
        assert recording.message_count == total
        found = list(recording.messages())
        for topic, count in topics.items():
            assert recording.topics[topic].message_count == count
            assert sum(1 for _ in recording.messages([topic])) == count
    assert len(found) == total
    assert all(a.log_ns <= b.log_ns for a, b in pairwise(found))
    assert (found[0].log_ns, found[-1].log_ns) == (recording.start_ns, recording.end_ns)


@pytest.mark.parametrize('name', ['bagfile', 'alternate_bagfile'])
def test_the_same_messages_in_the_same_order_as_mcap_gives(real_recordings, name):
    path = real_recordings / name / f'{name}_0.mcap'
    ours, theirs = hashlib.sha256(), hashlib.sha256()
    with open_recording(path) as recording:
        for log_ns, topic, data in recording.messages():
            ours.update(f'{log_ns} {topic} '.encode() + data)
    with path.open('rb') as stream:
        for _, channel, message in make_reader(stream).iter_messages():
            theirs.update(f'{message.log_time} {channel.topic} '.encode() + message.data)
    assert ours.hexdigest() == theirs.hexdigest()


def test_metadata_of_renamed_files(real_recordings):
    for name in ('alternate_bagfile', 'data'):
        with open_recording(real_recordings / name) as recording:
            assert 'names other files than are there' in recording.notes[0]
    with open_recording(real_recordings / 'bagfile') as recording:
        assert recording.notes == []


def test_definitions(real_recordings):
    with open_recording(real_recordings / 'bagfile') as recording:
        state = recording.topics['/robot/joint_state']
        assert state.type_name == 'capstan/msg/RobotJointState'
        assert state.definition_format == 'ros2msg' and 'position' in state.definition
        feedback = recording.topics['/reference_hardstops/_action/feedback']
        assert feedback.definition == feedback.definition_format == ''
    with open_recording(real_recordings / 'alternate_bagfile') as recording:
        assert recording.topics['/robot/joint_override'].definition_format == 'ros2idl'
