# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""A metric without a sample names the input that is to blame, in each window and over the run."""

from __future__ import annotations

import math

import numpy as np
import pytest
import synthetic_session as syn

CLUTCH = {'engaged__topic': '/engaged'}
PER_WINDOW = ('tracking_error_rms_norm', 'tracking_error_compensated_rms_norm',
              'joint_error_rms', 'joint_error_compensated_rms', 'limit_margin_min',
              'latency_s', 'latency_command_s', 'latency_response_s')


def full(end, *, without=(), until=None, motion=None):
    """Return hand, robot and joint command; topics in `without` come until a time, if at all."""
    motion, made = motion or syn.wander(), syn.Feed()
    for topic, late in (('/hand', None), ('/command', 0.04), ('/joints', 0.12)):
        stop = (until or 0.0) if topic in without else end
        t = syn.clock(0.0, stop, 100.0, phase=0.2)
        if late is None:
            made.poses(topic, t, 0.6 * motion(t))
        else:
            made.joints(topic, t, syn.joints_for(motion(t - late)))
    return made


def run(made, **more):
    target = syn.evaluator(syn.arm_parameters(
        **{**syn.TASK, 'command__topic': '/command', **more}))
    windows = syn.feed(target, made.messages())
    summary = syn.closed(target)
    return syn.metrics(summary), windows + target.poll(), summary


def test_every_window_has_every_configured_metric_while_the_clutch_is_open():
    """So that each topic is published as NaN at each closing."""
    made = full(20.0).flag(0.0, '/engaged', True).flag(12.005, '/engaged', False)
    _, windows, _ = run(made, **CLUTCH)
    for window in windows:
        assert set(PER_WINDOW) <= set(window.metrics)
    opened = [w for w in windows if w.start_ns > syn.ns(13.0)]
    assert len(opened) == 3
    for window in opened:
        for name in PER_WINDOW[:5]:
            metric = window.metrics[name]
            assert (metric.status, metric.samples) == ('insufficient', 0)
            assert math.isnan(metric.number)
            assert metric.reason == 'no engaged and settled sample in this window'


@pytest.mark.parametrize('silent, blamed', [
    ('/hand', ('tracking_error_rms_norm', 'tracking_error_compensated_rms_norm', 'latency_s',
               'latency_command_s')),
    ('/command', ('joint_error_rms', 'joint_error_compensated_rms', 'latency_command_s',
                  'latency_response_s')),
    ('/joints', tuple(name for name in PER_WINDOW if name != 'latency_command_s'))])
def test_input_that_never_came_is_named_in_every_window(silent, blamed):
    found, windows, _ = run(full(20.0, without=[silent]))
    assert windows
    for window in windows:
        for name in PER_WINDOW:
            metric = window.metrics[name]
            if name in blamed:
                assert metric.status == 'insufficient'
                assert f'no message came on {silent}' in metric.reason, name
            else:
                assert silent not in metric.reason, name
    for name in blamed:
        assert found[name]['status'] == 'insufficient'
        assert f'no message came on {silent}' in found[name]['reason'], name


def test_robot_silent_from_some_time_on_is_named():
    """It is there while disengaged and falls silent before the clutch closes."""
    made = full(40.0, without=['/joints'], until=7.0)
    made.flag(0.0, '/engaged', False).flag(10.005, '/engaged', True)
    found, windows, _ = run(made, **CLUTCH)
    later = [w for w in windows if w.start_ns > syn.ns(11.0)]
    assert later
    for window in later:
        for name in ('tracking_error_rms_norm', 'joint_error_rms', 'limit_margin_min'):
            assert window.metrics[name].reason == (
                '/joints (robot_joints) gave no sample while engaged in this window'), name
    assert '/joints (robot_joints)' in later[-1].metrics['latency_s'].reason
    assert '/joints' not in later[-1].metrics['latency_command_s'].reason
    for name in ('tracking_error_rms_norm', 'tracking_error_max_m', 'joint_error_rms',
                 'limit_margin_min', 'limit_share', 'joint_range_use', 'manipulability_min',
                 'reach_p95_norm', 'hull_volume_norm', 'workspace_overlap',
                 'orientation_error_rms_rad'):
        assert found[name]['status'] == 'insufficient'
        assert found[name]['reason'] == '/joints (robot_joints) gave no sample while engaged', name
    assert found['reach_p95_norm_operator']['status'] == 'ok'


def test_clutch_that_never_came_pretends_no_zero():
    found, windows, _ = run(full(20.0), **CLUTCH)
    why = 'no message came on /engaged (engaged), so no time counts as engaged'
    for name in ('engaged_time_s', 'engagements', 'engagement_rate_per_min',
                 'tracking_error_rms_norm', 'joint_error_rms', 'latency_s', 'limit_share',
                 'limit_margin_min', 'workspace_overlap', 'reach_max_norm_operator',
                 'manipulability_p5', 'workspace_coverage_operator'):
        assert (found[name]['value'], found[name]['status']) == (None, 'insufficient'), name
        assert found[name]['reason'].startswith(why), name
    assert windows[-1].metrics['limit_margin_min'].reason == why
    assert windows[-1].metrics['latency_s'].reason.startswith(why)


def test_open_clutch_is_zero_seconds_and_no_clutch_is_all_the_time():
    found, _, _ = run(full(12.0).flag(0.0, '/engaged', False), **CLUTCH)
    assert (found['engaged_time_s']['value'], found['engaged_time_s']['status']) == (0.0, 'ok')
    assert found['tracking_error_rms_norm']['reason'] == (
        '/engaged was never true, so no time counts as engaged')
    found, _, _ = run(full(12.0))
    assert found['engaged_time_s']['value'] == pytest.approx(12.0, abs=0.03)
    assert 'engaged.topic is not configured, so all time' in found['engaged_time_s']['reason']
    found, _, _ = run(full(12.0).flag(0.0, '/engaged', True), **CLUTCH)
    assert found['engaged_time_s']['reason'] == ''
    assert found['engagement_rate_per_min']['reason'] == 'per minute of engaged time'


def test_metric_that_is_not_configured_is_in_no_window():
    made, t = syn.Feed(), syn.clock(0.0, 12.0, 100.0)
    made.joints('/joints', t, np.zeros((len(t), 2)), ('a', 'b'))
    made.joints('/command', t, np.zeros((len(t), 2)), ('a', 'b'))
    target = syn.evaluator(syn.arm_parameters(**syn.BARE))
    windows = syn.feed(target, made.messages())
    assert windows
    for window in windows:
        assert 'joint_error_rms' in window.metrics
        assert not {'limit_margin_min', 'tracking_error_rms_norm'} & set(window.metrics)


BUDGET = tuple(f'{name}_rms_norm' for name in (
    'discrepancy', 'budget_mapping', 'budget_processing_delay', 'budget_command',
    'budget_response_delay', 'budget_residual'))


def test_every_window_has_the_budget_while_no_delay_is_known():
    """Before the first latency window, and when the last delay is too old, it is missing."""
    moving = syn.wander()

    def stops(times):
        return moving(np.minimum(times, 20.0))

    _, windows, _ = run(full(96.0, motion=stops))
    assert len(windows) > 40
    for window in windows:
        assert set(BUDGET) <= set(window.metrics), window.start_ns
    for window in (windows[0], windows[-1]):
        assert {window.metrics[name].value for name in BUDGET} == {None}
    assert windows[8].metrics['budget_residual_rms_norm'].value is not None


@pytest.mark.parametrize('label', ['', 'idle'])
def test_no_number_stands_when_another_mapping_or_none_is_active(label):
    """What was once published goes on as NaN under a label that does not have it."""
    made = full(30.0).text(0.0, '/mapping', 'direct').text(20.0, '/mapping', label)
    _, windows, _ = run(made, active_mapping__fixed=None, active_mapping__topic='/mapping')
    before = set().union(*(w.metrics for w in windows if w.end_ns < syn.ns(20.0)))
    after = [w for w in windows if w.start_ns >= syn.ns(20.0)]
    assert len(after) >= 4
    for window in after:
        assert window.mapping == label
        assert before <= set(window.metrics)
        assert window.metrics['tracking_error_rms_norm'].value is None
        assert window.metrics['budget_command_rms_norm'].value is None


def test_numbers_of_another_kind_of_mapping_do_not_stand():
    """A rate mapping is judged by velocities: the position metrics before it go on as NaN."""
    made = full(30.0).text(0.0, '/mapping', 'direct').text(20.0, '/mapping', 'stick')
    _, windows, _ = run(
        made, active_mapping__fixed=None, active_mapping__topic='/mapping',
        mappings__stick__kind='rate', mappings__stick__input='displacement')
    before = set().union(*(w.metrics for w in windows if w.end_ns < syn.ns(20.0)))
    after = [w for w in windows if w.start_ns >= syn.ns(20.0)]
    assert len(after) >= 4
    for window in after:
        assert 'tracking_error_rms_norm_s' in window.metrics
        assert before <= set(window.metrics)
        assert window.metrics['tracking_error_rms_norm'].status == 'not_configured'
