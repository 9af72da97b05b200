# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Every metric of every configuration has its form: a number, or a status with a reason."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
import synthetic_session as syn
from hypothesis import given, settings
from hypothesis import strategies as st

from teleop_eval.core.status import ArmStatus

STATUSES = {'ok', 'unobservable', 'insufficient', 'not_configured'}
ALWAYS = (
    [f'tracking_error{stage}_{which}_{unit}' for stage in ('', '_compensated')
     for which in ('rms', 'p95', 'max') for unit in ('norm', 'm')]
    + [f'orientation_error{stage}_{which}_rad' for stage in ('', '_compensated')
       for which in ('static', 'varying', 'rms', 'p95', 'max')]
    + [f'joint_error{stage}_{which}' for stage in ('', '_compensated')
       for which in ('rms', 'p95', 'max')]
    + ['latency_s', 'latency_command_s', 'latency_response_s', 'workspace_coverage_operator',
       'workspace_coverage_robot', 'workspace_overlap', 'reach_p50_norm', 'reach_p95_norm',
       'reach_max_norm', 'hull_volume_norm', 'joint_range_use', 'limit_margin_min',
       'limit_share', 'manipulability_min', 'manipulability_p5', 'engaged_time_s',
       'engagements', 'engagement_rate_per_min'])


def check_metric(name, metric):
    """Check one metric in plain types."""
    assert metric['status'] in STATUSES, name
    assert isinstance(metric['unit'], str) and metric['unit'], name
    assert isinstance(metric['n'], int) and metric['n'] >= 0, name
    assert isinstance(metric['samples'], int) and metric['samples'] >= 0, name
    if metric['status'] == 'ok':
        assert isinstance(metric['value'], float) and math.isfinite(metric['value']), name
    else:
        assert metric['value'] is None and metric['ci95'] is None, name
        assert metric['reason'].strip(), name
    if metric['ci95'] is not None:
        low, high = metric['ci95']
        assert low <= metric['value'] <= high, name


def check(summary, windows):
    json.dumps(summary, allow_nan=False)
    for arm in summary['arms'].values():
        for mapping in arm['mappings'].values():
            assert mapping['condition'] == 'teleoperated'
            assert not set(ALWAYS) - set(mapping['metrics'])
            for name, metric in mapping['metrics'].items():
                check_metric(name, metric)
        for role in arm['inputs'].values():
            for name, metric in role.get('metrics', {}).items():
                check_metric(name, metric)
    for window in windows:
        for name, metric in window.metrics.items():
            plain = metric.to_dict()
            json.dumps(plain, allow_nan=False)
            if metric.value is not None:
                plain['value'] = float(metric.value)
            check_metric(name, plain)


configurations = st.fixed_dictionaries({
    'hand': st.sampled_from(['none', 'silent', 'point', 'pose']),
    'operator': st.sampled_from(['none', 'silent', 'there']),
    'robot': st.sampled_from(['there', 'silent']),
    'command': st.sampled_from(['none', 'silent', 'joints', 'held', 'pose', 'array']),
    'engaged': st.sampled_from(['none', 'silent', 'there']),
    'mapping': st.sampled_from(['none', 'fixed', 'silent', 'there', 'unknown']),
    'kind': st.sampled_from(['none', 'task_space', 'joint_space', 'both']),
    'length': st.sampled_from(['none', 'given', 'stature']),
    'described': st.booleans(),
    'seconds': st.sampled_from([0.0, 3.0, 13.0, 27.0]),
    'still': st.booleans(),
})


def parameters_of(chosen):
    """Return flat parameters of a configuration."""
    kinds = {'none': [], 'both': ['task_space', 'joint_space']}.get(
        chosen['kind'], [chosen['kind']])
    more = {
        'operator__hand_topic': None if chosen['hand'] == 'none' else '/hand',
        'operator__joints_topic': None if chosen['operator'] == 'none' else '/operator',
        'command__topic': None if chosen['command'] == 'none' else '/command',
        'command__hold': chosen['command'] == 'held',
        'engaged__topic': None if chosen['engaged'] == 'none' else '/engaged',
        'active_mapping__topic': '/mapping' if chosen['mapping'] in (
            'silent', 'there', 'unknown') else None,
        'active_mapping__fixed': (kinds[0] if kinds else 'direct')
        if chosen['mapping'] == 'fixed' else None,
    }
    if chosen['length'] != 'given':
        more['operator__arm_length_m'] = None
    if chosen['length'] == 'stature':
        more['operator__stature_m'] = 1.75
    if not chosen['described']:
        more |= {'robot__description_file': None, 'robot__base_link': None,
                 'robot__tip_link': None, 'robot__joint_names': list(syn.JOINTS)}
    for kind in kinds:
        more[f'mappings__{kind}__kind'] = kind
        if kind == 'joint_space':
            for name in syn.JOINTS:
                more[f'mappings__{kind}__joints__{name}__source'] = f'o_{name}'
    return syn.arm_parameters(**more)


def feed_of(chosen):
    """Return the messages of a configuration."""
    end = chosen['seconds']
    motion = syn.wander()
    if chosen['still']:
        def motion(times):
            return np.full((len(np.atleast_1d(times)), 3), 0.3)
    t, made = syn.clock(0.0, end, 60.0), syn.Feed()
    q = syn.joints_for(motion(t))
    if chosen['hand'] in ('point', 'pose'):
        made.poses('/hand', t, 0.6 * motion(t), None if chosen['hand'] == 'point'
                   else np.tile([0.0, 0.0, 0.0, 1.0], (len(t), 1)))
    if chosen['operator'] == 'there':
        made.joints('/operator', t, q, [f'o_{name}' for name in syn.JOINTS])
    if chosen['robot'] == 'there':
        made.joints('/joints', t, syn.joints_for(motion(t - 0.1)))
    if chosen['command'] in ('joints', 'held'):
        made.joints('/command', t, q)
    elif chosen['command'] == 'pose':
        made.poses('/command', t, syn.SHOULDER_M + syn.REACH_M * motion(t))
    elif chosen['command'] == 'array':
        made.array('/command', t, q)
    if chosen['engaged'] == 'there':
        made.flag(0.5, '/engaged', True)
    if chosen['mapping'] in ('there', 'unknown'):
        made.text(0.0, '/mapping', 'task_space' if chosen['mapping'] == 'there' else 'odd')
    return made


def tells_the_mapping(chosen):
    """Tell whether it is said which of several mappings is active."""
    return not (chosen['mapping'] == 'none' and chosen['kind'] == 'both')


@settings(max_examples=100, deadline=None)
@given(configurations.filter(tells_the_mapping))
def test_every_metric_keeps_the_contract(chosen):
    target = syn.evaluator(parameters_of(chosen))
    messages = feed_of(chosen).messages()
    windows = syn.feed(target, messages)
    now_ns = messages[-1][0] if messages else syn.ns(0.0)
    for line in target.diagnostics(now_ns):
        assert line.level in (0, 1, 2, 3) and line.message
        assert all(isinstance(value, str) for value in line.values.values())
    check(target.summary(), windows)
    summary = syn.closed(target)
    check(summary, target.poll())
    for metric in ('tracking_error_rms_norm', 'latency_s'):
        for mapping in summary['arms']['right']['mappings'].values():
            found = mapping['metrics'][metric]
            if chosen['robot'] == 'silent' or chosen['still']:
                assert metric != 'latency_s' or found['status'] != 'ok'
            if chosen['robot'] == 'silent' or not chosen['described']:
                assert found['status'] != 'ok'


def test_full_configuration_gives_every_number():
    chosen = {'hand': 'pose', 'operator': 'there', 'robot': 'there', 'command': 'joints',
              'engaged': 'there', 'mapping': 'fixed', 'kind': 'joint_space', 'length': 'given',
              'described': True, 'seconds': 27.0, 'still': False}
    target = syn.evaluator(parameters_of(chosen))
    syn.feed(target, feed_of(chosen).messages())
    summary = target.finish()
    check(summary, target.poll())
    found = syn.metrics(summary, 'joint_space')
    missing = {name for name in ALWAYS if found[name]['status'] != 'ok'}
    assert missing == set()


def test_scale_uncertainty_goes_with_what_depends_on_the_arm_length():
    target = syn.evaluator(syn.arm_parameters(
        **syn.TASK, operator__arm_length_m=None, operator__stature_m=0.6 / 0.332))
    syn.feed(target, syn.session(24.0, motion=syn.wander(), delay=0.1).messages())
    summary = syn.closed(target)
    found = syn.metrics(summary)
    for name in ('tracking_error_rms_norm', 'tracking_error_compensated_max_norm',
                 'reach_p50_norm_operator', 'workspace_coverage_operator'):
        assert found[name]['details']['scale_uncertainty'] == pytest.approx(0.12)
    assert 'scale_uncertainty' not in found['reach_p50_norm'].get('details', {})
    assert summary['arms']['right']['geometry']['operator_arm_length_m'] == pytest.approx(0.6)


def test_simulated_time_has_no_transport_age():
    settings_ = syn.from_parameters(syn.arm_parameters(**syn.TASK))
    target = syn.SessionEvaluator(settings_, descriptions={'right': syn.urdf()},
                                  simulated_time=True)
    syn.feed(target, syn.session(8.0, motion=syn.wander()).messages())
    summary = syn.closed(target)
    for metric in summary['arms']['right']['inputs']['hand']['metrics'].values():
        assert metric['status'] == 'not_configured' and 'simulated' in metric['reason']


def test_routes_are_full_names():
    settings_ = syn.from_parameters(syn.arm_parameters(
        **syn.TASK, operator__hand_topic='hand', command__topic='/command',
        command__enabled_field='on'))
    target = syn.SessionEvaluator(settings_, descriptions={'right': syn.urdf()},
                                  resolve=lambda name: f'/cell/{name}'.replace('//', '/'))
    assert target.routes['/cell/hand'][0].role == 'hand'
    route, = target.routes['/cell/command']
    assert (route.arm, route.role, route.enabled_field) == ('right', 'command', 'on')
    plain = syn.SessionEvaluator(settings_, descriptions={'right': syn.urdf()})
    assert '/hand' in plain.routes
    assert isinstance(plain._status['right'], ArmStatus)
