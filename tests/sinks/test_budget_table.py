# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget for a terminal: every part with its size or the reason why there is none."""

from __future__ import annotations

import io
import re

import pytest
from rich.console import Console

from teleop_eval.sinks.tables import summary_table

TERMS = ('mapping', 'processing_delay', 'command', 'response_delay', 'residual')
HOSTILE = '\x1b]0;owned\x07\x1b[31m[red]x[/red]\u202egnp.exe\r\n\x00[/]'
NO_TOPIC = 'command.topic is not configured'


def metric(value, unit='arm lengths', *, ci95=None, status='ok', reason='', **details):
    return {'value': value, 'unit': unit, 'ci95': ci95, 'n': 3, 'samples': 500,
            'status': status, 'reason': reason, 'details': details}


def gone(unit='arm lengths', status='not_configured', reason=NO_TOPIC):
    return metric(None, unit, status=status, reason=reason)


def part(name, rms, static, varying, share=None, *, end='_norm', unit='arm lengths', **more):
    """Return the metrics of one part, `more` for its RMS."""
    found = {f'{name}_rms{end}': metric(rms, unit, **more),
             f'{name}_static{end}': metric(static, unit),
             f'{name}_varying{end}': metric(varying, unit)}
    return found if share is None else found | {f'{name}_share': metric(share, '1')}


def budget(end='_norm', unit='arm lengths'):
    """Return a whole budget: 3-4-5 triangles of static and varying part."""
    found = part('discrepancy', 0.5, 0.4, 0.3, end=end, unit=unit)
    for name, rms, share in zip(TERMS, (0.25, 0.05, 0.1, 0.2, 0.00004),
                                (0.6, 0.05, -0.15, 0.5, -0.0001), strict=True):
        found |= part(f'budget_{name}', rms, 0.8 * rms, 0.6 * rms, share, end=end, unit=unit)
    found['budget_command_share']['details'] = {'partly_cancels': 'response_delay'}
    found['budget_residual_share']['details'] = {'partly_cancels': 'mapping'}
    return found


def summary(advice=None, **mappings):
    """Return a summary with these metrics by mapping."""
    return {'session': {'name': 'trial_3'}, 'arms': {'right': {'mappings': {
        label: {'metrics': of, **({} if advice is None else {'advice': advice})}
        for label, of in mappings.items()}}}}


def text(document, width=80):
    console = Console(file=io.StringIO(), width=width, color_system=None)
    console.print(summary_table(document))
    return console.file.getvalue()


def table(shown):
    """Return the rows of the budget as words, by what they begin with."""
    lines = shown.partition('\nError budget')[2].splitlines()
    titles = ('discrepancy (sum)', 'mapping', 'processing delay', 'command', 'response delay',
              'residual')
    return {title: line.removeprefix(title).split() for title in titles
            for line in lines if line.startswith(f'{title} ')}


def test_every_part_has_its_size_and_share():
    shown = text(summary(reach=budget()))
    assert re.search(r'^reach +RMS L +static L +varying L +share$', shown, re.MULTILINE)
    assert table(shown) == {
        'discrepancy (sum)': ['0.5000', '0.4000', '0.3000'],
        'mapping': ['0.2500', '0.2000', '0.1500', '60.0', '%'],
        'processing delay': ['0.0500', '0.0400', '0.0300', '5.0', '%'],
        'command': ['0.1000', '0.0800', '0.0600', '-15.0', '%'],
        'response delay': ['0.2000', '0.1600', '0.1200', '50.0', '%'],
        'residual': ['0.0000', '0.0000', '0.0000', '0.0', '%'],
    }
    assert 'shares of all parts add up, RMS do not' in shown


def test_a_negative_share_says_what_it_cancels_unless_it_is_next_to_nothing():
    shown = text(summary(reach=budget()))
    lines = [line.strip() for line in shown.splitlines()]
    place = next(k for k, line in enumerate(lines) if line.startswith('command '))
    assert ' '.join(lines[place + 1:place + 3]).startswith('partly cancels response delay')
    assert shown.count('cancels') == 1  # the residual's -0.01 % is not worth it
    assert '-0.0' not in shown


def test_intervals_stand_below_their_numbers():
    found = budget() | {
        'budget_mapping_rms_norm': metric(0.25, ci95=[0.2, 0.31234]),
        'budget_mapping_share': metric(0.6, '1', ci95=[0.55, 0.651])}
    shown = text(summary(reach=found))
    assert re.search(r'^ +0\.2000\.\.0\.3123 +55\.0\.\.65\.1 %$', shown, re.MULTILINE)


def without_command():
    """Return the budget of a stack whose command is not known."""
    found = budget()
    for name in ('processing_delay', 'command'):
        found |= {f'budget_{name}_{part}_norm': gone() for part in ('rms', 'static', 'varying')}
        found[f'budget_{name}_share'] = gone('1')
    return found


def test_a_part_that_cannot_be_formed_has_its_reason_once():
    shown = text(summary(reach=without_command() | {'latency_command_s': gone('s')}))
    rows = table(shown)
    assert rows['processing delay'] == rows['command'] == [
        'not', 'configured', '(1)', '-', '-', '-']
    assert rows['mapping'][0] == '0.2500'
    # Once below the metrics, for the latency, and once below the budget.
    assert f'- not configured: latency_command_s: {NO_TOPIC}' in shown
    assert f'(1) not configured: {NO_TOPIC}' in shown.partition('Error budget')[2]
    assert shown.count(NO_TOPIC) == 2


def test_without_a_command_the_response_delay_is_said_to_be_that_of_both():
    note = 'without commands: delay from operator to robot, mapping and robot together'
    shown = text(summary(reach=without_command()))
    assert table(shown)['response delay'][0] == '(2)'
    assert f'(2) {note}' in ' '.join(shown.split())
    assert max(map(len, shown.splitlines())) <= 80
    # With commands, whether or not there is a model, it is that of the robot alone.
    unmodelled = without_command() | {'latency_response_s': metric(0.1, 's')}
    nothing = {name: gone(of['unit'], 'unobservable', 'no delay')
               for name, of in without_command().items()}
    for other in (budget(), unmodelled, nothing):
        assert note not in ' '.join(text(summary(reach=other)).split())


@pytest.mark.parametrize('status', ['unobservable', 'insufficient'])
def test_a_budget_without_a_delay_says_so(status):
    why = 'no delay could be observed to split the discrepancy by'
    found = {name: gone(of['unit'], status, why) for name, of in budget().items()}
    shown = text(summary(reach=found))
    assert all(row[:2] == [status, '(1)'] and set(row[2:]) <= {'-'}
               for row in table(shown).values())
    assert shown.count(why) == 1


def test_shares_of_next_to_nothing_keep_their_sizes():
    why = 'the discrepancy is 0.0010 arm lengths RMS; below 0.005 its shares are those of noise'
    found = budget() | {f'budget_{name}_share': gone('1', 'insufficient', why)
                        for name in TERMS}
    shown = text(summary(reach=found))
    assert table(shown)['mapping'] == ['0.2500', '0.2000', '0.1500', 'insufficient', '(1)']
    assert ' '.join(shown.split()).count(why) == 1


def test_a_rate_mapping_is_split_by_velocities():
    rate = budget('_norm_s', 'arm lengths/s') | {
        name: gone(reason='a rate mapping commands velocities') for name in budget()
        if name.endswith('_norm')}
    shown = text(summary(stick=rate, reach=budget()))
    assert re.search(r'^stick +RMS L/s +static L/s +varying L/s +share$', shown, re.MULTILINE)
    assert re.search(r'^reach +RMS L +static L +varying L +share$', shown, re.MULTILINE)
    assert len(re.findall(r'^mapping +0\.2500 +0\.2000 +0\.1500 +60\.0 %$', shown,
                          re.MULTILINE)) == 2


def test_a_mapping_that_is_not_modelled_has_no_table_but_a_sentence():
    why = "the stack's mapping is not modelled"
    found = {name: gone(of['unit'], reason=why) for name, of in budget().items()}
    shown = text(summary(vendor=found))
    assert 'Error budget' not in shown
    assert why in ' '.join(shown.split())
    both = text(summary(vendor=found, reach=budget()))
    assert not re.search(r'^vendor +RMS', both, re.MULTILINE)
    assert re.search(r'^reach +RMS', both, re.MULTILINE)


def test_a_caveat_of_a_part_is_marked():
    found = {name: {**of, 'reason': 'receive-based'} for name, of in budget().items()}
    shown = text(summary(reach=found))
    assert table(shown)['mapping'] == ['0.2500', '(1)', '0.2000', '0.1500', '60.0', '%', '(1)']
    assert shown.partition('Error budget')[2].count('receive-based') == 1


@pytest.mark.parametrize('width', [80, 120])
@pytest.mark.parametrize('make', [budget, without_command])
def test_nothing_is_wider_than_80_columns_or_cut(make, width):
    wide = {name: {**of, 'ci95': [-9.123456, 9.123456], 'reason': of['reason'] or 'a caveat'}
            for name, of in make().items()}
    shown = text(summary(**{f'a_label_that_is_much_longer_than_its_column_{k}': wide
                            for k in range(3)}), width).partition('Error budget')[2]
    assert max(map(len, shown.splitlines())) <= 80
    assert '\u2026' not in shown
    assert shown.count('-9.1235..9.1235') == 3 * (6 if make is budget else 4)


@pytest.mark.parametrize('hostile', [HOSTILE, HOSTILE * 200])
def test_hostile_text_stays_text(hostile):
    found = {name: {**of, 'reason': hostile} for name, of in budget().items()}
    found['budget_mapping_rms_norm'] = gone(status=hostile, reason=hostile)
    found['budget_command_share']['details'] = {'partly_cancels': hostile}
    shown = text(summary(hostile, **{hostile: found}))
    assert not set(shown) & {'\x1b', '\x07', '\x00', '\r', '\u202e'}
    assert '[red]' in shown
    assert max(map(len, shown.splitlines())) <= 80


@pytest.mark.parametrize('broken', [
    None, 7, {}, {'value': 'much', 'status': 'ok'}, {'value': float('nan'), 'status': 'ok'},
    {'value': 0.1, 'status': 'ok', 'ci95': 'no', 'details': 3}])
def test_a_broken_metric_spoils_no_other(broken):
    shown = text(summary(reach=budget() | {'budget_mapping_share': broken,
                                           'budget_command_static_norm': broken}))
    assert table(shown)['response delay'] == ['0.2000', '0.1600', '0.1200', '50.0', '%']
    assert 'nan' not in shown and 'None' not in shown


def test_what_to_fix_first_comes_last_and_names_the_arm_where_there_are_several():
    one = summary('reach: fix first the command.', reach=budget())
    one['problems'], one['notes'] = ['a problem'], ['a note']
    assert text(one).endswith('What to fix first\n' + '- reach: fix first the command.'.ljust(
        len(text(one).splitlines()[-1])) + '\n')
    one['arms']['left'] = one['arms']['right']
    end = [line.rstrip() for line in text(one).splitlines()[-3:]]
    assert end == ['What to fix first', '- right, reach: fix first the command.',
                   '- left, reach: fix first the command.']
    assert 'What to fix first' not in text(summary(reach=budget()))
