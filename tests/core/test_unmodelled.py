# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A stack whose mapping is not known, through the whole evaluator."""

from __future__ import annotations

import pytest
import synthetic_session as syn

WHY = "the stack's mapping is not modelled"
SECONDS = 62.0
COMMAND_S, ROBOT_S = 0.05, 0.1
OFFSET = 0.02
# Everything that needs the ideal command, by the beginning of its name.
OF_THE_MODEL = (
    'tracking_error_', 'orientation_error_', 'latency_command_s', 'bandwidth_hz', 'phase_delay_s',
    'coherent_up_to_hz', 'discrepancy_', 'budget_mapping_', 'budget_processing_delay_',
    'budget_command_', 'budget_response_delay_share', 'budget_residual_share',
    'workspace_overlap')


def vendor(*, command: bool):
    """Return evaluator, windows and summary; the tool ends up 0.02 beside the command."""
    motion = syn.wander(7)
    made = syn.session(SECONDS, motion=motion, delay=COMMAND_S + ROBOT_S,
                       follow=lambda u: u + [OFFSET, 0.0, 0.0])
    more = {}
    if command:
        t = syn.clock(0.0, SECONDS, 100.0, phase=0.5)
        made.joints('/command', t, syn.joints_for(motion(t - COMMAND_S)))
        more['command__topic'] = '/command'
    one = syn.evaluator(syn.arm_parameters(mappings__vendor__kind='unmodelled', **more))
    windows = syn.feed(one, made.messages())
    summary = syn.closed(one)
    assert summary['problems'] == [] and summary['notes'] == []
    return one, windows, summary


@pytest.mark.parametrize('command', [True, False])
def test_what_needs_the_ideal_command_is_not_configured(command):
    _, windows, summary = vendor(command=command)
    found = syn.metrics(summary, 'vendor')
    needing = [name for name in found if name.startswith(OF_THE_MODEL)]
    assert len(needing) > 40
    for name in needing:
        wanted = WHY if command or name != 'latency_command_s' else (
            'command.topic is not configured')
        assert (found[name]['status'], found[name]['reason']) == ('not_configured', wanted), name
    for name, metric in windows[-1].metrics.items():
        if name.startswith(OF_THE_MODEL):
            assert metric.status == 'not_configured', name
    assert found['workspace_coverage_operator']['status'] == 'ok'
    assert found['reach_p95_norm']['status'] == 'ok'


@pytest.mark.parametrize('command', [True, False])
def test_the_latency_is_from_hand_to_tool_and_says_so(command):
    one, windows, summary = vendor(command=command)
    latency = syn.metrics(summary, 'vendor')['latency_s']
    assert latency['value'] == pytest.approx(COMMAND_S + ROBOT_S, abs=0.002)
    assert latency['details']['space'] == 'hand_to_tool'
    assert windows[-1].metrics['latency_s'].details['space'] == 'hand_to_tool'
    said = next(line.message for line in one.diagnostics(syn.ns(SECONDS))
                if line.name == 'right: latency')
    assert said.startswith('hand -> tool 150') and 'the mapping is not modelled' in said


def test_a_command_topic_tells_the_robots_part():
    """Of the command's motion late by 0.1 s the RMS is known; the offset is the residual."""
    _, windows, summary = vendor(command=True)
    found = syn.metrics(summary, 'vendor')
    assert found['latency_response_s']['value'] == pytest.approx(ROBOT_S, abs=0.002)
    motion = syn.wander(7)
    t = syn.clock(8.0, SECONDS, 500.0)
    late = motion(t - COMMAND_S - ROBOT_S) - motion(t - COMMAND_S)
    rms = (late ** 2).sum(axis=1).mean() ** 0.5
    assert found['budget_response_delay_rms_norm']['value'] == pytest.approx(rms, rel=0.02)
    residual = found['budget_residual_static_norm']
    assert residual['value'] == pytest.approx(OFFSET, abs=1e-3)
    assert residual['details']['xyz'] == pytest.approx([OFFSET, 0.0, 0.0], abs=1e-3)
    assert found['budget_residual_varying_norm']['value'] < 0.002
    for name in ('bandwidth_response_hz', 'phase_delay_response_s', 'joint_error_rms'):
        assert found[name]['status'] in ('ok', 'unobservable'), name
    assert {'budget_response_delay_rms_norm', 'budget_residual_rms_norm'} <= {
        name for name, metric in windows[-1].metrics.items() if metric.status == 'ok'}
    advice = summary['arms']['right']['mappings']['vendor']['advice']
    assert advice.startswith('vendor: fix first the time the robot takes to follow, 100 ms')
    # The largest of two parts may be smaller than those that nobody knows.
    assert advice.endswith(
        f'; nothing is known of mapping, processing delay, command: {WHY}.')


@pytest.mark.parametrize(('command', 'hand', 'why'), [
    (True, False, 'no mapping is configured, so only command against robot is judged'),
    (True, True, 'no mapping is configured, so there is no ideal command'),
    (False, False, 'no mapping is configured, so there is no ideal command')])
def test_an_arm_without_any_mapping_says_so(command, hand, why):
    motion = syn.wander(7)
    made = syn.session(30.0, motion=motion, delay=ROBOT_S)
    more = {} if hand else dict.fromkeys(
        ('operator__hand_topic', 'operator__shoulder_m', 'operator__arm_length_m'))
    if command:
        t = syn.clock(0.0, 30.0, 100.0, phase=0.5)
        made.joints('/command', t, syn.joints_for(motion(t)))
        more['command__topic'] = '/command'
    one = syn.evaluator(syn.arm_parameters(**more))
    syn.feed(one, made.messages())
    summary = syn.closed(one)
    found = syn.metrics(summary, 'unmodelled')
    assert (found['tracking_error_rms_norm']['status'],
            found['tracking_error_rms_norm']['reason']) == ('not_configured', why)
    advice = summary['arms']['right']['mappings']['unmodelled']['advice']
    begin = 'fix first the time the robot takes to follow' if command else (
        'cannot say what to fix first')
    assert advice.startswith(f'unmodelled: {begin}') and advice.endswith(f'{why}.')
    assert 'nothing is known of' not in advice and 'configured:' not in advice


def test_without_a_command_topic_nothing_can_be_advised():
    _, _, summary = vendor(command=False)
    assert summary['arms']['right']['mappings']['vendor']['advice'] == (
        f'vendor: cannot say what to fix first: {WHY}.')
