# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Robot descriptions with one fault, and parameters that do not fit the robot.

One sentence and status 1; the other arm keeps all its numbers, and the faulty one those that
need no description.
"""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import faulty_recording as faulty
import pytest
from faulty_recording import CONFIG, URDF, short

ROOT = Path(__file__).parents[2]
TOPIC = 'right: /right/robot_description: '


def joint(name: str, parent: str, child: str, kind: str = 'fixed') -> str:
    """Return the sound description with a joint more."""
    return URDF.replace('</robot>', f'<joint name="{name}" type="{kind}"><parent link="{parent}"/>'
                        f'<child link="{child}"/></joint></robot>')


ENTITIES = ''.join(f'<!ENTITY e{k} "{f"&e{k - 1};" * 10}">' for k in range(1, 12))
BOMB = f'<!DOCTYPE r [<!ENTITY e0 "boom">{ENTITIES}]>' + URDF.replace('planar', '&e11;')
XACRO = URDF.replace('<robot ', '<robot xmlns:xacro="http://www.ros.org/wiki/xacro" ').replace(
    '</robot>', '<xacro:include filename="arm.xacro"/></robot>')
# Text, and the words of the sentence behind its origin.
DESCRIPTIONS = {
    'empty': ('', ('the text is empty', 'give a URDF')),
    'no xml': ('hello', ('the text is not XML', 'line 1', 'give a complete URDF')),
    'cut': (URDF[:300], ('the text is not XML', 'line 5', 'give a complete URDF')),
    'html': ('<html><body/></html>', ('<html>, not <robot>', 'give a URDF')),
    'cycle': (joint('back', 'tool', 'base'), ('form a cycle through link', 'a URDF is a tree')),
    'two parents': (joint('back', 'base', 'tool'),
                    ("link 'tool' has two parents, joints 'wrist' and 'back'",)),
    'unknown parent': (joint('back', 'bsae', 'base'),
                       ("joint 'back' has the parent link 'bsae'", 'does not exist', 'correct')),
    'entity bomb': (BOMB, ('a document type, entity', 'not allowed', 'remove it')),
    'external entity': (
        '<!DOCTYPE r [<!ENTITY e SYSTEM "file:///etc/passwd">]>' + URDF.replace('planar', '&e;'),
        ('external reference is not allowed', 'remove it')),
    'external document type': ('<!DOCTYPE robot SYSTEM "http://localhost:9/x.dtd">' + URDF,
                               ('not allowed', 'remove it')),
    'unexpanded macro file': (XACRO, ('xacro file', 'expand it first with "xacro FILE >')),
    'nan limit': (URDF.replace('lower="-3"', 'lower="nan"', 1),
                  ("joint 'shoulder' has limit lower NaN", 'finite')),
    'limits exchanged': (URDF.replace('lower="-3"', 'lower="4"', 1),
                         ("joint 'shoulder' has limit lower 4 above upper 3", 'exchange')),
    'text for a number': (URDF.replace('xyz="0.4 0 0"', 'xyz="0.4 zero 0"'),
                          ("joint 'elbow' has xyz 'zero'", 'not a number', 'correct it')),
    'hostile joint': (URDF.replace('name="elbow" type="revolute"',
                                   f'name="[red]&#10;{"x" * 10_000}" type="wheel"'),
                      ("joint '[red]", "unknown type 'wheel'", 'use one of revolute')),
}


@pytest.mark.parametrize('name', DESCRIPTIONS)
def test_a_faulty_description_is_one_sentence_and_costs_its_own_arm_only(
        bench, short_sound, name):
    text, words = DESCRIPTIONS[name]
    done = bench.run(faulty.change('/right/robot_description', lambda event: faulty.text(text),
                                   events=short()))
    assert done.status == 0
    assert done.sentence(*words).startswith(TOPIC)
    assert 'root:' not in done.out + done.err and 'boomboom' not in done.out + done.err
    done.check_left_arm(short_sound)
    inputs = done.summary['arms']['right']['inputs']
    assert inputs['hand']['messages'] == 400
    assert done.metrics()['direct.engaged_time_s'] == (
        short_sound.metrics()['direct.engaged_time_s'])
    # One cause has one wording, whichever metric it takes away.
    assert {metric['reason'].partition(',')[0] for metric in done.metrics().values()
            if 'robot description' in metric['reason']} == {
        'this arm has no usable robot description'}


def put(old: str, new: str) -> str:
    """Return the sound parameter file with the right arm's text replaced."""
    assert old in CONFIG, old
    return CONFIG.replace(old, new, 1)


ROBOT = ('joint_', 'latency_response_s', 'limit_', 'manipulability_', 'engage', 'reach_p95_norm')
# Parameter file, words, what stays of the right arm (beginnings of metric names).
MISFITS = {
    'base link': (put('base_link: base', 'base_link: bsae'),
                  (TOPIC + "there is no link 'bsae'", "did you mean 'base'?"), ('engage',)),
    'tip link': (put('tip_link: tool', 'tip_link: tcp_1'),
                 (TOPIC + "there is no link 'tcp_1'", 'the links are base, fore, tool, upper'),
                 ('engage',)),
    'shoulder link': (put('tip_link: tool', 'tip_link: tool\n          shoulder_link: uper'),
                      ("there is no link 'uper'", "did you mean 'upper'?"), ('engage',)),
    'no joint between': (put('tip_link: tool', 'tip_link: base'),
                         ("no joint between 'base' and 'base'",), ('engage',)),
    'tip above base': (
        put('base_link: base\n          tip_link: tool',
            'base_link: tool\n          tip_link: base'),
        ("right: tip_link 'base' is above base_link 'tool'", 'exchange the two'),
        ('joint_', 'engage', 'limit_')),
    'joint names': (
        put('tip_link: tool', 'tip_link: tool\n          joint_names: [shoulder, elbo]'),
        ('right: robot.joint_names leaves out elbow, which moves tool', 'has elbo',
         'are evaluated instead (shoulder, elbow)', 'correct joint_names or remove it'), ('',)),
    'joint order': (
        put('topic: /right/command', 'topic: /right/command\n          joint_order: [shoulder]'),
        ('right: command.joint_order leaves out elbow', 'not evaluated'),
        ('limit_', 'manipulability_', 'engage', 'reach_p95_norm')),
    'units of an unknown joint': (
        put('tip_link: tool', 'tip_link: tool\n          joints: {elbo: {scale: 2.0}}'),
        ('right: robot.joints.elbo is not used', 'among the joints shoulder, elbow',
         'did you mean elbow?'), ('',)),
    'enabled field': (
        put('topic: /right/command', 'topic: /right/command\n          enabled_field: on_off'),
        ('Topic /right/command', "has no boolean array 'on_off'", 'remove enabled_field'),
        ('limit_', 'manipulability_', 'engage', 'reach_p95_norm')),
    'mapping joint': (put('elbow: {source', 'elbw: {source'),
                      ("mapping 'direct' names robot joint 'elbw'", 'did you mean elbow?'),
                      ROBOT),
    'mapping without a joint': (
        put('              elbow: {source: human_elbow}\n', ''),
        ("mapping 'direct' gives no source for robot joint elbow",
         'add mappings.direct.joints.elbow.source'), ROBOT),
    'mapping source': (
        put('human_elbow', 'human_elbo'),
        ('operator_joints (/right/operator): joint human_elbo is missing',
         'has human_shoulder, human_elbow', 'did you mean human_elbow?', '(400 times)'), ROBOT),
    'mapping scale': (
        put('scaling: metric', 'scaling: normalized').replace(
            '          arm_length_m: 0.7\n', '', 1),
        ("right: mapping 'reach' scales by the arm lengths", 'give operator.arm_length_m'),
        (*ROBOT, 'tracking_error_rms_norm', 'latency_s')),
}


@pytest.mark.parametrize('name', MISFITS)
def test_parameters_that_do_not_fit_are_one_sentence(bench, short_sound, name):
    config, words, kept = MISFITS[name]
    done = bench.run(short(), config)
    assert done.status == 0
    done.sentence(*words)
    done.check_left_arm(short_sound)
    beginnings = tuple(f'direct.{one}' for one in kept)
    assert any(one.startswith(beginnings) for one in short_sound.metrics())
    assert [one for one in done.changed(short_sound)
            if one.startswith(beginnings) and not one.endswith('_operator')] == []


FILE = put('description_topic: /right/robot_description', 'description_file: arm.urdf')


@pytest.mark.parametrize(('content', 'words'), [
    (None, ('arms.right.robot.description_file is ', 'arm.urdf', 'No such file', 'folder of the')),
    (b'\xff\xfe\x00', ('arm.urdf', 'no UTF-8 text (byte 0)', 'save')),
])
def test_a_description_file_that_cannot_be_read_leaves_no_folder(bench, content, words):
    done = bench.run(short(), FILE, files={} if content is None else {'arm.urdf': content})
    assert (done.status, done.out) == (1, '')
    done.sentence(*words)
    assert not done.folder.exists()


def test_a_description_file_that_is_a_folder(bench):
    (bench.folder / 'arm.urdf').mkdir()
    done = bench.run(short(), FILE)
    assert (done.status, done.out) == (1, '')
    done.sentence('arm.urdf', 'which is no file', 'name a URDF file')


@pytest.mark.parametrize('name', ['empty', 'cycle', 'entity bomb', 'unexpanded macro file'])
def test_a_faulty_description_file(bench, short_sound, name):
    text, words = DESCRIPTIONS[name]
    done = bench.run(short(), FILE, files={'arm.urdf': text})
    assert done.status == 0
    assert done.sentence(*words).startswith('right: arm.urdf: ')
    done.check_left_arm(short_sound)


def test_description_and_message_at_fault_are_both_named(bench):
    events = faulty.change('/right/robot_description', lambda event: faulty.text('hello'),
                           events=short())
    events = faulty.change('/left/operator', lambda event: event.data[:9], events=events)
    done = bench.run(events)
    assert done.status == 0 and len(done.sentences) == 2
    assert 'the text is not XML' in done.err and '400 of 400 messages on /left/op' in done.err


def test_as_a_process(tmp_path):
    path = faulty.write(tmp_path / 'rec', faulty.change(
        '/right/robot_description', lambda event: faulty.text(BOMB), events=short()))
    (tmp_path / 'evaluator.yaml').write_text(CONFIG, encoding='utf-8')
    done = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', str(path), '--config',
         'evaluator.yaml', '--no-progress'], cwd=tmp_path, capture_output=True, text=True,
        timeout=120, check=False, env={'PYTHONPATH': str(ROOT), 'PATH': ''})
    assert done.returncode == 0
    assert done.stderr == (
        f'teleop_eval summarize: {TOPIC}a document type, entity or external reference is not '
        'allowed in a URDF: remove it.\n')
    assert (tmp_path / 'rec_summary' / 'metrics.csv').is_file()
