# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Messages with one fault: one sentence, status 0, and every number that it does not touch.

The left arm shares nothing with the faulty right one, so its whole part of the summary must
be that of the sound recording to the last bit.
"""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path

import faulty_recording as faulty
import pytest
from faulty_recording import ARRAY, JOINTS, SECONDS, TEXT, Event, change

ROOT = Path(__file__).parents[2]
TIMES = 'times).'
# Metrics by what they are computed from, as prefixes; '$' ends a whole name.
ROBOT = ('joint_range_use$', 'limit_', 'manipulability_', 'reach_p50_norm$', 'reach_p95_norm$',
         'reach_max_norm$', 'workspace_coverage_robot$')
COMMAND = ('joint_error_', 'latency_response_s$')
HAND = ('workspace_coverage_operator$', 'reach_p50_norm_operator$', 'reach_max_norm_operator$')
CLUTCH = ('engaged_time_s$', 'engagements$', 'engagement_rate_per_min$')
DELAY = ('latency_s$', 'tracking_error_')


def kept(names: Iterable[str], mappings: Iterable[str] = ('direct', 'reach')) -> list[str]:
    """Return the beginnings of metric names under these mappings."""
    return [f'{mapping}.{name}' for mapping in mappings for name in names]


def begins(name: str, beginnings: Iterable[str]) -> bool:
    """Tell whether a metric is meant by one of the beginnings."""
    return any(f'{name}$'.startswith(beginning) for beginning in beginnings)


def right(topic: str, make: Callable[[Event], bytes | Event | None], **stretch: float
          ) -> list[Event]:
    """Return the recording with messages of one topic of the right arm changed."""
    return change(f'/right/{topic}', make, **stretch)


def joints_of(names: Iterable[str], values: Iterable[float]) -> Callable[[Event], bytes]:
    """Return a maker of JointState messages of the same stamp."""
    return lambda event: faulty.joints(
        0.0, names, values, stamp_ns=faulty.stamp_ns(event))


def pose_of(position: Iterable[float], xyzw: Iterable[float] = (0.0, 0.0, 0.0, 1.0)
            ) -> Callable[[Event], bytes]:
    """Return a maker of PoseStamped messages of the same stamp."""
    return lambda event: faulty.pose(
        (faulty.stamp_ns(event) - faulty.START_NS) / 1e9, position, xyzw)


def step_back(event: Event) -> Event:
    """Return an event whose stamp is 3 s behind."""
    return faulty.stamped(event, faulty.stamp_ns(event) - 3_000_000_000)


@dataclass(frozen=True)
class Fault:
    """One fault: the recording, the words of its sentence, and what it must not touch."""

    events: Callable[[], list[Event]]
    words: tuple[str, ...]
    kept: list[str]


NAN = float('nan')
SHORT = {'start_s': 6.0, 'end_s': 6.3}
FAULTS = {
    'nan pose for 0.3 s': Fault(
        lambda: right('hand', pose_of((0.1, NAN, 0.0)), **SHORT),
        ('right: hand (/right/hand): y = nan came', 'left out', 'publisher (15 ' + TIMES),
        kept((*ROBOT, *COMMAND, *CLUTCH, *DELAY, 'latency_command_s$')) + ['reach.']),
    'nan orientation': Fault(
        lambda: right('hand', pose_of((0.1, 0.0, 0.0), (0.0, 0.0, NAN, 1.0)), **SHORT),
        ('/right/hand', 'qz = nan came', '(15 ' + TIMES),
        kept((*ROBOT, *COMMAND, *CLUTCH, *DELAY)) + ['reach.']),
    'nan poses only': Fault(
        lambda: right('hand', pose_of((NAN, NAN, NAN))),
        ('/right/hand', 'x = nan, y = nan, z = nan came', '(1000 ' + TIMES),
        kept((*ROBOT, *COMMAND, *CLUTCH)) + kept(DELAY, ['direct'])),
    'infinite joint': Fault(
        lambda: right('joint_states', joints_of(JOINTS, (float('inf'), 0.2)), **SHORT),
        ('right: robot_joints (/right/joint_states): shoulder = inf came', '(15 ' + TIMES),
        kept((*HAND, *CLUTCH, 'latency_command_s$')) + ['reach.']),
    'missing robot joint': Fault(
        lambda: right('joint_states', joints_of(('shoulder', 'elbo'), (0.1, 0.2))),
        ('robot_joints (/right/joint_states): joint elbow is missing', 'has shoulder, elbo',
         'did you mean elbo?', '(1000 ' + TIMES),
        kept((*HAND, *CLUTCH))),
    'robot joint goes missing': Fault(
        lambda: right('joint_states', joints_of(('shoulder',), (0.1,)), start_s=15.0),
        ('/right/joint_states', 'joint elbow is missing', 'has shoulder;', 'correct the name',
         '(250 ' + TIMES),
        kept((*HAND, *CLUTCH)) + ['direct.']),
    'missing operator joint': Fault(
        lambda: right('operator', joints_of(('human_elbow', 'human_shouldr'), (0.1, 0.2))),
        ('operator_joints (/right/operator): joint human_shoulder is missing',
         'did you mean human_shouldr?'),
        kept((*ROBOT, *COMMAND, *HAND, *CLUTCH)) + kept(DELAY, ['reach'])),
    'none of the joints': Fault(
        lambda: right('joint_states', joints_of(('finger_1', 'finger_2'), (0.1, 0.2))),
        ('/right/joint_states', 'none of the joints shoulder, elbow was in 1000 messages',
         'finger_1, finger_2', 'check joint names and topic'),
        kept((*HAND, *CLUTCH))),
    'arrays of different length': Fault(
        lambda: right('joint_states', joints_of(JOINTS, (0.1,)), **SHORT),
        ('15 of 1000 messages on /right/joint_states', 'left out',
         '1 positions for 2 joint names', 'correct its publisher'),
        kept((*HAND, *CLUTCH, 'latency_command_s$')) + ['reach.']),
    'arrays of different length only': Fault(
        lambda: right('command', joints_of(JOINTS, (0.1, 0.2, 0.3))),
        ('1000 of 1000 messages on /right/command', '3 positions for 2 joint names'),
        kept((*ROBOT, *HAND, *CLUTCH))),
    'bytes that are no message': Fault(
        lambda: right('joint_states', lambda event: event.data[:20], **SHORT),
        ('15 of 1000 messages on /right/joint_states', '20 bytes', 'check that the recording'),
        kept((*HAND, *CLUTCH, 'latency_command_s$')) + ['reach.']),
    'empty messages only': Fault(
        lambda: right('hand', lambda event: b''),
        ('1000 of 1000 messages on /right/hand', '0 bytes', 'usual ROS 2 serialization'),
        kept((*ROBOT, *COMMAND, *CLUTCH)) + kept(DELAY, ['direct'])),
    'hand of a wrong type': Fault(
        lambda: right('hand', lambda event: replace(
            event, type_name=ARRAY, data=faulty.array([1.0, 2.0, 3.0]))),
        ('Topic /right/hand', 'hand of arm right', 'std_msgs/msg/Float64MultiArray',
         'expected is', 'geometry_msgs/msg/PoseStamped'),
        kept((*ROBOT, *COMMAND, *CLUTCH)) + kept(DELAY, ['direct'])),
    'clutch of a wrong type': Fault(
        lambda: right('engaged', lambda event: replace(
            event, type_name=TEXT, data=faulty.text('yes'))),
        ('Topic /right/engaged', 'engaged of arm right', 'std_msgs/msg/String',
         'expected is sensor_msgs/msg/Joy or std_msgs/msg/Bool'), []),
    'command of a wrong size': Fault(
        lambda: right('command', lambda event: replace(
            event, type_name=ARRAY, data=faulty.array([1.0, 2.0, 3.0]))),
        ('command (/right/command)', '3 numbers came for 2 joints', 'set command.joint_order'),
        kept((*ROBOT, *HAND, *CLUTCH))),
    'command absent': Fault(
        lambda: right('command', lambda event: None),
        ('Topic /right/command', 'command of arm right', 'not in the recording rec',
         'nearest there are /left/command'),
        kept((*ROBOT, *HAND, *CLUTCH))),
    'mapping absent': Fault(
        lambda: right('mapping', lambda event: None),
        ('Topic /right/mapping', 'active mapping of arm right', 'nearest', '/left/mapping'), []),
    'description absent': Fault(
        lambda: right('robot_description', lambda event: None),
        ('Topic /right/robot_description', 'nearest', '/left/robot_description'),
        kept(CLUTCH)),
    'unknown mapping label': Fault(
        lambda: right('mapping', lambda event: faulty.text('rech'), start_s=5.0),
        ("active_mapping (/right/mapping) is 'rech'", 'direct, reach',
         "did you mean 'reach'?"), ['direct.']),
    'stamps of one input step back': Fault(
        lambda: right('joint_states', step_back, start_s=15.0),
        ('robot_joints (/right/joint_states)', 'stepped back by 2.980 s', 'new segment',
         'run on'), kept((*ROBOT, *HAND), ['direct'])),
    'stamps stop': Fault(
        lambda: right('joint_states', lambda event: faulty.stamped(event, 0), **SHORT),
        ('robot_joints (/right/joint_states)', 'without header stamp', '(15 ' + TIMES),
        kept((*HAND, *CLUTCH, 'latency_command_s$')) + ['reach.']),
}


# Here no time belongs to a mapping, or no joint is known: its metrics do not exist.
NO_SUCH_TIME = ('mapping absent', 'unknown mapping label', 'description absent')


@pytest.mark.parametrize('name', FAULTS)
def test_one_fault_is_one_sentence_and_the_rest_is_kept(bench, sound, name):
    fault = FAULTS[name]
    done = bench.run(fault.events())
    assert done.status == 0
    text = done.sentence(*fault.words)
    assert done.summary['problems'] == [text]
    done.check_left_arm(sound)
    if name not in NO_SUCH_TIME:
        assert sound.metrics().keys() - done.metrics().keys() <= {
            one for one in sound.metrics() if '.joint_error' in one}
    touched = {one for one in done.changed(sound) if begins(one, fault.kept)}
    assert touched == set()
    if fault.kept:
        same = [one for one, metric in sound.metrics().items()
                if begins(one, fault.kept) and metric['status'] == 'ok']
        assert len(same) >= 3


def test_a_fault_shows_in_the_numbers_that_it_touches(bench, sound):
    """The comparison above can fail: what comes from the faulty input does differ."""
    done = bench.run(right('hand', pose_of((NAN, 0.0, 0.0)), start_s=6.0, end_s=9.0))
    assert 'direct.workspace_coverage_operator' in done.changed(sound)
    counts = done.summary['arms']['right']['inputs']['hand']
    assert (counts['messages'], counts['non_finite']) == (1000, 150)


def test_two_faults_are_both_named(bench, sound):
    events = right('hand', pose_of((NAN, 0.0, 0.0)), **SHORT)
    events = change('/left/operator', joints_of(('human_elbow',), (0.1,)), events=events)
    done = bench.run(events)
    assert done.status == 0 and len(done.sentences) == 2
    assert sum('right: hand (/right/hand): x = nan came' in text for text in done.sentences) == 1
    assert sum('left: operator_joints (/left/operator): joint human_shoulder is missing' in text
               for text in done.sentences) == 1
    assert {one for one in done.changed(sound) if begins(one, kept((*ROBOT, *COMMAND)))} == set()


def test_two_faults_of_one_input_are_both_named(bench):
    events = right('joint_states', joints_of(JOINTS, (NAN, 0.0)), **SHORT)
    events = change('/right/joint_states', joints_of(('shoulder',), (0.1,)), start_s=8.0,
                    end_s=8.3, events=events)
    done = bench.run(events)
    assert done.status == 0 and len(done.sentences) == 2
    assert 'shoulder = nan came' in done.err and 'joint elbow is missing' in done.err


def test_stamps_of_all_inputs_step_back_once_for_each_arm(bench, sound):
    events = [step_back(event) if event.time_s >= 10.0 and event.topic.rpartition('/')[2] in
              faulty.TRANSPORT_NS else event for event in faulty.healthy()]
    done = bench.run(events)
    assert done.status == 0 and len(done.sentences) == 2
    for arm in ('right', 'left'):
        assert sum(text.startswith(f'{arm}: ') and 'header stamps stepped back by 2.980 s' in text
                   for text in done.sentences) == 1
        assert done.summary['arms'][arm]['segments'] == 2
        assert done.summary['arms'][arm]['inputs']['hand']['messages'] == 1000


@pytest.mark.parametrize('storage', [faulty.StoragePlugin.MCAP, faulty.StoragePlugin.SQLITE3])
def test_a_clock_that_is_put_back_while_recording(bench, sound, storage, monkeypatch):
    """Stamps and log times from one clock that falls back by 3 s, as after setting the time."""
    back_ns = 3_000_000_000
    events = []
    for event in faulty.healthy():
        if event.time_s >= 10.0:
            if event.topic.rpartition('/')[2] in faulty.TRANSPORT_NS:
                event = step_back(event)
            event = replace(event, log_ns=event.log_ns - back_ns)
        events.append(event)
    write = faulty.write
    monkeypatch.setattr(faulty, 'write', lambda path, found: write(path, found, storage=storage))
    done = bench.run(events)
    assert done.status == 0
    done.sentence('clock that gives the receive times stepped back', 'new segment', 'run on')
    for arm in ('right', 'left'):
        assert done.summary['arms'][arm]['segments'] == 2
        assert done.summary['arms'][arm]['inputs']['robot_joints']['messages'] == 1000
        # Not mixed: the delay is still found, and joint errors are those of true pairs.
        name = 'direct.joint_error_max'
        assert done.metrics(arm)[name]['value'] <= sound.metrics(arm)[name]['value']
        found = done.metrics(arm)['direct.latency_s']
        assert found['value'] == pytest.approx(faulty.ROBOT_LATE_S, abs=0.005)


HOSTILE = '[red]\x1b[31m\x07' + 'x' * 10_000 + '\n[/red]'


@pytest.mark.parametrize(('topic', 'make'), [
    ('mapping', lambda event: faulty.text(HOSTILE)),
    ('joint_states', joints_of(('shoulder', HOSTILE), (0.1, 0.2))),
    ('joint_states', joints_of((HOSTILE, HOSTILE + 'y'), (0.1, 0.2))),
    ('joint_states', joints_of(('shoulder', *(f'j{k}' for k in range(5000))), range(5001))),
])
def test_hostile_names_are_printed_safely(bench, sound, topic, make):
    done = bench.run(right(topic, make))
    assert done.status == 0
    text = done.sentence(f'/right/{topic}')
    assert '[red]' in text or 'j1' in text
    assert not {'\x1b', '\x07'} & set(done.out + done.err)
    assert len(done.out) < 40_000
    done.check_left_arm(sound)


def test_one_malformed_message_is_counted_and_dated(bench, sound):
    events = right('joint_states', lambda event: event.data[:20], start_s=6.0, end_s=6.02)
    done = bench.run(events)
    assert done.status == 0
    done.sentence('1 of 1000 messages on /right/joint_states cannot be decoded and is left out',
                  'it came 6.002 s after the start: ')
    done.check_left_arm(sound)
    for name in ('direct.latency_s', 'direct.joint_error_rms'):
        assert done.metrics()[name]['status'] == 'ok'


def test_a_clock_that_is_ahead_is_a_problem_and_marks_its_numbers(bench, sound):
    done = bench.run(right('joint_states', lambda event: faulty.stamped(
        event, faulty.stamp_ns(event) + 30_000_000)))
    assert done.status == 0
    done.sentence('right: robot_joints (/right/joint_states): smallest transport age is ',
                  'below zero', 'not synchronised')
    rows = [line for line in done.out.splitlines() if line.startswith('latency_s ')]
    left, mine = rows if done.out.index('Arm left') < done.out.index('Arm right') else rows[::-1]
    assert '(' not in left and '(' in mine
    done.check_left_arm(sound)


def test_a_session_begins_with_its_first_message_even_if_that_is_none(bench, sound):
    first = min(event.log_ns for event in faulty.healthy())
    topic = next(event.topic for event in faulty.healthy() if event.log_ns == first)
    done = bench.run(change(topic, lambda event: event.data[:5], end_s=0.1))
    assert done.summary['session']['start_ns'] == first == (
        sound.summary['session']['start_ns'])
    done.sentence(f'messages on {topic} cannot be decoded', 'came 0.000 s after the start')


def test_only_malformed_samples_are_nothing_evaluated(bench):
    events = [event if event.topic.rpartition('/')[2] not in faulty.TRANSPORT_NS
              else replace(event, data=b'\x00\x01') for event in faulty.short()]
    done = bench.run(events)
    assert done.status == 1
    assert done.sentences[0].startswith(
        'Nothing was evaluated: none of the 3200 messages on /left/command, ')


def other_type(event):
    """Return a JointState that was recorded as if it were of another type."""
    return replace(event, type_name=TEXT, data=faulty.text('x'))


@pytest.mark.parametrize('storage', [faulty.StoragePlugin.MCAP, faulty.StoragePlugin.SQLITE3])
@pytest.mark.parametrize('stretch', [{'end_s': 0.01}, {'start_s': 7.97}])
def test_a_topic_with_two_types_is_one_sentence(bench, short_sound, storage, stretch,
                                                monkeypatch):
    """Whichever comes first, and be it one message of four hundred."""
    write = faulty.write
    monkeypatch.setattr(faulty, 'write', lambda path, found: write(path, found, storage=storage))
    done = bench.run(change('/right/joint_states', other_type, events=faulty.short(), **stretch))
    assert done.status == 0
    done.sentence('Topic /right/joint_states of rec occurs as ', TEXT,
                  'sensor_msgs/msg/JointState', 'so it is not evaluated', 'record again')
    done.check_left_arm(short_sound)
    assert [note for note in done.summary['notes'] if 'occurs' in note] == []


@pytest.mark.parametrize('name', ['nan pose for 0.3 s', 'hand of a wrong type'])
def test_as_a_process(tmp_path, name):
    config = tmp_path / 'evaluator.yaml'
    config.write_text(faulty.CONFIG, encoding='utf-8')
    path = faulty.write(tmp_path / 'rec', FAULTS[name].events())
    done = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', str(path), '--config', str(config),
         '--no-progress'], cwd=tmp_path, capture_output=True, text=True, timeout=300,
        check=False, env={'PYTHONPATH': str(ROOT), 'OMP_NUM_THREADS': '1', 'PATH': ''})
    assert done.returncode == 0
    assert done.stderr.count('\n') == 1 and 'Traceback' not in done.stderr
    for word in FAULTS[name].words:
        assert word in done.stderr
    assert 'Results: rec_summary' in done.stdout
    assert (tmp_path / 'rec_summary' / 'summary.json').is_file()
    assert SECONDS == 20.0  # the counts in the sentences are those of 20 s at 50 Hz
