# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A recording whose operator is known by joints and a description file."""

from __future__ import annotations

import re

import pytest
import synthetic_recording as synthetic

# The operator's arm is the robot's, 0.7 m long, with the operator's joint names.
OPERATOR = re.sub(r'joint name="(shoulder|elbow)"', r'joint name="human_\1"', synthetic.URDF)
CONFIG = synthetic.CONFIG.replace(
    'joints_topic: operator/joint_states\n',
    'joints_topic: operator/joint_states\n          description_file: suit.urdf\n'
    '          base_link: base\n          tip_link: tool\n')


@pytest.fixture
def made(bench):
    """Return a recording with its parameter file and the operator's description."""
    found = synthetic.make(bench.folder, seconds=30.0)
    found.config.write_text(CONFIG, encoding='utf-8')
    (bench.folder / 'suit.urdf').write_text(OPERATOR, encoding='utf-8')
    return found


def test_the_hand_follows_and_the_description_is_kept(bench, made):
    done = bench.command(made.path, '--config', made.config, '--out', bench.folder / 'out',
                         '--no-progress')
    assert (done.status, done.sentences) == (0, [])
    geometry = done.summary['arms']['right']['geometry']
    assert geometry['operator_arm_length_m'] == pytest.approx(0.7, abs=1e-9)
    assert geometry['operator_shoulder_m'] == pytest.approx([0.0, 0.0, 0.0], abs=1e-12)
    found = done.metrics()
    assert found['direct.workspace_coverage_operator']['status'] == 'ok'
    # Operator and robot have the same arm and angles.
    assert found['direct.reach_p95_norm_operator']['value'] == pytest.approx(
        found['direct.reach_p95_norm']['value'], abs=0.01)
    assert (done.folder / 'description_right.operator.urdf').read_text() == OPERATOR

    # The folder's own configuration needs no other file and gives the same again.
    (bench.folder / 'suit.urdf').unlink()
    again = bench.command(made.path, '--config', done.folder / 'config.yaml', '--out',
                          bench.folder / 'again', '--no-progress', out='again')
    assert (again.status, again.sentences) == (0, [])
    assert again.metrics() == found


def test_the_generic_arm_is_found_and_its_joints_are_missed(bench, made):
    made.config.write_text(CONFIG.replace(
        'suit.urdf', 'package://teleop_eval/config/human_arm.urdf').replace(
        'base_link: base\n          tip_link: tool\n        robot',
        'base_link: human_arm_base\n          tip_link: finger_tip\n        robot'))
    done = bench.command(made.path, '--config', made.config, '--out', bench.folder / 'out',
                         '--no-progress')
    assert done.summary['arms']['right']['geometry']['operator_arm_length_m'] == (
        pytest.approx(0.77, abs=1e-9))
    assert any('elbow_flexion' in text and 'is missing in a message that has human_shoulder'
               in text for text in done.sentences)
