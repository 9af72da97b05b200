# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Parameter files with one fault: one sentence that names file and line or parameter, no folder.

The traps are those of rcl's parser: what it refuses, and what it loses without a word.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import faulty_recording as faulty
import pytest
from faulty_recording import short

ROOT = Path(__file__).parents[2]
CONFIG = faulty.CONFIG
JOINTS = """\
            joints:
              shoulder: {source: human_shoulder}
              elbow: {source: human_elbow}
"""


def put(old: str, new: str, times: int = 1) -> str:
    """Return the sound parameter file with its first such text replaced."""
    assert old in CONFIG, old
    return CONFIG.replace(old, new, times)


def with_line(line: str) -> str:
    """Return the sound parameter file with a line more at its end."""
    return f'{CONFIG}    {line}\n'


LINE_OF_LENGTH = CONFIG[:CONFIG.index('arm_length_m')].count('\n') + 1
LAST_LINE = CONFIG.count('\n') + 1
HOSTILE = '\\e[31m[red]\\n' + 'x' * 900
TRAPS = {
    'list of maps': (
        put(JOINTS, '            joints: [{name: a, source: human_shoulder}]\n'),
        ("'arms.right.mappings.direct.joints' is a list of maps", 'use named maps', 'line ')),
    'null': (with_line('time: {max_gap_s: null}'),
             (f'line {LAST_LINE}', "'time.max_gap_s' is null", 'remove the line')),
    'mixed array': (put('[0.0, 0.0, 0.0]', '[0, 0.0, 0.0]'),
                    ("'arms.right.operator.shoulder_m' mixes integer (0) and number (0.0)",
                     f'line {LINE_OF_LENGTH - 1}', 'decimal point')),
    'repeated key': (put('arm_length_m: 0.7', 'arm_length_m: 0.7\n          arm_length_m: 0.8'),
                     (f'line {LINE_OF_LENGTH + 1}', 'arm_length_m', 'given again',
                      f'line {LINE_OF_LENGTH})', 'remove one')),
    'tab': (put('          arm_length_m', '\t  arm_length_m'),
            (f'line {LINE_OF_LENGTH}', 'not valid YAML', 'spaces only')),
    'bracket left open': (put('[0.0, 0.0, 0.0]', '[0.0, 0.0, 0.0'),
                          ('line ', 'not valid YAML', 'brackets')),
    'alias': (put('arm_length_m: 0.7', 'arm_length_m: &a 0.7\n          stature_m: *a'),
              (f'line {LINE_OF_LENGTH + 1}', 'the alias *a', 'write the value out')),
    'empty list': (with_line('x: []'), (f'line {LAST_LINE}', "'x' is an empty list")),
    'wrong node name': (put('/**', '/teleop_evl'),
                        ('no section is for the node /teleop_eval', "'/teleop_evl'", "'/**:'")),
    'no ros__parameters': (put('  ros__parameters:\n', ''),
                           ('line ', "above any 'ros__parameters'", 'put it below')),
    'wrong ros__parameters': (put('ros__parameters', 'ros_parameters'),
                              ('line ', "above any 'ros__parameters'")),
    'empty file': ('', ('no arm is configured', 'give at least arms.NAME')),
    'no map': ('hello\n', ('line 1', 'a single value', "'/**:'")),
    'binary': ('/**:\n  ros__parameters:\n    a: "\x01"\n', ('not readable as YAML', 'UTF-8')),
    'unknown parameter': (
        put('arm_length_m', 'arm_lenght_m'),
        ('there is no parameter arms.right.operator.arm_lenght_m',
         'did you mean arms.right.operator.arm_length_m?')),
    'two unknown parameters': (
        put('arm_length_m', 'arm_lenght_m') + '    tine: {window_s: 2.0}\n',
        ('arms.right.operator.arm_lenght_m; did you mean arms.right.operator.arm_length_m?',
         'there is no section tine; did you mean time?')),
    'misspelt section': (
        put('        robot:\n', '        robt:\n'),
        ('evaluator.yaml: there is no section arms.right.robt; did you mean robot?',)),
    'section in the wrong place': (
        f'{CONFIG}    robot: {{tip_link: tool, base_link: base}}\n',
        ('evaluator.yaml: there is no section robot; did you mean arms.left.robot?',)),
    'text for a number': (put('arm_length_m: 0.7', 'arm_length_m: long'),
                          ('arms.right.operator.arm_length_m must be a number',
                           "but is the text 'long'")),
    'number for a text': (put('hand_topic: /right/hand', 'hand_topic: 5'),
                          ('hand_topic must be a text', 'is the number 5', 'quote it')),
    'truth for a number': (put('arm_length_m: 0.7', 'arm_length_m: yes'),
                           ('must be a number', 'the truth value True')),
    'out of range': (put('arm_length_m: 0.7', 'arm_length_m: 70.0'),
                     ('arm_length_m is 70 m', 'range 0.1 to 2 m', 'correct value or unit')),
    'infinite': (put('arm_length_m: 0.7', 'arm_length_m: .inf'), ('is inf', 'finite')),
    'two of three': (put('[0.0, 0.0, 0.0]', '[0.0, 0.0]'),
                     ('shoulder_m needs 3 numbers, but has 2',)),
    'no rotation': (put('arm_length_m: 0.7',
                        'arm_length_m: 0.7\n          axes_xyzw: [1.0, 1.0, 0.0, 0.0]'),
                    ('axes_xyzw has norm 1.414', 'x, y, z, w')),
    'wrong choice': (put('scaling: metric', 'scaling: metrc'),
                     ("scaling is 'metrc'", "one of 'normalized', 'metric'",
                      "did you mean 'metric'?")),
    'wrong sign': (put('source: human_elbow', 'source: human_elbow, sign: 0.5'),
                   ('joints.elbow.sign is 0.5', 'must be 1 or -1')),
    'bad name': (put('      right:\n', '      Right Arm:\n'),
                 ("the name 'Right Arm'", 'lower-case', 'rename it')),
    'bad topic': (put('/right/hand', '"/right hand/[red]"'),
                  ("arms.right.operator.hand_topic is '/right hand/[red]'", 'no topic name',
                   'letters, digits and _')),
    'fixed label unknown': (put('topic: /right/mapping', 'fixed: dirct'),
                            ("active_mapping.fixed is 'dirct'", 'direct, reach',
                             "did you mean 'direct'?")),
    'topic and fixed': (put('topic: /right/mapping', 'topic: /right/mapping\n          '
                            'fixed: direct'), ('both topic and fixed', 'keep one')),
    'no robot joints': (put('          joints_topic: /right/joint_states\n', ''),
                        ('arms.right.robot.joints_topic is missing', 'name the JointState')),
    'no base link': (put('          base_link: base\n', ''),
                     ('arms.right.robot.base_link and tip_link are needed',)),
    'thresholds': (with_line('thresholds: {latency_warn_s: 0.5}'),
                   ('latency_error_s (0.3 s) is below', 'latency_warn_s (0.5 s)', 'change')),
    'mapping kind': (put('kind: joint_space', 'kind: joint_spce'),
                     ("arms.right.mappings.direct.kind is 'joint_spce'",
                      'the known kinds are joint_space, task_space', "mean 'joint_space'?")),
    'no mapping kind': (put('            kind: joint_space\n', ''),
                        ('arms.right.mappings.direct.kind is missing', 'joint_space, task_space')),
    'mapping kind no text': (put('kind: joint_space', 'kind: 3'),
                             ('mappings.direct.kind must be a text', 'the number 3')),
    "another kind's parameter": (
        put('            kind: joint_space\n', '            kind: joint_space\n'
            '            operator_center_m: [0.0, 0.0, 0.0]\n'),
        ('arms.right.mappings.direct.operator_center_m is a parameter of the kind task_space',
         'arms.right.mappings.direct is of the kind joint_space', 'remove it or change the kind')),
    'misspelt parameter of a kind': (
        put('scaling: metric', 'scalng: metric'),
        ('there is no parameter arms.right.mappings.reach.scalng',
         'did you mean arms.right.mappings.reach.scaling?')),
    'scale given twice': (
        put('scale: 1.0\n', 'scale: 2.0\n            scale_xyz: [1.0, 2.0, 3.0]\n'),
        ('arms.right.mappings.reach has both scale and scale_xyz', 'keep one')),
    'no tool rotation': (
        put('scaling: metric', 'hand_to_tool_xyzw: [1.0, 0.0, 0.0, 1.0]'),
        ('arms.right.mappings.reach.hand_to_tool_xyzw has norm 1.414',)),
    'hostile name': (put('arm_length_m: 0.7', f'"{HOSTILE}": 0.7'),
                     ('there is no parameter arms.right.operator', '...')),
    'hostile value': (put('arm_length_m: 0.7', f'arm_length_m: "{HOSTILE}{"x" * 10_000}"'),
                      ('arm_length_m must be a number', '[red]', '...')),
    'hostile arm': (put('      right:\n', f'      "{HOSTILE}":\n'), ('the name', '[red]')),
}


@pytest.mark.parametrize('name', TRAPS)
def test_a_trap_is_one_sentence_and_nothing_is_made(bench, name):
    config, words = TRAPS[name]
    done = bench.run(short(), config)
    assert (done.status, done.out) == (1, '')
    text = done.sentence(*words)
    assert text.startswith(f'{bench.folder / "evaluator.yaml"}')
    assert not done.folder.exists()
    assert '\x1b' not in done.err and len(done.err) < 1000


@pytest.mark.parametrize('line', [
    'time: {max_gap_s: 1e-1}', 'thresholds: {latency_warn_s: 1e-3}', 'time: {window_s: 2}',
    'latency: {min_s: -.1}', 'time: {lateness_s: 0x1}', 'thresholds: {stale_s: .nan_}'])
def test_numbers_are_read_as_rcl_reads_them(bench, line):
    """1e-3 is a number to rcl although it is a text to YAML 1.1; .nan_ is none to both."""
    done = bench.run(short(), with_line(line))
    if line.endswith('_}'):
        done.sentence("thresholds.stale_s must be a number, but is the text '.nan_'")
    else:
        assert (done.status, done.err) == (0, '')


def test_results_that_are_there_stay_as_they_are(bench):
    kept = bench.folder / 'out'
    kept.mkdir()
    (kept / 'summary.json').write_text('{}', encoding='utf-8')
    done = bench.run(short(), put('arm_length_m', 'arm_lenght_m'))
    assert done.status == 1
    assert os.listdir(kept) == ['summary.json']
    assert (kept / 'summary.json').read_text(encoding='utf-8') == '{}'


@pytest.mark.parametrize(('name', 'text'), [
    ('missing.yaml', 'No such file'), ('', 'not a regular file'), ('a\0b', 'null byte'),
    ('x' * 5000, 'too long')])
def test_a_file_that_cannot_be_read(bench, name, text):
    path = faulty.write(bench.folder / 'rec', short())
    done = bench.command(path, '--config', f'{bench.folder}/{name}', '--out',
                         bench.folder / 'out')
    assert (done.status, done.out) == (1, '')
    done.sentence(text)
    assert not done.folder.exists()


def test_as_a_process(tmp_path):
    path = faulty.write(tmp_path / 'rec', short())
    (tmp_path / 'evaluator.yaml').write_text(TRAPS['mixed array'][0], encoding='utf-8')
    done = subprocess.run(
        [sys.executable, '-m', 'teleop_eval', 'summarize', str(path), '--config',
         'evaluator.yaml'], cwd=tmp_path, capture_output=True, text=True, timeout=120,
        check=False, env={'PYTHONPATH': str(ROOT), 'PATH': ''})
    assert (done.returncode, done.stdout) == (1, '')
    assert done.stderr.startswith('teleop_eval summarize: evaluator.yaml, line 8: the list ')
    assert done.stderr.count('\n') == 1
    assert sorted(os.listdir(tmp_path)) == ['evaluator.yaml', 'rec']
