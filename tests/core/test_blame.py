# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Whole runs whose numbers must not be blamed on the wrong part, and what they say instead."""

from __future__ import annotations

import re

import numpy as np
import pytest
import synthetic_chain as chains
import synthetic_session as syn

SECONDS = 30.0
COMMANDED = {'command__topic': '/command', 'mappings__direct__kind': 'task_space',
             'active_mapping__fixed': 'direct'}
# 60 degrees about z: quaternion (0, 0, sin 30, cos 30). Of motions that are alike in all three
# axes the correlation is then (1 + 2 cos 60) / 3 = 2/3.
TURNED = [0.0, 0.0, 0.5, np.sqrt(0.75)]


def evaluated(chain=None, *, command=True, seconds=SECONDS, **parameters):
    """Return summary, windows and evaluator of a chain under these parameters."""
    chain = chain or chains.Chain(processing_s=0.02, transport_s=0.08)
    motion = chains.simulate(chain, syn.wander(), seconds)
    target = syn.evaluator(syn.arm_parameters(**(COMMANDED | parameters)))
    made = chains.messages(chain, motion, command=command).messages()
    windows = syn.feed(target, [one for one in made if one[0] < syn.ns(seconds)])
    return syn.closed(target), windows, target


def advice(summary, mapping='direct'):
    return summary['arms']['right']['mappings'][mapping]['advice']


@pytest.mark.parametrize('command', [True, False])
def test_a_wrong_model_is_not_blamed_on_the_stack_alone(command):
    """
    The stack turns the hand by nothing, the parameter file by 60 degrees about z.

    The chain is late by 20 and 80 ms and otherwise perfect, so all that is large is the model.
    """
    known = {'command__topic': '/command' if command else None}
    summary, _, _ = evaluated(command=command, operator__axes_xyzw=TURNED, **known)
    sentence, found = advice(summary), syn.metrics(summary)
    assert 'fix first ' + ('what the stack does to the command' if command
                           else "the robot's following") in sentence
    assert (', or axes, scale or centre in the parameter file are not those of the stack: check '
            'them first; ') in sentence
    names = ('latency_s', 'latency_command_s')[:1 + command]
    doubts = [name for name in names if 'agree little' in found[name]['reason']]
    for name in names:
        metric = found[name]
        low = metric['value'] is not None and metric['details']['correlation'] < 0.8
        assert (name in doubts) == low
        if low:
            assert metric['reason'].endswith(
                f'the two motions agree little (correlation {metric["details"]["correlation"]:.2f}'
                '): is the mapping configured as the stack applies it?')
    assert doubts


def test_a_right_model_raises_no_doubt():
    summary, _, _ = evaluated(chains.Chain(
        processing_s=0.02, command_offset=(0.0, 0.08, 0.0), transport_s=0.02))
    assert 'fix first what the stack does to the command' in advice(summary)
    assert 'parameter file' not in advice(summary)
    assert not any('agree little' in metric['reason']
                   for metric in syn.metrics(summary).values())


def test_a_hand_without_orientation_is_named_where_it_moves_the_tool():
    """Points of a tracker under `relative` in the tool's frame: no ideal command at all."""
    summary, windows, _ = evaluated(
        mappings__direct__kind='relative', mappings__direct__frame='tool')
    found = syn.metrics(summary)
    for name in ('tracking_error_rms_norm', 'tracking_error_compensated_rms_norm', 'latency_s',
                 'latency_command_s', 'discrepancy_rms_norm', 'budget_mapping_rms_norm',
                 'budget_command_share', 'orientation_error_static_rad', 'bandwidth_hz'):
        assert found[name]['status'] == 'insufficient', name
        assert found[name]['reason'].startswith("the hand's messages have no orientation"), (
            name, found[name])
    assert found['latency_response_s']['status'] == 'ok'
    assert advice(summary) == ("direct: cannot say what to fix first: the hand's messages have "
                               'no orientation.')
    for name in ('tracking_error_rms_norm', 'latency_s', 'budget_residual_rms_norm'):
        assert windows[-1].metrics[name].reason == "the hand's messages have no orientation"


def test_a_hand_without_orientation_is_named_for_orientations():
    """Under `task_space` positions do without; 30 s of motion are enough for anything else."""
    summary, _, _ = evaluated()
    found = syn.metrics(summary)
    assert found['tracking_error_rms_norm']['status'] == 'ok'
    why = {metric['reason'] for name, metric in found.items()
           if name.startswith('orientation_error') and metric['status'] == 'insufficient'}
    assert why == {"the hand's messages have no orientation"}


def test_orientations_that_came_are_not_called_missing():
    summary, _, _ = evaluated(
        chains.Chain(transport_s=0.08, turn_offset=(0.1, 0.0, 0.0)),
        mappings__direct__kind='relative', mappings__direct__frame='tool')
    found = syn.metrics(summary)
    assert found['tracking_error_rms_norm']['status'] == 'ok'
    assert 'no orientation' not in str(found)


def test_a_clutch_that_was_never_closed_is_named():
    chain = chains.Chain(transport_s=0.08)
    made = chains.messages(chain, chains.simulate(chain, syn.wander(), 20.0))
    made.flag(-0.5, '/clutch', False)
    target = syn.evaluator(syn.arm_parameters(**COMMANDED, engaged__topic='/clutch'))
    windows = syn.feed(target, made.messages())
    summary = syn.closed(target)
    assert summary['problems'] == [
        'right: /clutch (engaged) was never true; no time counts as engaged.']
    assert advice(summary) == ('direct: cannot say what to fix first: /clutch was never true, so '
                               'no time counts as engaged.')
    found = syn.metrics(summary)
    assert found['engaged_time_s']['value'] == 0.0
    why = '/clutch was never true, so no time counts as engaged'
    for name in ('tracking_error_rms_norm', 'budget_residual_rms_norm', 'latency_s'):
        assert found[name]['reason'].startswith(why), (name, found[name])
    assert windows[-1].metrics['tracking_error_rms_norm'].reason == why


def test_a_clutch_that_was_closed_once_is_not_called_open():
    chain = chains.Chain(transport_s=0.08, clutch=((1.0, 2.0),))
    summary, _, _ = evaluated(chain, seconds=16.0, engaged__topic='/clutch')
    assert summary['problems'] == [] and 'never true' not in str(summary)


@pytest.mark.parametrize('kind', ['task_space', 'rate', 'unmodelled'])
def test_a_command_that_never_came_has_one_status_and_one_reason(kind):
    given = {'mappings__direct__kind': kind}
    if kind == 'rate':
        given['mappings__direct__input'] = 'displacement'
    summary, _, _ = evaluated(command=False, seconds=20.0, **given)
    found = syn.metrics(summary)
    end = '_norm_s' if kind == 'rate' else '_norm'
    expected = ('insufficient', 'no message came on /command (command)')
    names = ['latency_response_s', 'budget_command_share']
    if kind != 'unmodelled':
        names += ['latency_command_s', f'budget_processing_delay_rms{end}',
                  f'budget_command_static{end}']
    else:
        names = ['latency_response_s', f'budget_response_delay_rms{end}', 'budget_residual_share']
    for name in names:
        assert (found[name]['status'], found[name]['reason']) == expected, (name, found[name])
    if kind == 'task_space':
        assert found['budget_residual_rms_norm']['status'] == 'ok'


def test_without_a_command_no_other_term_waits_for_it():
    """The hand rests: what lacks a delay must not be blamed on the command."""
    made = syn.session(16.0, motion=lambda t: np.tile([0.5, 0.1, 0.1], (len(t), 1)))
    target = syn.evaluator(syn.arm_parameters(**COMMANDED))
    syn.feed(target, made.messages())
    found = syn.metrics(syn.closed(target))
    assert found['budget_command_rms_norm']['reason'] == 'no message came on /command (command)'
    for name in ('budget_mapping_rms_norm', 'budget_response_delay_rms_norm',
                 'budget_residual_share', 'discrepancy_rms_norm'):
        assert '/command' not in found[name]['reason'], (name, found[name])


def test_live_and_summary_leave_the_offset_of_clutching_aside():
    """
    Clutched, the tool is 0.3 arm lengths from the hand on purpose.

    Both lines must name the same term, and not the mapping's.
    """
    chain = chains.Chain(relative=True, scale=(0.5,) * 3, transport_s=0.08,
                         clutch=((1.0, 14.0), (16.0, 40.0)))
    summary, windows, target = evaluated(
        chain, mappings__direct__kind='relative', mappings__direct__scale=0.5,
        engaged__topic='/clutch')
    metrics = windows[-1].metrics
    mapping = metrics['budget_mapping_rms_norm'].value
    assert mapping > 2.0 * metrics['budget_response_delay_rms_norm'].value
    [line] = [one for one in target.diagnostics(target._receive_ns)
              if one.name == 'right: tracking']
    assert re.search(r'; mostly response delay: 0\.\d{3} arm lengths, 80 ms behind the command',
                     line.message), line.message
    assert 'between hand and tool' not in line.message
    assert 'fix first the time the robot takes to follow, 80 ms' in advice(summary)


TERMS = ('mapping', 'processing_delay', 'command', 'response_delay', 'residual')


@pytest.mark.parametrize(('command', 'scaling', 'scaled'), [
    (True, 'normalized', ('mapping', 'processing_delay', 'command')),
    (False, 'normalized', ('mapping', 'response_delay', 'residual')),
    (True, 'metric', ('mapping',)), (False, 'metric', ('mapping',))])
def test_the_uncertain_arm_length_goes_with_all_that_holds_it(command, scaling, scaled):
    """
    L_o from the stature, 12 % uncertain: in u_o always, in u_i where the mapping divides by it.

    By hand: without a command u_i drives, so it is in response delay and residual too. Every
    share is one of a discrepancy from u_o.
    """
    summary, _, _ = evaluated(
        chains.Chain(scale=(0.8,) * 3, transport_s=0.08), command=command, seconds=20.0,
        command__topic='/command' if command else None, mappings__direct__scaling=scaling,
        operator__arm_length_m=None, operator__stature_m=0.6 / 0.332)
    found = syn.metrics(summary)
    for term in TERMS:
        for part in ('rms_norm', 'static_norm', 'varying_norm', 'share'):
            metric = found[f'budget_{term}_{part}']
            expected = part == 'share' or term in scaled
            if metric['value'] is not None:
                assert metric.get('details', {}).get('scale_uncertainty') == (
                    0.12 if expected else None), (term, part)
    for name, expected in (('discrepancy_rms_norm', True),
                           ('workspace_overlap', scaling == 'normalized'),
                           ('tracking_error_rms_norm', scaling == 'normalized')):
        assert ('scale_uncertainty' in found[name].get('details', {})) == (
            expected and found[name]['value'] is not None), name


def test_windows_tell_the_delays_of_their_budget():
    """By construction a is 20 ms, b 80 ms; discrepancy and mapping are of the split at both."""
    _, windows, _ = evaluated()
    found = windows[-1].metrics
    for term, delay_s in (('processing_delay', 0.02), ('command', 0.02), ('response_delay', 0.08),
                          ('residual', 0.08), ('mapping', 0.1)):
        details = found[f'budget_{term}_rms_norm'].details
        assert details['delay_s'] == pytest.approx(delay_s, abs=2e-3), term
        assert 0.0 <= details['delay_age_s'] < 10.0, term
    total, error = found['discrepancy_rms_norm'], found['tracking_error_compensated_rms_norm']
    assert total.details == error.details
