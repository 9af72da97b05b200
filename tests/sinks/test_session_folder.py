# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A session's folder, read back by readers that this project did not write."""

from __future__ import annotations

import json
import math
import signal
import subprocess
import sys
import textwrap
from pathlib import Path

import pandas
import pytest
import yaml
from rosbags.highlevel import AnyReader
from rosbags.typesys import Stores, get_typestore

from teleop_eval.core.errors import OutputError
from teleop_eval.core.metric import Metric, missing
from teleop_eval.core.results import StatusLine, WindowResult
from teleop_eval.core.settings import from_parameters
from teleop_eval.sinks import messages, session_folder
from teleop_eval.sinks.session_folder import SessionFolder
from teleop_eval.sources.parameter_file import load_parameters

FLAT = {
    'arms.right.robot.joints_topic': 'joint_states',
    'arms.right.robot.description_file': 'models/arm.urdf',
    'arms.right.robot.base_link': 'base',
    'arms.right.robot.tip_link': 'tool',
    'arms.right.command.joints.topic.scale': 0.5,
    'session.operator': 'p01',
}
HERE = Path(__file__).parent
START = 1_700_000_000_000_000_000
SECOND = 10**9


def make(path, **kwargs):
    """Return a session folder with the settings above."""
    return SessionFolder(path, from_parameters(FLAT), FLAT,
                         **{'source': 'my_recording', **kwargs})


def window(k, *, arm='right', offset_ns=0, lag_ns=500_000_000, **metrics):
    """Return the k-th window of 2 s; its stamps are `offset_ns` ahead of receive time."""
    start = START + 2 * k * SECOND
    return WindowResult(arm, 'direct', start + offset_ns, start + 2 * SECOND + offset_ns,
                        start + 2 * SECOND + lag_ns,
                        metrics or {'latency_s': Metric(0.1 + 0.01 * k, 's'),
                                    'tracking_error_rms_m': missing('insufficient', 'm', 'x')})


def summary():
    """Return what an evaluator may return."""
    metric = Metric(0.123, 's', (0.1, 0.15), 30, 900).to_dict()
    return {'arms': {'right': {'mappings': {'direct': {'metrics': {'latency_s': metric}}}}},
            'notes': ['A note.']}


def read_bag(folder):
    """Return {topic: [(log_ns, message)]} by the rosbags library."""
    found = {}
    with AnyReader([folder], default_typestore=get_typestore(Stores.ROS2_JAZZY)) as reader:
        for connection, log_ns, data in reader.messages():
            message = reader.deserialize(data, connection.msgtype)
            found.setdefault(connection.topic, []).append((log_ns, message))
    return found


def test_everything_is_there_and_read_back(tmp_path):
    folder = make(tmp_path / 's', record_inputs=True)
    folder.announce_input('/d', 'std_msgs/msg/String', qos=[{'durability': 'transient_local'}])
    folder.input('/d', 'std_msgs/msg/String', START, messages.string('<robot/>'))
    folder.input('/engaged', 'std_msgs/msg/Bool', START + 1, b'\x00\x01\x00\x00\x01')
    folder.window(window(0))
    folder.diagnostics(START + 3 * SECOND, [StatusLine('right: latency', 1, 'late', {'s': '1'})])
    folder.window(window(1))
    folder.flush()
    whole = folder.finish(summary(), notes=['Another.'], problems=['A problem.'])

    assert {file.name for file in (tmp_path / 's').iterdir()} == {
        'config.yaml', 'inputs', 'metrics.csv', 'summary', 'summary.json', 'windows.csv'}
    bag = read_bag(tmp_path / 's' / 'summary')
    assert [(ns, message.data) for ns, message in bag['/teleop_eval/right/latency_s']] == [
        (window(0).receive_ns, 0.1), (window(1).receive_ns, 0.11)]
    assert all(math.isnan(message.data)
               for _, message in bag['/teleop_eval/right/tracking_error_rms_m'])
    [(log_ns, array)] = bag['/diagnostics']
    assert log_ns == START + 3 * SECOND
    assert (array.header.stamp.sec, array.status[0].name, array.status[0].level) == (
        START // SECOND + 3, 'teleop_eval: right: latency', 1)
    [(log_ns, final)] = bag['/teleop_eval/summary']
    assert log_ns == window(1).receive_ns
    read = json.loads((tmp_path / 's' / 'summary.json').read_text(encoding='utf-8'))
    assert json.loads(final.data) == read == json.loads(json.dumps(whole))
    assert read['session'] == {
        'name': 'my_recording', 'condition': 'teleoperated', 'operator': 'p01',
        'start_ns': START, 'end_ns': START + 4_500_000_000, 'duration_s': 4.5,
        'source': 'my_recording'}
    assert read['notes'] == ['A note.', 'Another.']
    assert read['problems'] == ['A problem.']
    inputs = read_bag(tmp_path / 's' / 'inputs')
    assert [(ns, message.data) for ns, message in inputs['/d']] == [(START, '<robot/>')]
    assert [(ns, message.data) for ns, message in inputs['/engaged']] == [(START + 1, True)]
    metrics = pandas.read_csv(tmp_path / 's' / 'metrics.csv')
    assert metrics[['arm', 'mapping', 'metric', 'value', 'ci95_low', 'n']].values.tolist() == [
        ['right', 'direct', 'latency_s', 0.123, 0.1, 30]]
    windows = pandas.read_csv(tmp_path / 's' / 'windows.csv')
    assert windows[['start_s', 'end_s', 'latency_s']].values.tolist() == [
        [0.0, 2.0, 0.1], [2.0, 4.0, 0.11]]


def test_latched_topics_are_offered_so(tmp_path):
    """The keys are rosbag2's, metadata version 9; the file is read by PyYAML."""
    folder = make(tmp_path / 's', record_inputs=True)
    folder.announce_input('/d', 'std_msgs/msg/String', qos=[{'durability': 'transient_local'}])
    folder.finish(summary())
    for bag, topic in (('inputs', '/d'), ('summary', '/teleop_eval/summary')):
        text = (tmp_path / 's' / bag / 'metadata.yaml').read_text(encoding='utf-8')
        topics = yaml.safe_load(text)['rosbag2_bagfile_information']['topics_with_message_count']
        [found] = [entry['topic_metadata'] for entry in topics
                   if entry['topic_metadata']['name'] == topic]
        assert found['offered_qos_profiles'][0]['durability'] == 'transient_local'


def test_same_session_gives_the_same_bytes(tmp_path):
    for name in 'ab':
        folder = make(tmp_path / name)
        folder.window(window(0))
        folder.finish(summary())
    for file in ('summary.json', 'metrics.csv', 'windows.csv', 'config.yaml'):
        assert (tmp_path / 'a' / file).read_bytes() == (tmp_path / 'b' / file).read_bytes()


def test_configuration_reads_back_complete(tmp_path):
    make(tmp_path / 's', descriptions={'right': '<robot name="é"/>'},
         resolve=lambda topic: f'/cell/{topic}').finish(summary())
    path = tmp_path / 's' / 'config.yaml'
    flat = load_parameters(path)
    assert flat == {**FLAT, 'arms.right.robot.joints_topic': '/cell/joint_states',
                    'arms.right.robot.description_file': 'description_right.urdf'}
    assert (tmp_path / 's' / 'description_right.urdf').read_text(
        encoding='utf-8') == '<robot name="é"/>'
    assert from_parameters(flat) == from_parameters(
        {**FLAT, 'arms.right.robot.joints_topic': '/cell/joint_states',
         'arms.right.robot.description_file': 'description_right.urdf'})


def test_simulated_time_is_kept_as_ros_names_it(tmp_path):
    make(tmp_path / 'a', simulated_time=True).finish(summary())
    assert load_parameters(tmp_path / 'a' / 'config.yaml') == {'use_sim_time': True, **FLAT}
    make(tmp_path / 'b').finish(summary())
    assert 'use_sim_time' not in load_parameters(tmp_path / 'b' / 'config.yaml')


def test_rcl_reads_the_configuration(tmp_path):
    """ROS 2's own parameter parser sees the values that the folder was given."""
    pytest.importorskip('rclpy', reason='compares with rclpy, which is not installed')
    make(tmp_path / 's').finish(summary())
    code = textwrap.dedent("""
        import sys, rclpy
        from rclpy.node import Node
        rclpy.init(args=['--ros-args', '--params-file', sys.argv[1]])
        node = Node('any_name', automatically_declare_parameters_from_overrides=True)
        print(node.get_parameter('arms.right.robot.joints_topic').value)
        print(node.get_parameter('arms.right.command.joints.topic.scale').value)
    """)
    run = subprocess.run([sys.executable, '-c', code, str(tmp_path / 's' / 'config.yaml')],
                         capture_output=True, text=True, timeout=120)
    assert run.stdout.split() == ['joint_states', '0.5'], run.stderr


def test_two_arms_line_up_unless_their_clocks_differ(tmp_path):
    folder = make(tmp_path / 's')
    folder.window(window(5, arm='right'))
    folder.window(window(6, arm='left'))
    folder.window(window(6, arm='other', offset_ns=-START))
    folder.window(window(7, arm='other', offset_ns=-START))
    folder.finish(summary())
    rows = pandas.read_csv(tmp_path / 's' / 'windows.csv')
    assert rows[['arm', 'start_s', 'end_s']].values.tolist() == [
        ['right', 0.0, 2.0], ['left', 2.0, 4.0], ['other', 0.0, 2.0], ['other', 2.0, 4.0]]


def test_a_live_session_is_called_as_its_folder_is(tmp_path):
    """The name asked for may be taken: then the folder has another, and so has the session."""
    assert make(tmp_path / 'x', source='live').finish({})['session']['name'] == 'x'
    flat = {**FLAT, 'session.name': 'trial_7'}
    folder = SessionFolder(tmp_path / 'trial_7_2', from_parameters(flat), flat, source='live')
    assert folder.finish({})['session'] == {
        'name': 'trial_7_2', 'condition': 'teleoperated', 'operator': 'p01', 'start_ns': None,
        'end_ns': None, 'duration_s': None, 'source': 'live'}


def test_name_given_in_the_settings_wins_over_that_of_a_recording(tmp_path):
    flat = {**FLAT, 'session.name': 'trial_7'}
    folder = SessionFolder(tmp_path / 'y', from_parameters(flat), flat, source='rec')
    assert folder.finish({})['session']['name'] == 'trial_7'


def test_topics_are_recorded_under_the_names_of_the_node_that_publishes(tmp_path):
    folder = make(tmp_path / 's', node_name='judge', published=lambda topic: topic.replace(
        '~', '/cell/judge').replace('/diagnostics', '/cell/diagnostics'))
    folder.window(window(0))
    folder.diagnostics(START, [StatusLine('right: latency', 1, 'late', {})])
    folder.finish(summary())
    bag = read_bag(tmp_path / 's' / 'summary')
    assert set(bag) == {'/cell/judge/right/latency_s', '/cell/judge/right/tracking_error_rms_m',
                        '/cell/diagnostics', '/cell/judge/summary'}
    assert bag['/cell/diagnostics'][0][1].status[0].name == 'judge: right: latency'


def test_hostile_joint_names_get_topics_and_cells(tmp_path):
    names = ['joint_error_rms.=cmd|" /C calc"!A0', 'joint_error_rms.a/b', 'joint_error_rms.a b',
             'joint_error_rms.\x00\ud800']
    folder = make(tmp_path / 's')
    folder.window(window(0, **{name: Metric(1.0 + k, 'rad') for k, name in enumerate(names)}))
    metrics = {name: Metric(1.0, 'rad').to_dict() for name in names}
    folder.finish({'arms': {'right': {'mappings': {'=1+1': {'metrics': metrics}}}}})
    bag = read_bag(tmp_path / 's' / 'summary')
    values = [message.data for topic, rows in bag.items() if 'joint_error_rms' in topic
              for _, message in rows]
    assert sorted(values) == [1.0, 2.0, 3.0, 4.0]
    table = pandas.read_csv(tmp_path / 's' / 'metrics.csv')
    assert set(table.mapping) == {"'=1+1"}
    assert len(table) == 4


def test_folder_that_holds_something_is_refused(tmp_path):
    (tmp_path / 's').mkdir()
    (tmp_path / 's' / 'precious.txt').write_text('keep')
    with pytest.raises(OutputError, match=r's already holds precious\.txt; give the name'):
        make(tmp_path / 's')
    assert [file.name for file in (tmp_path / 's').iterdir()] == ['precious.txt']
    (tmp_path / 'file').write_text('')
    with pytest.raises(OutputError, match='file is a file; give the name of a new folder'):
        make(tmp_path / 'file')
    with pytest.raises(OutputError, match='cannot be made: Not a directory'):
        make(tmp_path / 'file' / 'inside')
    with pytest.raises(OutputError, match='cannot be made: embedded null'):
        make(str(tmp_path) + '/a\x00b')


def test_start_that_fails_leaves_the_folder_empty(tmp_path, monkeypatch):
    real = session_folder.BagWriter

    def full(folder, **kwargs):
        if folder.name == 'inputs':
            raise OutputError(f'{folder} is full.')
        return real(folder, **kwargs)

    monkeypatch.setattr(session_folder, 'BagWriter', full)
    with pytest.raises(OutputError, match='inputs is full'):
        make(tmp_path / 's', record_inputs=True, descriptions={'right': '<robot/>'})
    assert list((tmp_path / 's').iterdir()) == []
    make(tmp_path / 's').finish(summary())


def test_one_failure_at_the_end_spoils_nothing_else(tmp_path):
    folder = make(tmp_path / 's', record_inputs=True)
    folder.input('/engaged', 'std_msgs/msg/Bool', START, b'\x00\x01\x00\x00\x01')
    folder.window(window(0))
    (tmp_path / 's' / 'summary.json').mkdir()
    (tmp_path / 's' / 'metrics.csv').mkdir()
    with pytest.raises(OutputError, match=r'(?s)summary\.json cannot.*metrics\.csv cannot'):
        folder.finish(summary())
    assert len(pandas.read_csv(tmp_path / 's' / 'windows.csv')) == 1
    assert json.loads(read_bag(tmp_path / 's' / 'summary')['/teleop_eval/summary'][0][1].data)
    assert len(read_bag(tmp_path / 's' / 'inputs')['/engaged']) == 1
    folder.finish(summary())  # a second call has nothing left to do


def test_bag_that_cannot_be_closed_spoils_no_file(tmp_path, monkeypatch):
    class Full(session_folder.BagWriter):
        """A bag on a disk that fills up at the end."""

        def close(self):
            """Refuse."""
            super().close()
            raise OutputError(f'{self.folder} is full.')

    monkeypatch.setattr(session_folder, 'BagWriter', Full)
    folder = make(tmp_path / 's', record_inputs=True)
    folder.window(window(0))
    with pytest.raises(OutputError, match=r's/summary is full; .*s/inputs is full\.'):
        folder.finish(summary())
    assert json.loads((tmp_path / 's' / 'summary.json').read_text())['schema_version'] == 1
    assert (tmp_path / 's' / 'metrics.csv').exists()


def test_messages_that_the_disk_refused_for_too_long_are_a_failure(tmp_path):
    folder = make(tmp_path / 's', record_inputs=True)
    bag = folder._bags['inputs']
    bag.dropped, bag.note = 3, '3 messages are missing.'
    with pytest.raises(OutputError, match=r'^3 messages are missing\.$'):
        folder.finish(summary())
    assert (tmp_path / 's' / 'summary.json').exists()


def test_killed_process_leaves_its_windows(tmp_path):
    """SIGKILL after a flush: bag by rosbags' reader and table by pandas are both complete."""
    code = textwrap.dedent(f"""
        import os, signal, sys
        sys.path[:0] = [{str(HERE)!r}, {str(HERE.parents[1])!r}]
        from test_session_folder import make, window
        folder = make({str(tmp_path / 's')!r})
        for k in range(3):
            folder.window(window(k))
        folder.flush()
        os.kill(os.getpid(), signal.SIGKILL)
    """)
    run = subprocess.run([sys.executable, '-c', code], capture_output=True, timeout=120)
    assert run.returncode == -signal.SIGKILL, run.stderr
    assert len(read_bag(tmp_path / 's' / 'summary')['/teleop_eval/right/latency_s']) == 3
    assert len(pandas.read_csv(tmp_path / 's' / 'windows.csv')) == 3
    assert (tmp_path / 's' / 'config.yaml').exists()
