# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The summary as a table: readable at 80 columns, honest about what is missing, not fooled."""

from __future__ import annotations

import io

import pytest
from rich.console import Console

from teleop_eval.sinks.tables import clean, number, print_summary, summary_table

REASON = 'The operator hardly moves: 0.0010 RMS in the band, 0.0200 are needed.'


def metric(value, unit='s', *, ci95=None, status='ok', reason=''):
    return {'value': value, 'unit': unit, 'ci95': ci95, 'n': 3, 'samples': 500,
            'status': status, 'reason': reason}


def summary(**mappings):
    return {
        'session': {'name': 'trial_3', 'condition': 'teleoperated', 'operator': 'op_07',
                    'duration_s': 40.25, 'source': 'live'},
        'arms': {'right': {'time_base': {'base': 'stamp', 'reason': 'all stamps agree'},
                           'mappings': {label: {'condition': 'teleoperated', 'metrics': of}
                                        for label, of in mappings.items()}}},
    }


def text(document, truth=None, width=80):
    console = Console(file=io.StringIO(), width=width, color_system=None)
    console.print(summary_table(document, truth=truth))
    return console.file.getvalue()


def row(shown, name):
    return next(line for line in shown.splitlines() if line.startswith(name + ' '))


def test_mappings_stand_side_by_side_with_unit_and_interval():
    shown = text(summary(
        mirror={'latency_s': metric(0.13961, ci95=[0.1382, 0.1411])},
        reach={'latency_s': metric(0.14123)}))
    assert row(shown, 'latency_s').split() == ['latency_s', 's', '0.1396', '0.1412']
    assert '0.1382..0.1411' in shown
    assert 'op_07' in shown and '40.2 s' in shown and 'time base: stamp' in shown


def test_truth_stands_beside_the_measured_value():
    truth = {'processing_delay_s': 0.008, 'transport_delay_s': 0.06, 'servo_lag_s': 0.072,
             'sum_s': 0.14,
             'mappings': {'mirror': {'metrics': {'latency_s': 0.1397}},
                          'reach': {'metrics': {'latency_s': None}}}}
    shown = text(summary(
        mirror={'latency_s': metric(0.1391), 'engagements': metric(2, '1')},
        reach={'latency_s': metric(0.1402), 'engagements': metric(1, '1')}), truth)
    assert row(shown, 'latency_s').split() == ['latency_s', 's', '0.1391', '0.1397', '0.1402']
    assert row(shown, 'engagements').split() == ['engagements', '1', '2', '1']
    assert 'transport 0.0600 s' in shown and '= 0.1400 s' in shown


@pytest.mark.parametrize(('status', 'words'), [
    ('unobservable', 'unobservable'), ('insufficient', 'insufficient')])
def test_a_missing_number_is_said_in_words_with_its_reason(status, words):
    shown = text(summary(mirror={'latency_s': metric(None, status=status, reason=REASON)}))
    assert f'{words} (1)' in ' '.join(shown.split())
    assert f'(1) {words}: {REASON}' in ' '.join(shown.split())
    assert 'None' not in shown and 'nan' not in shown


CAVEAT = 'hand: smallest transport age is -20.0 ms, below zero: distrust it.'


def test_a_caveat_of_a_number_is_marked_and_said_once_below():
    warned = metric(0.13961, ci95=[0.1382, 0.1411], reason=CAVEAT)
    other = metric(0.05, reason='receive-based')
    shown = text(summary(mirror={'latency_s': warned, 'latency_command_s': other},
                         reach={'latency_s': warned, 'latency_command_s': metric(0.008)}))
    assert row(shown, 'latency_s').split() == [
        'latency_s', 's', '0.1396', '(1)', '0.1396', '(1)']
    assert row(shown, 'latency_command_s').split() == [
        'latency_command_s', 's', '0.0500', '(2)', '0.0080']
    below = ' '.join(shown.partition('metrics.csv')[2].split())
    assert below == f'(1) {CAVEAT} (2) receive-based'


def test_a_caveat_fits_beside_a_truth_column():
    shown = text(summary(mirror={'latency_s': metric(-0.1391, reason=CAVEAT)},
                         reach={'latency_s': metric(0.1402, reason=CAVEAT)}),
                 {'mappings': {'mirror': {'metrics': {'latency_s': 0.1397}}}})
    assert row(shown, 'latency_s').split() == [
        'latency_s', 's', '-0.1391', '(1)', '0.1397', '0.1402', '(1)']


def test_what_is_not_configured_anywhere_is_a_sentence_and_no_row():
    gone = metric(None, status='not_configured', reason='there is no clutch')
    shown = text(summary(mirror={'engagements': gone, 'latency_s': metric(0.1)},
                         reach={'engagements': gone, 'latency_s': metric(0.1)}))
    assert not any(line.startswith('engagements') for line in shown.splitlines())
    assert 'not configured: engagements: there is no clutch' in ' '.join(shown.split())


def test_what_one_mapping_lacks_keeps_its_row():
    gone = metric(None, status='not_configured', reason='there is no hand')
    shown = text(summary(mirror={'workspace_overlap': gone},
                         reach={'workspace_overlap': metric(0.5, '1')}))
    assert 'not configured (1)' in ' '.join(row(shown, 'workspace_overlap').split())


def test_one_reason_is_printed_once():
    gone = metric(None, status='unobservable', reason=REASON)
    shown = text(summary(mirror={'latency_s': gone, 'latency_command_s': gone},
                         reach={'latency_s': gone}))
    assert ' '.join(shown.split()).count(REASON) == 1


def test_a_metric_of_one_mapping_leaves_the_other_cell_empty():
    shown = text(summary(mirror={'joint_error_rms': metric(0.02, 'rad')}, reach={}))
    assert row(shown, 'joint_error_rms').split() == ['joint_error_rms', 'rad', '0.0200', '-']


def test_joint_by_joint_metrics_are_left_to_the_file():
    shown = text(summary(mirror={'joint_error_rms': metric(0.02, 'rad'),
                                 'joint_error_rms.elbow': metric(0.03, 'rad')}))
    assert 'elbow' not in shown


def test_latency_comes_first_and_unknown_metrics_last():
    shown = text(summary(mirror={
        'a_new_metric': metric(1.0), 'engaged_time_s': metric(9.0),
        'tracking_error_p95_norm': metric(0.2), 'tracking_error_rms_norm': metric(0.1),
        'latency_command_s': metric(0.01), 'latency_s': metric(0.1)}))
    names = [line.split()[0] for line in shown.splitlines() if line.strip()
             and not line.startswith('L =')]
    listed = [name for name in names if '_' in name and name != 'trial_3']
    assert listed == ['latency_s', 'latency_command_s', 'tracking_error_rms_norm',
                      'tracking_error_p95_norm', 'engaged_time_s', 'a_new_metric']


@pytest.mark.parametrize('count', [1, 2, 3, 5])
@pytest.mark.parametrize('with_truth', [False, True])
def test_nothing_is_wider_than_80_columns_or_cut(count, with_truth):
    labels = [f'mapping_with_a_long_name_{index}' for index in range(count)]
    metrics = {'tracking_error_compensated_rms_norm':
               metric(0.01234, 'arm lengths', ci95=[0.01134, 0.234567]),
               'latency_s': metric(None, status='unobservable', reason=REASON * 3)}
    truth = {'mappings': {label: {'metrics': {'latency_s': 0.1396}} for label in labels}}
    shown = text(summary(**dict.fromkeys(labels, metrics)), truth if with_truth else None)
    assert max(map(len, shown.splitlines())) <= 80
    assert '\u2026' not in shown
    assert shown.count('0.0123\n') + shown.count('0.0123 ') == count


HOSTILE = '\x1b]0;owned\x07\x1b[31m[red]x[/red]\u202egnp.exe\r\n\x00[/]'


def test_hostile_names_and_reasons_stay_text():
    document = summary(**{HOSTILE: {HOSTILE: metric(0.5, HOSTILE),
                                    'latency_s': metric(None, status=HOSTILE, reason=HOSTILE)}})
    document['session'].update(name=HOSTILE, operator=HOSTILE, source=HOSTILE)
    document['arms'][HOSTILE] = document['arms'].pop('right')
    document['arms'][HOSTILE]['time_base'] = {'base': HOSTILE, 'reason': HOSTILE}
    document['notes'] = document['problems'] = [HOSTILE, 7]
    shown = text(document)
    assert not set(shown) & {'\x1b', '\x07', '\x00', '\r', '\u202e'}
    assert '[red]' in shown
    assert max(map(len, shown.splitlines())) <= 80


@pytest.mark.parametrize('document', [
    {}, {'session': None, 'arms': None, 'notes': None}, {'arms': {'right': {}}},
    {'arms': {'right': {'mappings': {'a': None}}}},
    {'arms': {'right': {'mappings': {'a': {'metrics': {'latency_s': None}}}}}},
    summary(a={'latency_s': {}}), summary(a={'latency_s': {'value': float('nan'),
                                                          'status': 'ok'}}),
    summary(a={'latency_s': {'value': True, 'status': 'ok', 'ci95': 'no'}}),
])
def test_an_incomplete_summary_is_shown_as_far_as_it_goes(document):
    shown = text(document, {'mappings': {'a': None}})
    assert 'session' in shown or 'trial_3' in shown
    assert 'nan' not in shown and 'True' not in shown and 'None' not in shown


def test_a_pipe_gets_plain_text_of_80_columns():
    stream = io.StringIO()
    print_summary(summary(mirror={'latency_s': metric(0.1, reason=REASON * 2)}),
                  console=Console(file=stream, width=200, force_terminal=False))
    assert '\x1b' not in stream.getvalue()
    lines = stream.getvalue().splitlines()
    assert max(map(len, lines)) <= 80
    assert [line for line in lines if line != line.rstrip()] == []


@pytest.mark.parametrize(('value', 'shown'), [
    (0.0, '0'), (-0.0, '0'), (8.8e-17, '0'), (-2.0e-16, '0'),
    (3.0, '3'), (2, '2'), (0.139612, '0.1396'),
    (-0.139612, '-0.1396'), (12.3456, '12.35'),
    (12345.6, '12346'), (1.0e7, '1.0e+07'), (1.2e-9, '1.2e-09')])
def test_numbers_are_short(value, shown):
    assert number(value) == shown


def test_long_text_is_cut_and_says_so():
    assert clean('x' * 10_000, 50) == 'x' * 47 + '...'
    assert clean('a\tb\n c', 50) == 'a b c'


@pytest.mark.parametrize('base, inputs, sentence', [
    (None, {'hand': 0, 'robot_joints': 0, 'command': 4},
     'Nothing was evaluated: no message came on /hand, /robot_joints.'),
    (None, {'hand': 3, 'robot_joints': 0, 'command': 0, 'description': 0},
     'Nothing was evaluated: no message came on /robot_joints, /command, /description.'),
    (None, {'hand': 1, 'robot_joints': 1}, 'Nothing was evaluated: too few usable messages'),
    ('stamp', {'hand': 9, 'active_mapping': 0},
     'Nothing was evaluated: no mapping was active while the arm was evaluated; no message '
     'came on /active_mapping.'),
])
def test_arm_without_metrics_says_why(base, inputs, sentence):
    document = summary()
    document['arms']['right'] |= {
        'time_base': {'base': base},
        'inputs': {role: {'topic': f'/{role}', 'messages': messages}
                   for role, messages in inputs.items()}}
    assert sentence in ' '.join(text(document).split())
