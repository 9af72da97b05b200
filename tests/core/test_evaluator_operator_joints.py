# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""An operator known by joints and a description: the hand follows, shoulder and length too."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import synthetic_session as syn
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation

from teleop_eval.core.errors import ConfigError
from teleop_eval.core.evaluator import SessionEvaluator
from teleop_eval.core.settings import from_parameters

URDF = (Path(__file__).parents[2] / 'config' / 'human_arm.urdf').read_text(encoding='utf-8')
LINKAGE = (Path(__file__).parents[2] / 'config' / 'wearable_linkage.urdf').read_text('utf-8')
NAMES = ('shoulder_flexion', 'shoulder_abduction', 'shoulder_rotation', 'elbow_flexion',
         'forearm_rotation', 'wrist_flexion', 'wrist_deviation')
POSTURE = np.array([0.7, 0.3, 0.1, 1.0, 0.2, 0.1, -0.1])
DELAY = 0.12
LENGTH = 0.44 * 1.75
# The tool's x axis lies along the fingers, far from where its wrist axes line up.
TO_TOOL = Rotation.from_euler('y', 90.0, degrees=True)
OPERATOR = {
    'operator__hand_topic': None, 'operator__shoulder_m': None, 'operator__arm_length_m': None,
    'operator__joints_topic': '/suit', 'operator__base_link': 'human_arm_base',
    'operator__tip_link': 'finger_tip', 'operator__description_file': 'human_arm.urdf',
    'mappings__direct__hand_to_tool_xyzw': TO_TOOL.as_quat().tolist()}

_swing = syn.wander(4, centre=np.zeros(7), size=0.25, width=7, low=0.1, high=1.5)


def joints_at(times):
    """Return operator joints (n, 7) that move about a bent arm."""
    return POSTURE + _swing(times) * [1, 1, 1, 1, 1, 0.8, 0.8]


def hand(q, height=1.75):
    """Return tip (n, 3) and turns of the human arm, from anatomy and the published shares."""
    def turn(axis, angle):
        return Rotation.from_rotvec(np.outer(angle, axis))
    upper = turn([0, -1, 0], q[:, 0]) * turn([-1, 0, 0], q[:, 1]) * turn([0, 0, 1], q[:, 2])
    lower = upper * turn([0, -1, 0], q[:, 3])
    end = lower * turn([0, 0, 1], q[:, 4]) * turn([1, 0, 0], q[:, 5]) * turn([0, -1, 0], q[:, 6])
    down = [0.0, 0.0, -height]
    return 0.186 * upper.apply(down) + 0.146 * lower.apply(down) + 0.108 * end.apply(down), end


def evaluator(text=URDF, **more):
    settings = from_parameters(syn.arm_parameters(**{**syn.TASK, **OPERATOR, **more}))
    texts = {'right': syn.urdf(), 'right.operator': text}
    return SessionEvaluator(settings, descriptions={
        name: one for name, one in texts.items() if one is not None})


def session(end=24.0, *, names=NAMES, factor=1.0, topic='/suit', start=0.0):
    """Return joints of the operator and a robot that follows its hand after a delay."""
    made = syn.Feed()
    t = syn.clock(start, end, 100.0)
    made.joints(topic, t, factor * joints_at(t), names)
    t = syn.clock(start, end, 125.0, phase=0.7)
    tip, turns = hand(joints_at(t - DELAY))
    return made.joints('/joints', t, syn.joints_for(tip / LENGTH, turns * TO_TOOL))


def summary_of(target, messages):
    syn.feed(target, messages)
    return syn.closed(target)


@pytest.fixture(scope='module')
def followed():
    """Return evaluator and summary of a session with an operator known by joints."""
    target = evaluator()
    return target, summary_of(target, session().messages())


def test_hand_shoulder_and_length_follow_from_the_joints(followed):
    target, summary = followed
    found = syn.metrics(summary)
    assert summary['problems'] == []
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3
    assert found['orientation_error_compensated_rms_rad']['value'] < 5e-3
    geometry = summary['arms']['right']['geometry']
    assert_allclose(geometry['operator_arm_length_m'], LENGTH, rtol=1e-9)
    assert_allclose(geometry['operator_shoulder_m'], [0, 0, 0], atol=1e-12)
    assert geometry['operator_scale_uncertainty'] is None
    assert "reach of the operator's chain 0.7700 m" in geometry['notes'][0]
    assert 'hand' not in target.arms['right'].intakes


def test_normalised_hand_is_that_of_anatomy(followed):
    """The percentiles of |u_o| against those of the closed form at the cells' centres."""
    _, summary = followed
    found = syn.metrics(summary)
    radius = np.linalg.norm(hand(joints_at(np.arange(0.005, 24.0, 0.01)))[0], axis=1) / LENGTH
    assert_allclose(found['reach_p50_norm_operator']['value'], np.median(radius), atol=0.004)
    assert_allclose(found['reach_p95_norm_operator']['value'], np.percentile(radius, 95),
                    atol=0.004)


def test_joints_and_the_hand_they_make_give_the_same_numbers(followed):
    """A session with the hand's poses, which this test computes, is the outside check."""
    made = session()
    t = syn.clock(0.0, 24.0, 100.0)
    tip, turns = hand(joints_at(t))
    made.poses('/hand', t, tip, turns.as_quat())
    target = syn.evaluator(syn.arm_parameters(**{
        **syn.TASK, 'operator__arm_length_m': LENGTH,
        'mappings__direct__hand_to_tool_xyzw': TO_TOOL.as_quat().tolist()}))
    by_hand = syn.metrics(summary_of(target, [
        one for one in made.messages() if one[1] != '/suit']))
    by_joints = syn.metrics(followed[1])
    assert set(by_hand) == set(by_joints)
    for name, tolerance in (
            ('latency_s', 2e-4), ('tracking_error_rms_norm', 2e-4),
            ('orientation_error_rms_rad', 5e-4), ('reach_p95_norm_operator', 2e-3),
            ('workspace_coverage_operator', 2e-3)):
        assert abs(by_hand[name]['value'] - by_joints[name]['value']) < tolerance, name


def test_names_in_another_order_other_joints_and_units(followed):
    order = [3, 6, 0, 2, 1, 5, 4]
    made = syn.Feed()
    t = syn.clock(0.0, 24.0, 100.0)
    degrees = np.degrees(joints_at(t))[:, order]
    made.joints('/suit', t, np.column_stack([degrees, t]), [*(NAMES[i] for i in order), 'thumb'])
    for message in session().messages():
        if message[1] == '/joints':
            made._messages.append((message[0], True, len(made._messages), *message[1:]))
    scale = {f'operator__joints__{name}__scale': math.pi / 180.0 for name in NAMES}
    found = syn.metrics(summary_of(evaluator(**scale), made.messages()))
    for name in ('latency_s', 'tracking_error_rms_norm', 'reach_p95_norm_operator'):
        assert_allclose(found[name]['value'], syn.metrics(followed[1])[name]['value'], rtol=1e-9)


def test_a_missing_joint_is_named_and_costs_only_the_operator():
    made = session(12.0)
    wrong = [*NAMES[:3], 'elbow_flex', *NAMES[4:]]
    messages = [(at, topic, syn.JointSample(one.stamp_ns, tuple(wrong), one.positions, None)
                 if topic == '/suit' else one) for at, topic, one in made.messages()]
    summary = summary_of(evaluator(), messages)
    assert any('joint elbow_flexion is missing' in text and 'did you mean elbow_flex' in text
               for text in summary['problems'])
    found = syn.metrics(summary)
    assert found['reach_p95_norm']['status'] == 'ok'
    assert found['latency_s']['status'] != 'ok' and found['latency_s']['reason']


def test_a_unit_of_no_such_joint_is_a_problem():
    target = evaluator(operator__joints__elbow__scale=2.0)
    assert any('operator.joints.elbow is not used' in text for text in target.problems)


def test_another_stature_scales_the_arm_and_is_uncertain():
    """The same joints give the same normalised motion: the robot still follows."""
    target = evaluator(operator__stature_m=1.925, operator__description_stature_m=1.75)
    summary = summary_of(target, session(16.0).messages())
    geometry, found = summary['arms']['right']['geometry'], syn.metrics(summary)
    assert_allclose(geometry['operator_arm_length_m'], 0.44 * 1.925, rtol=1e-9)
    assert geometry['operator_scale_uncertainty'] == 0.12
    assert 'scaled by 1.1000 to the stature 1.925 m (+-12%)' in geometry['notes'][0]
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3
    assert found['tracking_error_compensated_rms_norm']['details']['scale_uncertainty'] == 0.12


def test_a_configured_length_and_shoulder_come_first():
    at = [0.05, 0.0, -0.1]
    target = evaluator(operator__arm_length_m=0.8, operator__shoulder_m=at)
    geometry = summary_of(target, session(8.0).messages())['arms']['right']['geometry']
    assert geometry['operator_arm_length_m'] == 0.8
    assert geometry['operator_shoulder_m'] == at
    target = evaluator(operator__shoulder_m=at)
    # From there the farthest finger tip is the stretched arm on the line away from it.
    arm = target.arms['right'].operator
    assert LENGTH < arm.length_m <= LENGTH + np.linalg.norm(at)


def test_a_joint_mapping_keeps_its_sources_beside_the_hand():
    """Robot yaw follows an operator joint that is not in the chain: both kinds are there."""
    mapping = {f'mappings__joints__joints__{joint}__source': source for joint, source in zip(
        syn.JOINTS, ('shoulder_flexion', 'shoulder_abduction', 'trigger', 'forearm_rotation',
                     'wrist_flexion', 'wrist_deviation'), strict=True)}
    target = evaluator(mappings__joints__kind='joint_space', active_mapping__fixed='joints',
                       **mapping)
    made = syn.Feed()
    t = syn.clock(0.0, 20.0, 100.0)

    def sources(times):
        return np.column_stack([joints_at(times), 0.6 + 0.1 * np.sin(1.7 * times)])

    made.joints('/suit', t, sources(t), (*NAMES, 'trigger'))
    t = syn.clock(0.0, 20.0, 125.0, phase=0.7)
    made.joints('/joints', t, sources(t - DELAY)[:, [0, 1, 7, 4, 5, 6]])
    summary = summary_of(target, made.messages())
    assert summary['problems'] == []
    assert set(target.arms['right'].setup.models) == {'direct', 'joints'}
    found = syn.metrics(summary, 'joints')
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3
    assert found['workspace_coverage_operator']['status'] == 'ok'


def test_a_description_that_cannot_be_used_is_a_problem_and_the_rest_goes_on():
    target = evaluator(operator__tip_link='fingertip')
    summary = summary_of(target, session(12.0).messages())
    assert any("no link 'fingertip'" in text and "'finger_tip'" in text
               for text in summary['problems'])
    found = syn.metrics(summary)
    assert found['workspace_coverage_operator']['status'] == 'insufficient'
    assert 'no usable description of the operator' in (
        found['workspace_coverage_operator']['reason'])
    assert found['reach_p95_norm']['status'] == 'ok'


def test_a_description_topic_makes_what_came_before_begin_anew():
    target = evaluator(None, operator__description_file=None,
                       operator__description_topic='/human')
    made = session(60.0)
    made.text(40.0, '/human', URDF)
    summary = summary_of(target, made.messages())
    assert any('no operator description came on /human within 30 s' in text
               for text in summary['problems'])
    found = syn.metrics(summary)
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['engaged_time_s']['value'] < 21.0
    # It stays after a reset.
    target.add(syn.ns(60.5), '/teleop_eval/session_event', syn.TextSample('reset'))
    assert_allclose(target.arms['right'].operator.length_m, LENGTH, rtol=1e-9)


def test_a_carried_shoulder_moves_with_its_joint():
    """The human arm on a column: the column's joint lifts shoulder and hand alike."""
    column = ('<link name="floor"/><joint name="lift" type="prismatic"><parent link="floor"/>'
              '<child link="human_arm_base"/><axis xyz="0 0 1"/>'
              '<limit lower="0" upper="1" effort="1" velocity="1"/></joint></robot>')
    target = evaluator(URDF.replace('</robot>', column), operator__base_link='floor')
    made = syn.Feed()
    t = syn.clock(0.0, 20.0, 100.0)
    made.joints('/suit', t, np.column_stack([joints_at(t), 0.5 + 0.3 * np.sin(0.9 * t)]),
                (*NAMES, 'lift'))
    for message in session(20.0).messages():
        if message[1] == '/joints':
            made._messages.append((message[0], True, len(made._messages), *message[1:]))
    summary = summary_of(target, made.messages())
    found, geometry = syn.metrics(summary), summary['arms']['right']['geometry']
    assert (geometry['operator_shoulder_m'], geometry['operator_shoulder_moves']) == (None, True)
    assert_allclose(geometry['operator_arm_length_m'], LENGTH, rtol=1e-9)
    assert abs(found['latency_s']['value'] - DELAY) < 1e-3
    assert found['tracking_error_compensated_rms_norm']['value'] < 2e-3


@pytest.mark.parametrize(('more', 'words'), [
    ({'operator__hand_topic': '/hand'}, 'a description.*also hand_topic; keep one'),
    ({'operator__description_topic': '/d'}, 'both description_topic and description_file'),
    ({'operator__joints_topic': None}, 'joints_topic is missing'),
    ({'operator__tip_link': None}, 'base_link and tip_link are needed'),
    ({'operator__description_stature_m': 1.75}, 'stature_m is missing'),
    ({'operator__stature_m': 1.8}, 'description_stature_m is missing.*1.75 for human_arm.urdf'),
    ({'operator__description_file': None}, 'base_link belongs to a description'),
    ({'operator__shoulder_m': [0, 0, 1], 'operator__shoulder_link': 'wrist'},
     'both shoulder_m and shoulder_link'),
])
def test_what_does_not_fit_together_is_one_sentence(more, words):
    with pytest.raises(ConfigError, match=f'arms.right.operator.*{words}'):
        from_parameters(syn.arm_parameters(**{**syn.TASK, **OPERATOR, **more}))


def test_the_linkage_takes_the_wearers_shoulder_by_its_link():
    target = evaluator(LINKAGE, operator__base_link='back_plate', operator__tip_link='hand_grip',
                       operator__shoulder_link='wearer_shoulder', operator__arm_length_m=0.62)
    assert_allclose(target.arms['right'].operator.shoulder_m, [0.09, -0.19, 0.02])
    assert target.arms['right'].operator.length_m == 0.62
    assert target.problems == []
