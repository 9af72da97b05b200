# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Bytes of the summary bag's messages, read back by two libraries that did not write them."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rosbags.typesys import Stores, get_typestore

from teleop_eval.core.results import StatusLine
from teleop_eval.sinks import messages

STORE = get_typestore(Stores.ROS2_JAZZY)
LINES = [
    StatusLine('right: latency', 1, 'Latency 0.21 s is above 0.15 s.', {'median (s)': '0.21'}),
    StatusLine('right: inputs', 0, '', {}),
    StatusLine('links: Größe', 3, 'keine Daten — 静か', {'a': '', 'bb (m/s)': 'x', '': 'y'}),
]

NO_ROS = 'compares with the messages of ROS 2, which is not installed'


def test_float64_is_read_back_by_rosbags():
    for value in (0.0, -1.5, 1e-300, math.inf):
        assert STORE.deserialize_cdr(messages.float64(value), messages.FLOAT64).data == value
    nan = STORE.deserialize_cdr(messages.float64(math.nan), messages.FLOAT64).data
    assert math.isnan(nan)


@given(st.text())
def test_any_text_is_read_back_by_rosbags(text):
    data = messages.string(text)
    assert STORE.deserialize_cdr(data, messages.STRING).data == messages.clean_text(text)
    if '\x00' not in text:
        assert messages.clean_text(text) == text


def test_text_that_no_string_can_carry_is_escaped():
    assert messages.clean_text('a\x00b\ud800') == 'a\\x00b\\ud800'


def test_bytes_equal_those_of_rosbags():
    """Same bytes as an independent serializer gives, padding included."""
    message = STORE.types[messages.DIAGNOSTIC_ARRAY]
    status = STORE.types['diagnostic_msgs/msg/DiagnosticStatus']
    pair = STORE.types['diagnostic_msgs/msg/KeyValue']
    header = STORE.types['std_msgs/msg/Header']
    time = STORE.types['builtin_interfaces/msg/Time']
    expected = message(
        header=header(stamp=time(sec=12, nanosec=345), frame_id=''),
        status=[status(level=line.level, name=f'teleop_eval: {line.name}', message=line.message,
                       hardware_id='teleop_eval',
                       values=[pair(key=key, value=value) for key, value in line.values.items()])
                for line in LINES])
    reference = bytes(STORE.serialize_cdr(expected, messages.DIAGNOSTIC_ARRAY))
    assert messages.diagnostic_array(12_000_000_345, LINES) == reference


def test_empty_diagnostics_are_read_back():
    read = STORE.deserialize_cdr(messages.diagnostic_array(-1, []), messages.DIAGNOSTIC_ARRAY)
    assert (read.header.stamp.sec, read.header.stamp.nanosec, read.status) == (
        -1, 999_999_999, [])


def test_time_beyond_the_messages_range_stays_at_its_end():
    read = STORE.deserialize_cdr(
        messages.diagnostic_array(2**62, []), messages.DIAGNOSTIC_ARRAY)
    assert read.header.stamp.sec == 2**31 - 1


# A library beneath rclpy imports modules that Python 3.11 calls deprecated.
@pytest.mark.filterwarnings('ignore:module .sre_:DeprecationWarning')
def test_rclpy_reads_every_message_back():
    serialization = pytest.importorskip('rclpy.serialization', reason=NO_ROS)
    diagnostic = pytest.importorskip('diagnostic_msgs.msg', reason=NO_ROS)
    standard = pytest.importorskip('std_msgs.msg', reason=NO_ROS)
    read = serialization.deserialize_message(
        messages.diagnostic_array(7_000_000_001, LINES), diagnostic.DiagnosticArray)
    assert (read.header.stamp.sec, read.header.stamp.nanosec) == (7, 1)
    for status, line in zip(read.status, LINES, strict=True):
        assert status.level == bytes([line.level])
        assert status.name == f'teleop_eval: {line.name}'
        assert status.message == line.message
        assert status.hardware_id == 'teleop_eval'
        assert {pair.key: pair.value for pair in status.values} == line.values
    assert serialization.deserialize_message(
        messages.float64(2.5), standard.Float64).data == 2.5
    text = '{"größe": "静"}'
    assert serialization.deserialize_message(messages.string(text), standard.String).data == text


@pytest.mark.parametrize('metric, topic', [
    ('latency_s', '~/right/latency_s'),
    ('joint_error_rms.elbow_1', '~/right/joint_error_rms/elbow_1'),
])
def test_plain_names_keep_their_topic(metric, topic):
    assert messages.metric_topic('right', metric) == topic
    assert messages.plain_name(topic) == f'/teleop_eval{topic[1:]}'
    assert messages.plain_name(messages.DIAGNOSTICS_TOPIC) == '/diagnostics'


@given(st.text(max_size=12), st.text(max_size=12))
def test_every_metric_topic_is_valid_and_plain_names_stay(arm, joint):
    """The rule for full topic names is ROS 2's, design.ros2.org 'Topic and Service names'."""
    topic = messages.metric_topic(arm, f'joint_error_rms.{joint}')
    assert topic.startswith('~/')
    for token in topic.split('/')[1:]:
        assert re.fullmatch('[A-Za-z_][A-Za-z0-9_]*', token)
        assert '__' not in token and not token.endswith('_')


def test_rclpy_accepts_hostile_metric_topics():
    names = pytest.importorskip('rclpy.validate_full_topic_name', reason=NO_ROS)
    for joint in ('left/shoulder-1', '1', '', 'a..b', 'é', '__', 'x' * 600, '~', '{x}'):
        names.validate_full_topic_name(messages.plain_name(
            messages.metric_topic('a', f'joint_error_rms.{joint}')))


def test_joints_that_differ_only_in_forbidden_signs_have_topics_of_their_own():
    topics = {messages.metric_topic('right', f'joint_error_rms.{joint}')
              for joint in ('a-b', 'a_b', 'a/b', 'a b', 'a.b', 'a__b')}
    assert len(topics) == 6
