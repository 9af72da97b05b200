# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The error budget's arithmetic against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from teleop_eval.core.advice import largest_term, plain_words, what_first
from teleop_eval.core.budget import (
    LEAST_DISCREPANCY,
    TERMS,
    BudgetStatistics,
    Positions,
    split,
    window_metrics,
)
from teleop_eval.core.metric import Metric, missing


def random_positions(seed=0, count=200, *, command=True, operator=True):
    """Return positions without any relation to each other."""
    rng = np.random.default_rng(seed)
    u = [rng.normal(size=(count, 3)) for _ in range(6)]
    if not command:
        u[2] = u[3] = None
    if not operator:
        u[0] = None
    return Positions(*u)


def run(windows, **kwargs):
    """Return the metrics of windows of terms."""
    statistics = BudgetStatistics()
    for one in windows:
        statistics.add(one)
    return statistics.metrics(why={}, **kwargs), statistics


@pytest.mark.parametrize('command', [True, False])
def test_terms_sum_to_the_discrepancy_sample_by_sample(command):
    """e = u_r - u_o, cell by cell, to rounding; without a command there are three terms."""
    positions = random_positions(command=command)
    cells = split(positions)
    assert set(cells.terms) == (set(TERMS) if command
                                else {'mapping', 'response_delay', 'residual'})
    np.testing.assert_allclose(sum(cells.terms.values()), positions.robot - positions.operator,
                               atol=1e-14)
    np.testing.assert_array_equal(cells.discrepancy, positions.robot - positions.operator)


@pytest.mark.parametrize('command', [True, False])
def test_shares_sum_to_one(command):
    """Shares are mean(term . e) / mean(|e|^2): over the run they sum to 1 to rounding."""
    windows = [split(random_positions(seed, 40 + seed, command=command)) for seed in range(30)]
    found, _ = run(windows)
    shares = [found[f'budget_{name}_share'] for name in TERMS]
    known = [one.value for one in shares if one.value is not None]
    assert len(known) == (5 if command else 3)
    assert sum(known) == pytest.approx(1.0, abs=1e-12)
    assert all(one.ci95 is not None and one.ci95[0] < one.value < one.ci95[1]
               for one in shares if one.value is not None)


def test_one_term_alone_by_hand():
    """
    The robot copies the operator at half scale with an offset along x, nothing else.

    u_o = (+-0.4, 0, 0) in turn, u_i = 0.5 u_o + (0.1, 0, 0): the mapping's term is (-0.1, 0, 0)
    and (0.3, 0, 0), mean (0.1, 0, 0), RMS sqrt((0.01 + 0.09) / 2) = 0.2236068, varying 0.2.
    """
    u_o = np.tile([[0.4, 0.0, 0.0], [-0.4, 0.0, 0.0]], (50, 1))
    u_i = 0.5 * u_o + [0.1, 0.0, 0.0]
    found, _ = run([split(Positions(u_o, u_i, u_i, u_i, u_i, u_i))])
    assert found['budget_mapping_rms_norm'].value == pytest.approx(0.22360680)
    assert found['budget_mapping_static_norm'].value == pytest.approx(0.1)
    assert found['budget_mapping_static_norm'].details['xyz'] == pytest.approx([0.1, 0.0, 0.0])
    assert found['budget_mapping_varying_norm'].value == pytest.approx(0.2)
    assert found['budget_mapping_share'].value == pytest.approx(1.0)
    assert found['discrepancy_rms_norm'].value == pytest.approx(0.22360680)
    for name in TERMS[1:]:
        assert found[f'budget_{name}_rms_norm'].value == 0.0
        assert found[f'budget_{name}_share'].value == 0.0
    assert found['budget_mapping_rms_norm'].ci95 is None  # one window tells no interval


def test_a_term_that_cancels_another_has_a_negative_share():
    """
    An over-scale of 0.3 and a command offset of -0.1 along the same axis.

    e = 0.3 - 0.1 = 0.2: shares 1.5 and -0.5 by hand.
    """
    zero, wide = np.zeros((10, 1)), np.ones((10, 1))
    cells = split(Positions(zero, 0.3 * wide, 0.3 * wide, 0.2 * wide, 0.2 * wide, 0.2 * wide))
    found, statistics = run([cells])
    assert found['budget_mapping_share'].value == pytest.approx(1.5)
    assert found['budget_command_share'].value == pytest.approx(-0.5)
    assert found['budget_command_share'].details == {'partly_cancels': 'mapping'}
    assert statistics.cancelled('command') == 'mapping'
    assert statistics.cancelled('residual') == ''


def test_shares_of_a_tiny_discrepancy_are_insufficient():
    """Below RMS(e) = 0.005 there is nothing to share; the terms themselves are given."""
    def found_at(size):
        u = np.full((10, 1), size)
        return run([split(Positions(0 * u, u, u, u, u, u))])[0]

    below, above = found_at(0.999 * LEAST_DISCREPANCY), found_at(1.001 * LEAST_DISCREPANCY)
    assert below['budget_mapping_share'].status == 'insufficient'
    assert '0.0050 arm lengths' in below['budget_mapping_share'].reason
    assert below['budget_mapping_rms_norm'].status == 'ok'
    assert above['budget_mapping_share'].status == 'ok'


def test_without_an_operator_only_the_robot_side_is_split():
    """No hand: mapping and shares cannot be formed and say why, the rest can."""
    statistics = BudgetStatistics()
    statistics.add(split(random_positions(operator=False)))
    why = {name: ('not_configured', f'{name}: needs operator.shoulder_m')
           for name in ('mapping', 'discrepancy')}
    found = statistics.metrics(why=why)
    assert found['budget_mapping_rms_norm'].reason == 'mapping: needs operator.shoulder_m'
    assert found['budget_response_delay_share'].reason == (
        'discrepancy: needs operator.shoulder_m')
    assert found['discrepancy_rms_norm'].status == 'not_configured'
    assert found['budget_response_delay_rms_norm'].status == 'ok'


def test_what_a_window_shows():
    """A window's metrics are plain RMS; an empty one says that nothing was engaged."""
    positions = random_positions(3)
    found = window_metrics(split(positions))
    expected = np.sqrt(np.mean(np.sum((positions.ideal - positions.operator) ** 2, axis=1)))
    assert found['budget_mapping_rms_norm'].value == pytest.approx(expected)
    empty = window_metrics(split(random_positions(count=0)), suffix='_norm_s')
    assert empty['discrepancy_rms_norm_s'].status == 'insufficient'
    assert 'no engaged' in empty['discrepancy_rms_norm_s'].reason


def test_plain_words_rank_by_rms():
    """The largest term by RMS is named with its delay and what it cancels."""
    metrics = {f'budget_{name}_rms_norm': Metric(0.01 * (k + 1), 'arm lengths')
               for k, name in enumerate(('mapping', 'processing_delay', 'command', 'residual'))}
    metrics['budget_response_delay_rms_norm'] = Metric(0.06, 'arm lengths')
    assert largest_term(metrics) == 'response_delay'
    text = plain_words(metrics, delays_s={'response_delay': 0.092}, cancels='mapping')
    assert text == ('response delay: 0.060 arm lengths, 92 ms behind the command; '
                    'partly cancels mapping')
    assert plain_words({}, delays_s={}) == ''
    alone = plain_words(metrics, delays_s={'response_delay': 0.092}, has_command=False)
    assert alone.endswith('92 ms behind the ideal command')


def measured(mapping, response, ci=None, n=30):
    """Return metrics of two terms with equal relative intervals."""
    def metric(value):
        return Metric(value, 'arm lengths', None if ci is None else (
            value * (1 - ci), value * (1 + ci)), n)

    zero = {f'budget_{name}_{part}_norm': Metric(0.0, 'arm lengths', (0.0, 0.0), n)
            for name in TERMS for part in ('rms', 'static', 'varying')}
    return {
        **zero, 'budget_mapping_rms_norm': metric(mapping),
        'budget_mapping_static_norm': Metric(0.9 * mapping, 'arm lengths'),
        'budget_response_delay_rms_norm': metric(response),
        'budget_mapping_share': Metric(0.7, '1'), 'budget_response_delay_share': Metric(0.3, '1'),
        'discrepancy_rms_norm': Metric(mapping + response, 'arm lengths'),
        'latency_s': Metric(0.14, 's'), 'latency_response_s': Metric(0.13, 's')}


def test_what_to_fix_first_and_how_sure():
    """One sentence: the largest term, what it is in the lab, whether the next one is apart."""
    sure = what_first('reach', measured(0.2, 0.05, ci=0.1))
    assert sure == ("reach: fix first the mapping's centre or offset, which is 0.200 arm "
                    'lengths RMS, 70 % of the discrepancy; sure: its 95 % interval 0.180 to '
                    '0.220 lies above that of the next, response delay.')
    unsure = what_first('reach', measured(0.05, 0.052, ci=0.1))
    assert 'fix first the time the robot takes to follow, 130 ms' in unsure
    assert 'not sure: its 95 % interval 0.047 to 0.057 overlaps that of mapping' in unsure
    few = what_first('reach', measured(0.2, 0.05, n=7))
    assert few.endswith('; not sure: 7 windows are too few for an interval; the next, '
                        'response delay, is 0.050.')
    nothing = what_first('reach', measured(0.001, 0.001, ci=0.1))
    assert nothing == 'reach: nothing to fix first: hand and tool differ by 0.0020 ' \
                      'arm lengths RMS only.'
    cancelled = what_first('reach', measured(0.2, 0.05) | {
        'discrepancy_rms_norm': Metric(0.001, 'arm lengths')})
    assert cancelled == ('reach: nothing to fix first: hand and tool differ by 0.0010 arm '
                         'lengths RMS only; but other parts cancel mapping, which is 0.200: see '
                         'whether the parameters of the mapping are those of your stack.')
    none = {f'budget_{name}_rms_norm': missing('unobservable', 'arm lengths', 'no delay')
            for name in TERMS}
    assert what_first('reach', none) == 'reach: cannot say what to fix first: no delay.'


def test_the_offset_of_clutching_is_no_fault():
    """Under a mapping anchored at each engagement, hand and tool are meant to be apart."""
    sentence = what_first('ratchet', measured(0.4, 0.05, ci=0.1), clutched=True)
    assert 'fix first the time the robot takes to follow' in sentence
    assert 'the 0.400 of the mapping hold the offset' in sentence
    assert 'which is meant' in sentence
