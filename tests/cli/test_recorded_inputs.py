# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Topics of a recording against the configured ones: what fits, what is said of the rest."""

from __future__ import annotations

from dataclasses import dataclass

import pytest

from teleop_eval.cli.recorded_inputs import RecordedInputs, nearest
from teleop_eval.core.errors import InputError, RecordingError
from teleop_eval.core.samples import BoolSample, TextSample
from teleop_eval.sinks import messages
from teleop_eval.sinks.bag_writer import BagWriter
from teleop_eval.sources.decode import SUPPORTED, make_decoder
from teleop_eval.sources.recording import open_recording

EVENTS = '/teleop_eval/session_event'


@dataclass(frozen=True)
class Route:
    """Stands for the evaluator's route."""

    arm: str
    role: str
    enabled_field: str | None = None


@pytest.fixture
def recording(tmp_path):
    """Return a recording with two topics and the type of a third."""
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/cell/engaged', 'std_msgs/msg/Bool')
        writer.add_topic('/cell/joint_states', 'sensor_msgs/msg/JointState')
        writer.add_topic('/image', 'std_msgs/msg/String')
        writer.write('/cell/engaged', 5, b'\x00\x01\x00\x00\x01')
    with open_recording(tmp_path / 'bag') as opened:
        yield opened


def inputs(recording, routes):
    """Return the inputs of a recording."""
    return RecordedInputs(recording, routes, event_topic=EVENTS, supported=SUPPORTED,
                          make_decoder=make_decoder)


def test_topic_that_fits_is_decoded_and_events_are_known(recording):
    made = inputs(recording, {'/cell/engaged': (Route('right', 'engaged'),)})
    assert made.topics == ('/cell/engaged',)
    assert made.problems == [] and made.malformed() == []
    decode = made.decoders['/cell/engaged']
    assert decode(b'\x00\x01\x00\x00\x01') == BoolSample(True)
    assert made.decoders[EVENTS](messages.string('segment')) == TextSample('segment')


def test_absent_topic_names_its_use_and_the_nearest(recording):
    made = inputs(recording, {'/cell/engaged': (Route('right', 'engaged'),),
                              '/joint_states': (Route('left', 'robot_joints'),)})
    assert made.problems == [
        'Topic /joint_states (robot joints of arm left) is not in the recording bag; the nearest '
        'there are /cell/joint_states.']


def test_no_configured_topic_at_all_is_an_error_that_lists_what_there_is(recording):
    with pytest.raises(RecordingError, match=r'none of the configured topics \(/a, /b\); it has '
                                             r'/cell/engaged, /cell/joint_states, /image; '
                                             'check the names and --namespace'):
        inputs(recording, {'/a': (Route('right', 'engaged'),),
                           '/b': (Route('right', 'robot_joints'),)})


def test_wrong_type_names_topic_type_and_what_is_expected(recording):
    with pytest.raises(InputError, match='Topic /image is configured as engaged of arm right, '
                                         'but has the type std_msgs/msg/String, .*expected is '
                                         'sensor_msgs/msg/Joy or std_msgs/msg/Bool'):
        inputs(recording, {'/image': (Route('right', 'engaged'),)})


def test_two_enabled_fields_on_one_topic_are_refused(recording):
    with pytest.raises(InputError,
                       match='/cell/joint_states.*enabled_field values a and b; give one'):
        inputs(recording, {'/cell/joint_states': (Route('right', 'robot_joints', 'a'),
                                                  Route('left', 'robot_joints', 'b'))})


def test_malformed_messages_are_counted_with_the_first_reason(recording):
    made = inputs(recording, {'/cell/engaged': (Route('right', 'engaged'),)})
    for data in (b'123', b''):
        with pytest.raises(InputError) as refused:
            made.decoders['/cell/engaged'](data)
        made.refuse('/cell/engaged', refused.value, 1.25 if data else 7.0)
    made.read.update(['/cell/engaged'] * 3)
    [sentence] = made.malformed()
    assert sentence.startswith('2 of 3 messages on /cell/engaged cannot be decoded and are left '
                               'out; the first came 1.250 s after the start: ')
    assert '3 bytes' in sentence and sentence.endswith('.') and '..' not in sentence


def test_recorded_type_without_a_usable_name_is_named(tmp_path):
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/engaged', 'nonsense')
    with open_recording(tmp_path / 'bag') as opened, pytest.raises(
            InputError, match="Topic /engaged of .*bag: 'nonsense' is no message type"):
        inputs(opened, {'/engaged': (Route('right', 'engaged'),)})


def test_events_are_read_where_they_were_recorded(tmp_path):
    with BagWriter(tmp_path / 'bag') as writer:
        writer.add_topic('/engaged', 'std_msgs/msg/Bool')
        writer.add_topic(EVENTS, 'std_msgs/msg/String')
        writer.write('/engaged', 5, b'\x00\x01\x00\x00\x01')
    with open_recording(tmp_path / 'bag') as opened:
        made = inputs(opened, {'/engaged': (Route('right', 'engaged'),)})
    assert made.topics == ('/engaged', EVENTS)


def test_topic_with_two_types_is_refused(tmp_path):
    """Two channels of one MCAP file with the same topic, as a restarted publisher may leave."""
    from mcap.writer import Writer

    with open(tmp_path / 'two.mcap', 'wb') as stream:
        writer = Writer(stream)
        writer.start(profile='ros2')
        for type_name in ('std_msgs/msg/Bool', 'std_msgs/msg/String'):
            schema = writer.register_schema(name=type_name, encoding='ros2msg', data=b'')
            channel = writer.register_channel(
                topic='/engaged', message_encoding='cdr', schema_id=schema)
            writer.add_message(channel, log_time=1, publish_time=1, data=b'\x00\x01\x00\x00\x01')
        writer.finish()
    with open_recording(tmp_path / 'two.mcap') as opened, pytest.raises(
            InputError, match=r'Topic /engaged of two\.mcap occurs as std_msgs/msg/Bool and as '
                              r'std_msgs/msg/String, so it is not evaluated; one topic must '
                              r'have one type, so name another .*record again\.'):
        inputs(opened, {'/engaged': (Route('right', 'engaged'),)})


def test_foreign_encoding_is_refused(tmp_path):
    from mcap.writer import Writer

    with open(tmp_path / 'json.mcap', 'wb') as stream:
        writer = Writer(stream)
        writer.start()
        schema = writer.register_schema(name='x', encoding='jsonschema', data=b'{}')
        channel = writer.register_channel(
            topic='/engaged', message_encoding='json', schema_id=schema)
        writer.add_message(channel, log_time=1, publish_time=1, data=b'{}')
        writer.finish()
    with open_recording(tmp_path / 'json.mcap') as opened, pytest.raises(
            InputError, match="Topic /engaged of .*json.mcap has the encoding 'json'; only cdr"):
        inputs(opened, {'/engaged': (Route('right', 'engaged'),)})


def test_nearest_prefers_the_same_last_part():
    names = ['/b/joint_states', '/joint_state', '/a/joint_states', '/joints', '/image']
    assert nearest('/joint_states', names) == ['/a/joint_states', '/b/joint_states',
                                               '/joint_state']
    assert nearest('/zzzz', names) == []
