# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Delays in the evaluator: which pair, a step in mid-run, levels, and joint-space mappings."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.results import LEVEL_ERROR, LEVEL_OK, LEVEL_STALE, LEVEL_WARN

OPERATOR_JOINTS = tuple(f'o_{name}' for name in syn.JOINTS)
SIGNS = np.array([1.0, -1.0, 0.5, 1.0, -1.0, 1.0])
OFFSETS = np.array([0.1, 0.2, 0.5, -0.1, 0.0, 0.3])


def joint_mapping():
    """Return parameters of a joint-space mapping with signs, scales and offsets."""
    found = {'mappings__direct__kind': 'joint_space', 'active_mapping__fixed': 'direct',
             'operator__joints_topic': '/operator'}
    for name, factor, offset in zip(syn.JOINTS, SIGNS, OFFSETS, strict=True):
        key = f'mappings__direct__joints__{name}__'
        found[key + 'source'] = f'o_{name}'
        found[key + 'sign'] = float(np.sign(factor))
        found[key + 'scale'] = float(abs(factor))
        found[key + 'offset'] = float(offset)
    return found


def joint_session(end, *, a=0.03, b=0.12, command=True):
    """Return operator joints, command after a, robot after a + b."""
    motion, made = syn.wander(5, centre=0.0, size=0.3, width=6), syn.Feed()

    def ideal(times):
        return OFFSETS + SIGNS * motion(times)

    t = syn.clock(0.0, end, 100.0)
    made.joints('/operator', t, motion(t), OPERATOR_JOINTS)
    if command:
        t = syn.clock(0.0, end, 200.0, phase=0.1)
        made.joints('/command', t, ideal(t - a))
    t = syn.clock(0.0, end, 125.0, phase=0.6)
    made.joints('/joints', t, ideal(t - a - b))
    return made, ideal


def test_joint_space_mapping_end_to_end():
    """Two delays in a row are told apart, and taken out of every error."""
    made, ideal = joint_session(40.0)
    target = syn.evaluator(syn.arm_parameters(**joint_mapping(), command__topic='/command'))
    windows = syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    for name, delay in (('latency_s', 0.15), ('latency_command_s', 0.03),
                        ('latency_response_s', 0.12)):
        assert found[name]['value'] == pytest.approx(delay, abs=5e-4)
        assert found[name]['details']['space'] == 'joints'
        assert found[name]['n'] == 4
        assert windows[-1].metrics[name].value == pytest.approx(delay, abs=1e-3)
    assert found['tracking_error_compensated_rms_norm']['value'] < 3e-3
    assert found['joint_error_compensated_rms']['value'] < 3e-3
    # Raw, against the kinematics written in the tests.
    t = np.linspace(0.0, 40.0, 40001)
    error = np.linalg.norm(syn.tool_for(ideal(t - 0.15)) - syn.tool_for(ideal(t)), axis=1)
    assert found['tracking_error_rms_norm']['value'] == pytest.approx(
        np.sqrt(np.mean(error ** 2)), rel=0.05)
    assert found['tracking_error_max_norm']['value'] == pytest.approx(error.max(), rel=0.05)
    assert found['reach_max_norm']['value'] == pytest.approx(
        np.linalg.norm(syn.tool_for(ideal(t)), axis=1).max(), rel=0.02)


def test_joint_space_mapping_with_a_lift():
    """The ideal shoulder rides on the ideal lift: a pure delay is compensated all the same."""
    delay, motion = 0.2, syn.wander(5, centre=0.0, size=0.3, width=7)
    names = ('lift', *syn.JOINTS)

    def ideal(times):
        q = motion(times) * [0.5, 1, 1, 0.5, 1, 1, 1] + [0.25, 0, 0, 0.6, 0, 0, 0]
        return q

    made, t = syn.Feed(), syn.clock(0.0, 30.0, 100.0)
    made.joints('/operator', t, ideal(t), [f'o_{name}' for name in names])
    t = syn.clock(0.0, 30.0, 125.0, phase=0.6)
    made.joints('/joints', t, ideal(t - delay), names)
    parameters = {'mappings__direct__kind': 'joint_space', 'operator__joints_topic': '/operator'}
    for name in names:
        parameters[f'mappings__direct__joints__{name}__source'] = f'o_{name}'
    target = syn.evaluator(syn.arm_parameters(**parameters), syn.urdf(lift=True))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert found['latency_s']['value'] == pytest.approx(delay, abs=1e-3)
    assert found['tracking_error_compensated_rms_norm']['value'] < 4e-3


def test_without_operator_joints_nothing_is_guessed():
    made, _ = joint_session(20.0)
    parameters = {**joint_mapping(), 'operator__joints_topic': None}
    target = syn.evaluator(syn.arm_parameters(**parameters, command__topic='/command'))
    windows = syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    for name in ('latency_s', 'latency_command_s', 'tracking_error_rms_norm',
                 'orientation_error_rms_rad', 'workspace_overlap'):
        assert found[name]['status'] == 'not_configured'
        assert 'operator.joints_topic' in found[name]['reason']
    assert found['latency_response_s']['value'] == pytest.approx(0.12, abs=1e-3)
    assert windows[-1].metrics['latency_s'].status == 'not_configured'


def test_gap_in_the_operators_joints():
    """Cells without operator have no ideal command, and no number that is none gets through."""
    made, _ = joint_session(30.0)
    made._messages = [one for one in made._messages
                      if not (one[3] == '/operator' and syn.ns(13.0) < one[0] < syn.ns(14.5))]
    target = syn.evaluator(syn.arm_parameters(**joint_mapping(), command__topic='/command'))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert found['tracking_error_rms_norm']['samples'] == pytest.approx(3000 - 151, abs=4)
    assert found['tracking_error_compensated_max_norm']['value'] < 0.02


def step_session(end=80.0, step=40.0, before=0.06, after=0.16, noise=1e-4):
    motion, made, rng = syn.wander(), syn.Feed(), np.random.default_rng(4)
    t = syn.clock(0.0, end, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    t = syn.clock(0.0, end, 125.0, phase=0.6)
    delay = np.where(t < step, before, after)
    q = syn.joints_for(motion(t - delay) + rng.normal(0.0, noise, (len(t), 3)))
    return made.joints('/joints', t, q)


def test_step_of_the_delay_is_seen_when_the_first_whole_window_closes():
    """
    60 -> 160 ms at 40 s; latency windows are 10 s long and start every 2 s.

    The first that begins after the step closes at 50.003 s, 3 ms clear of it, and holds
    nothing of the old delay. The level, on the median of three windows, follows at most two
    hops later, and no estimate lies beyond old and new value.
    """
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    estimates, levels = [], []
    for message in step_session().messages():
        target.add(*message)
        for window in target.poll():
            metric = window.metrics['latency_s']
            line = next(line for line in target.diagnostics(message[0])
                        if line.name == 'right: latency')
            estimates.append((window.end_ns, metric))
            levels.append((window.end_ns, line))
    whole = [(end, metric) for end, metric in estimates if end >= syn.ns(50.0)]
    assert whole[0][0] == pytest.approx(syn.ns(50.003), abs=1e6)
    for _, metric in whole:
        assert metric.value == pytest.approx(0.16, abs=1e-3)
    for end, metric in estimates:
        if metric.value is not None:
            error = 2.0 * metric.details['standard_error_s']
            assert 0.06 - error - 1e-4 <= metric.value <= 0.16 + error + 1e-4
        if syn.ns(10.0) < end < syn.ns(40.0):
            assert metric.value == pytest.approx(0.06, abs=2e-3)
    said = dict(levels)
    first = whole[0][0]
    assert f'{whole[0][1].value * 1e3:.1f}' in said[first].message
    by_end = sorted(said)
    assert all(said[end].level == LEVEL_OK for end in by_end if end < syn.ns(40.0))
    third = by_end[by_end.index(first) + 2]
    assert said[third].level == LEVEL_WARN
    assert '150 ms' in said[third].message
    assert float(said[third].values['median of last 3 windows (s)']) == pytest.approx(
        0.16, abs=2e-3)


def test_level_needs_three_windows_in_a_row():
    motion = syn.wander()
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    seen = []
    for message in syn.session(30.0, motion=motion, delay=0.4).messages():
        target.add(*message)
        for window in target.poll():
            line = target.diagnostics(message[0])[2]
            seen.append((round((window.end_ns - syn.BASE_NS) / 1e9), line.level, line.message))
    levels = {end: level for end, level, _ in seen}
    assert levels[8] == levels[10] == levels[12] == LEVEL_OK
    assert levels[14] == LEVEL_ERROR
    message = {end: text for end, _, text in seen}
    assert message[8].startswith('no latency yet: ') and '8 s' in message[8]
    assert '300 ms' in message[14] and '400.' in message[14]


def test_thresholds_can_change_during_the_run():
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    messages = syn.session(20.0, motion=syn.wander(), delay=0.1).messages()
    syn.feed(target, messages)
    assert target.diagnostics(messages[-1][0])[2].level == LEVEL_OK
    target.use_thresholds(syn.from_parameters({
        **syn.arm_parameters(**syn.TASK), 'thresholds.latency_warn_s': 0.05}).thresholds)
    assert target.diagnostics(messages[-1][0])[2].level == LEVEL_WARN


def test_level_belongs_to_the_mapping():
    """An error under one mapping is not shown for the next one."""
    motion, made = syn.wander(), syn.Feed()
    t = syn.clock(0.0, 44.0, 100.0)
    made.poses('/hand', t, 0.6 * motion(t))
    late = np.where(t < 20.0, 0.4, 0.05)
    made.joints('/joints', t, syn.joints_for(motion(t - late)))
    made.text(0.0, '/mapping', 'slow').text(20.0, '/mapping', 'fast')
    target = syn.evaluator(syn.arm_parameters(
        mappings__slow__kind='task_space', mappings__fast__kind='task_space',
        active_mapping__topic='/mapping'))
    levels = {}
    for message in made.messages():
        target.add(*message)
        for window in target.poll():
            levels[round((window.end_ns - syn.BASE_NS) / 1e9)] = target.diagnostics(
                message[0])[2].level
    assert levels[18] == LEVEL_ERROR
    assert levels[24] == levels[30] == levels[42] == LEVEL_OK


@pytest.mark.parametrize('command', [None, 'joints', 'pose'])
def test_pairs_follow_what_there_is(command):
    motion = syn.wander()
    made = syn.session(24.0, motion=motion, delay=0.12)
    t = syn.clock(0.0, 24.0, 100.0, phase=0.8)
    if command == 'joints':
        made.joints('/command', t, syn.joints_for(motion(t - 0.04)))
    elif command == 'pose':
        made.poses('/command', t, syn.SHOULDER_M + syn.REACH_M * motion(t - 0.04), frame='base')
    parameters = dict(syn.TASK, command__topic='/command' if command else None)
    target = syn.evaluator(syn.arm_parameters(**parameters))
    syn.feed(target, made.messages())
    summary = syn.closed(target)
    found = syn.metrics(summary)
    assert summary['problems'] == []
    assert found['latency_s']['value'] == pytest.approx(0.12, abs=1e-3)
    if command is None:
        assert found['latency_command_s']['status'] == 'not_configured'
        assert 'command.topic' in found['latency_response_s']['reason']
        assert found['joint_error_rms']['status'] == 'not_configured'
        return
    assert found['latency_command_s']['value'] == pytest.approx(0.04, abs=1e-3)
    assert found['latency_response_s']['value'] == pytest.approx(0.08, abs=1e-3)
    spaces = {'joints': 'joints', 'pose': 'tool'}
    assert found['latency_response_s']['details']['space'] == spaces[command]
    if command == 'pose':
        assert 'tool pose' in found['joint_error_rms']['reason']
    else:
        assert found['joint_error_compensated_rms']['value'] < 5e-3


def test_held_pose_command_with_orientation():
    motion = syn.wander()
    made = syn.session(24.0, motion=motion, delay=0.12)
    t = syn.clock(0.0, 24.0, 100.0, phase=0.8)
    made.poses('/command', t, syn.SHOULDER_M + syn.REACH_M * motion(t - 0.04),
               np.tile([0.0, 0.0, 0.0, 1.0], (len(t), 1)))
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, command__topic='/command',
                                              command__hold=True))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    # Holding for 10 ms delays by half of it (LG15 of the check values).
    assert found['latency_command_s']['value'] == pytest.approx(0.045, abs=1e-3)


def test_still_robot_tells_no_delay():
    made = syn.session(30.0, motion=syn.wander(), follow=lambda u: 0 * u + [0.4, 0.1, 0.1])
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    windows = syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert found['latency_s']['status'] == 'unobservable'
    assert found['latency_s']['reason'].startswith('The robot does not move at all (in ')
    assert found['latency_s']['details']['windows'] > 5
    assert found['latency_s']['value'] is None and found['latency_s']['n'] == 0
    assert windows[-1].metrics['latency_s'].status == 'unobservable'


def test_only_windows_that_do_not_overlap_count():
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    syn.feed(target, syn.session(61.0, motion=syn.wander(), delay=0.1).messages())
    latency = syn.metrics(syn.closed(target))['latency_s']
    assert latency['n'] == 6
    assert latency['samples'] == pytest.approx(6 * 1000, rel=0.2)


def test_input_that_falls_silent_is_stale():
    target = syn.evaluator(syn.arm_parameters(**syn.TASK))
    messages = syn.session(12.0, motion=syn.wander()).messages()
    syn.feed(target, messages)
    last = messages[-1][0]
    for later, level in ((0, LEVEL_OK), (900_000_000, LEVEL_OK), (1_100_000_000, LEVEL_STALE)):
        line = target.diagnostics(last + later)[0]
        assert line.level == level
    assert '/hand is silent for 1.1 s' in line.message
    assert float(line.values['hand age (s)']) == pytest.approx(1.1, abs=0.02)


def test_inputs_that_never_came_are_stale():
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, engaged__topic='/engaged'))
    line = target.diagnostics(syn.ns(0.0))[0]
    assert line.level == LEVEL_STALE
    for topic in ('/hand', '/joints', '/engaged'):
        assert topic in line.message
    for other in target.diagnostics(syn.ns(0.0))[1:]:
        assert other.level == LEVEL_OK and other.message


def test_margin_warns_only_while_approaching():
    """The boom moves to 2 % of its span from its limit and back."""
    t = syn.clock(0.0, 16.0, 100.0)
    near = syn.REACH_M - 0.02 * (syn.REACH_M - 0.05)
    boom = np.where(t < 8.0, np.interp(t, [0.0, 8.0], [0.6, near]),
                    np.interp(t, [8.0, 16.0], [near, 0.6]))
    q = np.zeros((len(t), 6))
    q[:, 2] = boom
    target = syn.evaluator(syn.arm_parameters(operator__hand_topic=None))
    levels = {}
    for message in syn.Feed().joints('/joints', t, q).messages():
        target.add(*message)
        for window in target.poll():
            line = target.diagnostics(message[0])[3]
            levels[round((window.end_ns - syn.BASE_NS) / 1e9)] = line
    assert levels[8].level == LEVEL_WARN and 'boom' in levels[8].message
    assert 'approaching' in levels[8].message
    assert {levels[k].level for k in (2, 4, 10, 12, 14)} == {LEVEL_OK}
    assert levels[8].values['joint'] == 'boom'
    assert float(levels[8].values['nearest limit margin (share of span)']) == pytest.approx(
        0.02, abs=2e-3)


def test_approaching_is_told_over_the_last_fifth_of_a_second():
    """
    The boom's margin rises and falls within the half second before a window closes at 8.003 s.

    Only 0.2 s before the end it was larger (or smaller) than at the end; 0.15 s and 0.25 s
    before it was the other way round.
    """
    end = 8.003
    for sign in (1.0, -1.0):
        before = np.array([-9.0, -0.26, -0.23, -0.2, -0.17, -0.14, -0.02, 0.1, 9.0])
        margin = 0.1 + 0.02 * sign * np.array([-1.0, -1, -1, 1, -1, -1, 0, 0, 0])
        t = syn.clock(0.0, 10.0, 1000.0)
        q = np.zeros((len(t), 6))
        q[:, 2] = syn.REACH_M - (syn.REACH_M - 0.05) * np.interp(t - end, before, margin)
        target = syn.evaluator(syn.arm_parameters(operator__hand_topic=None),
                               **{'time.grid_rate_hz': 100.0})
        state = None
        for message in syn.Feed().joints('/joints', t, q).messages():
            target.add(*message)
            for window in target.poll():
                if abs(window.end_ns - syn.ns(end)) < 3e6:
                    state = target.arms['right'].measurement.limits
        assert state is not None and state.joint == 'boom'
        assert state.margin == pytest.approx(0.1, abs=2e-3)
        assert state.approaching is (sign > 0.0)
