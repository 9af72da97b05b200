# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What comes in wrong, late, seldom or twice: never an exception, always a sentence or count."""

from __future__ import annotations

import json

import numpy as np
import pytest
import synthetic_session as syn
from hypothesis import given, settings
from hypothesis import strategies as st

from teleop_eval.core.evaluator import EVENT_TOPIC

NAMES = ('a', 'b')


def run(made, text=None, **parameters):
    """Return the summary of the turret in task space."""
    target = syn.evaluator(syn.arm_parameters(**{**syn.TASK, **parameters}), text)
    syn.feed(target, made.messages())
    return syn.closed(target)


def problem_with(summary, *words):
    """Return the problem sentences that contain all words."""
    return [text for text in summary['problems'] if all(word in text for word in words)]


def test_empty_session():
    for parameters in (syn.arm_parameters(**syn.TASK), syn.arm_parameters(**syn.BARE)):
        target = syn.evaluator(parameters)
        assert target.poll() == []
        assert target.diagnostics(syn.ns(0.0))
        summary = target.finish()
        assert summary['arms']['right']['mappings'] == {}
        assert problem_with(summary, 'no message came on /joints')
        json.dumps(summary, allow_nan=False)


def test_one_message_only():
    made = syn.Feed().poses('/hand', [0.0], [[0.1, 0.2, 0.3]])
    summary = run(made)
    assert summary['arms']['right']['segments'] == 0
    assert summary['arms']['right']['inputs']['hand']['messages'] == 1
    assert problem_with(summary, '/joints')
    assert not problem_with(summary, '/hand')
    made = syn.session(20.0, motion=syn.wander())
    made.joints('/command', [1.0], [np.zeros(6)])
    summary = run(made, command__topic='/command')
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


def test_not_a_number_is_counted_and_left_out():
    made = syn.session(20.0, motion=syn.wander())
    for k, bad in enumerate((np.nan, np.inf, -np.inf, 1e200)):
        made.poses('/hand', [5.0011 + k], [[0.1, bad, 0.3]])
        made.joints('/joints', [7.0011 + k], [[0.1, 0.1, bad, 0.0, 0.0, 0.0]])
    made.poses('/hand', [15.0011], [[0.1, 0.2, 0.3]], [[0.0, np.nan, 0.0, 1.0]])
    summary = run(made)
    inputs = summary['arms']['right']['inputs']
    assert inputs['hand']['non_finite'] == 5
    assert inputs['robot_joints']['non_finite'] == 4
    assert problem_with(summary, '/hand', 'nan')
    found = syn.metrics(summary)
    assert found['tracking_error_max_norm']['value'] < 2e-3
    json.dumps(summary, allow_nan=False)


def test_zero_quaternion_is_no_orientation():
    made, t = syn.Feed(), syn.clock(0.0, 12.0, 100.0)
    motion = syn.wander()
    made.poses('/hand', t, 0.6 * motion(t), np.zeros((len(t), 4)))
    made.joints('/joints', t, syn.joints_for(motion(t)))
    summary = run(made, mappings__direct__hand_to_tool_xyzw=[0.0, 0.0, 0.0, 1.0])
    found = syn.metrics(summary)
    assert found['orientation_error_rms_rad']['status'] == 'insufficient'
    assert found['tracking_error_rms_norm']['status'] == 'ok'


def test_missing_joint_is_named():
    made, t = syn.session(0.0, motion=syn.wander()), syn.clock(0.0, 8.0, 50.0)
    made.joints('/joints', t, np.zeros((len(t), 5)), syn.JOINTS[:-1])
    summary = run(made)
    sentence, = problem_with(summary, 'wrist_x')
    assert 'missing' in sentence and f'({len(t)} times)' in sentence and 'boom' in sentence


def test_gripper_on_the_same_topic_is_no_fault():
    made = syn.session(20.0, motion=syn.wander())
    t = syn.clock(0.0, 20.0, 30.0, phase=0.21)
    made.joints('/joints', t, np.ones((len(t), 2)), ('finger_left', 'finger_right'))
    made.joints('/joints', [3.0], [[]], ())
    summary = run(made)
    assert summary['problems'] == []
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3
    # Also when a new segment began just before the end.
    made.text(19.9, EVENT_TOPIC, 'segment')
    summary = run(made)
    assert not problem_with(summary, 'none of the joints')


def test_topic_with_other_joints_only():
    made, t = syn.session(0.0, motion=syn.wander()), syn.clock(0.0, 8.0, 50.0)
    made.joints('/joints', t, np.zeros((len(t), 2)), ('finger_left', 'finger_right'))
    summary = run(made)
    assert problem_with(summary, 'none of the joints', 'yaw', '/joints')


def test_wrong_types_are_named():
    made = syn.session(12.0, motion=syn.wander())
    made.poses('/joints', [1.0], [[0.0, 0.0, 0.0]])
    made.joints('/hand', [1.1], [[0.0]], ('a',))
    made.flag(1.2, '/hand', True).text(1.3, '/joints', 'hello')
    made.array('/hand', [1.4], [[1.0, 2.0]])
    made.plan(1.5, '/hand', 1.5, [0.1], [[0.0]], ('a',))
    made.flag(1.6, '/mapping', True).text(1.7, '/engaged', 'yes')
    made.text(1.8, '/mapping', 'direct').flag(1.9, '/engaged', True)
    made.flag(2.0, EVENT_TOPIC, True).text(2.1, EVENT_TOPIC, 'nonsense')
    summary = run(made, active_mapping__fixed=None, active_mapping__topic='/mapping',
                  engaged__topic='/engaged')
    for topic, word in (('/joints', 'poses'), ('/hand', 'BoolSample'), ('/joints', 'TextSample'),
                        ('/mapping', 'BoolSample'), ('/engaged', 'TextSample')):
        assert problem_with(summary, topic, word), (topic, word)
    assert len(problem_with(summary, '/hand')) >= 2
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


def test_sizes_that_do_not_fit_are_named():
    made = syn.session(12.0, motion=syn.wander())
    made.put(1.0, '/joints', syn.JointSample(syn.ns(1.0), syn.JOINTS, np.zeros(3), None))
    made.put(1.1, '/joints', syn.JointSample(syn.ns(1.1), syn.JOINTS, np.zeros(0), None))
    made.put(1.2, '/joints', syn.JointSample(
        syn.ns(1.2), syn.JOINTS, np.zeros(6), np.ones(2, dtype=bool)))
    made.put(1.3, '/hand', syn.PoseSample(syn.ns(1.3), np.zeros(2), None, 'op'))
    made.put(1.4, '/hand', syn.PoseSample(syn.ns(1.4), np.zeros(3), np.zeros(3), 'op'))
    made.put(1.5, '/command', syn.TrajectorySample(
        syn.ns(1.5), syn.JOINTS, np.zeros(2, dtype=np.int64), np.zeros((3, 6))))
    made.array('/command', [1.6], [[1.0, 2.0]])
    made.plan(1.7, '/command', 1.7, [], np.zeros((0, 6)))
    summary = run(made, command__topic='/command')
    assert problem_with(summary, '6 names', '3 positions')
    assert problem_with(summary, '6 names', '0 positions')
    assert problem_with(summary, '/hand', 'wrong size')
    assert problem_with(summary, '/command', '2 numbers')
    assert problem_with(summary, '/command', 'a joint trajectory came whose')
    assert syn.metrics(summary)['tracking_error_rms_norm']['value'] < 1e-3


def test_poses_and_joints_on_one_command_topic():
    made, t = syn.session(12.0, motion=syn.wander()), syn.clock(0.0, 12.0, 100.0)
    made.joints('/command', t, syn.joints_for(syn.wander()(t)))
    made.poses('/command', t[500:510], np.zeros((10, 3)))
    summary = run(made, command__topic='/command')
    assert problem_with(summary, '/command', 'poses came after joints')
    assert syn.metrics(summary)['joint_error_rms']['value'] < 1e-2


def test_trajectories_do_not_change_what_a_topic_is():
    """Whatever they come on, windows go on closing."""
    made, t = syn.Feed(), syn.clock(0.0, 12.0, 50.0)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES)
    made.joints('/command', t, np.full((len(t), 2), 0.1), NAMES)
    for when in np.arange(1.0, 12.0, 0.5):
        made.plan(when, '/joints', when, [0.1, 9.0], np.ones((2, 2)), NAMES)
        made.plan(when, '/command', when, [0.1, 9.0], np.ones((2, 2)), NAMES)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert problem_with(summary, '/joints', 'trajectories')
    assert problem_with(summary, '/command', 'trajectories came after joints')
    found = syn.metrics(summary, 'unmodelled')
    assert found['joint_error_max.a']['value'] == pytest.approx(0.1)


def test_other_frames_are_left_out():
    made = syn.session(12.0, motion=syn.wander())
    made.put(5.001, '/hand', syn.PoseSample(syn.ns(5.0), np.full(3, 9.0), None, 'camera'))
    summary = run(made)
    assert problem_with(summary, "'op'", "'camera'")
    assert syn.metrics(summary)['tracking_error_max_norm']['value'] < 2e-3


def command_frames(frames):
    """Return the problems of a pose command whose messages have these frames in turn."""
    motion = syn.wander()
    made, t = syn.session(12.0, motion=motion), syn.clock(0.0, 12.0, 100.0)
    for k, one in enumerate(t):
        made.poses('/command', [one], syn.SHOULDER_M + syn.REACH_M * motion([one]),
                   frame=frames[k % len(frames)])
    return problem_with(run(made, command__topic='/command'), '/command')


def test_pose_command_in_another_frame_is_said_once():
    sentence, = command_frames(['world'])
    assert 'times' not in sentence
    for word in ("'world'", "robot.base_link, 'base'", "publish them in 'base'"):
        assert word in sentence


@pytest.mark.parametrize('frames', [['base'], ['/base'], [''], ['', 'base']])
def test_pose_command_in_the_base_or_no_frame_is_no_problem(frames):
    assert command_frames(frames) == []


def test_hand_without_a_frame_now_and_then_is_no_problem():
    made = syn.session(12.0, motion=syn.wander())
    made.put(5.0001, '/hand', syn.PoseSample(
        syn.ns(5.0), 0.6 * syn.wander()([5.0])[0], None, ''))
    assert run(made)['problems'] == []


def test_message_without_stamp_after_stamps_were_chosen():
    made = syn.session(20.0, motion=syn.wander())
    made.joints('/joints', [10.0011], [np.full(6, 0.9)], stamped=False)
    summary = run(made)
    assert problem_with(summary, '/joints', 'without header stamp')
    assert syn.metrics(summary)['tracking_error_max_norm']['value'] < 2e-3


def test_joint_order_that_leaves_out_a_joint():
    made, t = syn.Feed(), syn.clock(0.0, 8.0, 50.0)
    made.joints('/joints', t, np.zeros((len(t), 2)), NAMES)
    made.array('/command', t, np.zeros((len(t), 1)))
    target = syn.evaluator(syn.arm_parameters(**syn.BARE, command__joint_order=['a']))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert problem_with(summary, 'command.joint_order', 'b')
    assert syn.metrics(summary, 'unmodelled')['joint_error_rms.a']['status'] == 'not_configured'


def test_locked_joint_has_no_margin():
    """Equal limits leave no span to measure a margin by."""
    summary = run(syn.session(8.0, motion=syn.wander()), syn.urdf(locked=True))
    assert syn.metrics(summary)['limit_margin_min']['status'] == 'ok'


def test_broken_description_is_a_problem_not_an_end():
    for text in ('<robot', '<robot name="x"><link name="base"/></robot>'):
        summary = run(syn.session(8.0, motion=syn.wander()), text)
        assert summary['problems']
        found = syn.metrics(summary)
        assert found['tracking_error_rms_norm']['status'] == 'not_configured'
        assert found['engaged_time_s']['value'] == pytest.approx(8.0, abs=0.05)


def test_unlimited_slide_does_not_break_the_background():
    text = syn.urdf().replace('<joint name="boom" type="prismatic">',
                              '<joint name="boom" type="continuous">')
    target = syn.evaluator(syn.arm_parameters(**syn.TASK), text)
    syn.feed(target, syn.session(8.0, motion=syn.wander()).messages())
    target.background(100)
    target.summary()


def test_command_and_robot_joints_without_description():
    t = syn.clock(0.0, 26.0, 100.0)
    motion = syn.wander(3, centre=0.0, size=0.5, width=2)
    made = syn.Feed().joints('/command', t, motion(t), NAMES)
    made.joints('/joints', t + 1e-4, motion(t - 0.1), NAMES)
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    windows = syn.feed(target, made.messages())
    summary = target.finish()
    assert summary['problems'] == []
    found = syn.metrics(summary, 'unmodelled')
    assert found['latency_response_s']['value'] == pytest.approx(0.1, abs=1e-3)
    assert found['joint_error_compensated_rms.a']['value'] < 5e-3
    for name in ('workspace_coverage_robot', 'manipulability_min', 'reach_p50_norm'):
        assert found[name]['status'] == 'not_configured'
        assert 'description' in found[name]['reason']
    assert summary['arms']['right']['geometry']['robot_reach_m'] is None
    assert windows[-1].metrics['latency_response_s'].status == 'ok'


def test_two_arms_on_one_joint_topic():
    """One driver publishes the joints of both arms; each arm takes its own."""
    motion = {'left': syn.wander(1), 'right': syn.wander(2)}
    text = syn.urdf()
    other = text
    for name in syn.JOINTS:
        other = other.replace(f'joint name="{name}"', f'joint name="left_{name}"')
    made, t = syn.Feed(), syn.clock(0.0, 26.0, 100.0)
    both = np.hstack([syn.joints_for(motion['left'](t - 0.05)),
                      syn.joints_for(motion['right'](t - 0.15))])
    made.joints('/joints', t, both, [f'left_{name}' for name in syn.JOINTS] + list(syn.JOINTS))
    made.poses('/hand', t, 0.6 * motion['right'](t))
    made.poses('/hand_left', t, 0.6 * motion['left'](t))
    parameters = {**syn.arm_parameters(**syn.TASK),
                  **syn.arm_parameters('left', **syn.TASK, operator__hand_topic='/hand_left')}
    target = syn.SessionEvaluator(syn.from_parameters(parameters),
                                  descriptions={'right': text, 'left': other})
    assert [route.arm for route in target.routes['/joints']] == ['left', 'right'] or (
        [route.arm for route in target.routes['/joints']] == ['right', 'left'])
    windows = syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert summary['problems'] == []
    for arm, delay in (('left', 0.05), ('right', 0.15)):
        found = syn.metrics(summary, arm=arm)
        assert found['latency_s']['value'] == pytest.approx(delay, abs=1e-3)
        assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3
        assert sum(w.arm == arm for w in windows) == 12
    assert [w.receive_ns for w in windows] == sorted(w.receive_ns for w in windows)
    assert {line.name for line in target.diagnostics(syn.ns(26.0))} == {
        f'{arm}: {what}' for arm in ('left', 'right')
        for what in ('inputs', 'tracking', 'latency', 'workspace')}


@settings(max_examples=25, deadline=None)
@given(st.data())
def test_no_sequence_of_samples_raises(data):
    """Any samples on any topic in any order, with stamps from everywhere."""
    target = syn.evaluator(syn.arm_parameters(
        **{**syn.TASK, 'active_mapping__fixed': None}, active_mapping__topic='/mapping',
        engaged__topic='/engaged', command__topic='/command'))
    rng = np.random.default_rng(data.draw(st.integers(0, 10 ** 9)))
    receive = syn.BASE_NS
    clocks = {}
    for _ in range(1500):
        receive += int(rng.choice([1, 10 ** 6, 2 * 10 ** 7, 3 * 10 ** 9, 10 ** 13],
                                  p=[0.1, 0.3, 0.58, 0.0198, 0.0002]))
        topic = str(rng.choice(['/hand', '/joints', '/command', '/mapping', '/engaged',
                                EVENT_TOPIC, '/else'], p=[.3, .3, .3, .03, .03, .01, .03]))
        if rng.random() < 0.01:
            clocks[topic] = int(rng.choice([0, 46, -46, 36_000, -3])) * 10 ** 9
        stamp = receive + clocks.get(topic, 0) - int(rng.integers(0, 5 * 10 ** 6))
        stamp = 0 if rng.random() < 0.01 else stamp
        values = rng.normal(size=6) * rng.choice([0.3, np.nan], p=[0.99, 0.01])
        sample = {
            '/hand': syn.PoseSample(stamp, values[:3], None if rng.random() < 0.1
                                    else values[:4], 'op'),
            '/joints': syn.JointSample(stamp, syn.JOINTS, values, None),
            '/command': syn.JointSample(stamp, syn.JOINTS, values, values > 0.0),
            '/mapping': syn.TextSample(str(rng.choice(['direct', 'other', '']))),
            '/engaged': syn.BoolSample(bool(rng.random() < 0.7)),
            EVENT_TOPIC: syn.TextSample(str(rng.choice(['reset', 'segment']))),
        }.get(topic, syn.TextSample(''))
        if rng.random() < 0.03:
            sample = [syn.BoolSample(True), syn.TextSample('x'), syn.ArraySample(values[:2]),
                      syn.TrajectorySample(stamp, syn.JOINTS, np.array([0, 10 ** 8]),
                                           np.zeros((2, 6))),
                      syn.ArraySample(values)][rng.integers(0, 5)]
        target.add(receive, topic, sample)
        if rng.random() < 0.01:
            target.diagnostics(receive)
            json.dumps(target.summary(), allow_nan=False)
    summary = syn.closed(target)
    json.dumps(summary, allow_nan=False)
    for window in target.poll():
        for metric in window.metrics.values():
            assert metric.status == 'ok' or metric.reason
