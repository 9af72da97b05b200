# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The error budget of chains under a rate mapping against the same chains without noise.

Everything is in velocities: `mapping` is what dead band and cap take away, the rest is split as
for positions. `python tests/core/test_budget_rate.py` prints the table of both.
"""

from __future__ import annotations

import dataclasses
import itertools
import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parent))

import synthetic_rate_chain as rates  # noqa: E402
import synthetic_session as syn  # noqa: E402

TERMS = rates.positions.TERMS
SECONDS = 62.0
CLUTCH = ((1.0, 21.5), (23.0, 42.3), (44.1, 63.0))
SHAPED = {'gain': 0.8, 'dead_band': 0.03, 'cap': 0.22}
ALL = {**SHAPED, 'processing_s': 0.04, 'filter_s': 0.05, 'transport_s': 0.08,
       'servo': (15.0, 0.8)}

CASES = {
    'dead band and cap': rates.RateChain(**SHAPED),
    'processing delay': rates.RateChain(processing_s=0.05),
    'filter': rates.RateChain(filter_s=0.08),
    'command offset': rates.RateChain(command_offset=(0.0, 0.005, 0.0)),
    'transport delay': rates.RateChain(transport_s=0.12),
    'sluggish servo': rates.RateChain(servo=(10.0, 0.9)),
    'all, twist': rates.RateChain(**ALL),
    'all, noisy twist': rates.RateChain(**ALL, noise=0.004, encoder_noise=1e-5),
    'all, command in joints': rates.RateChain(**ALL, command='joints'),
    'all, stick': rates.RateChain(**{**ALL, 'gain': 0.3}, source=rates.STICK),
    'all, displacement': rates.RateChain(
        **{**ALL, 'gain': 2.0}, source=rates.DISPLACEMENT, clutch=CLUTCH),
}
NO_COMMAND = rates.RateChain(**{**ALL, 'filter_s': 0.0}, command='')


def inputs(chain: rates.RateChain):
    """Return the input's motion: m/s, deflection, or m about the neutral place."""
    size = {rates.TWIST: 0.2, rates.STICK: 0.6, rates.DISPLACEMENT: 0.09}[chain.source]
    # Slow enough that the tool stays in reach, quick enough to tell a delay.
    return syn.wander(4, centre=(0.0, 0.0, 0.0), size=size, low=0.2)


def parameters(chain: rates.RateChain) -> dict:
    """Return flat parameters whose rate mapping is what the chain is meant to do."""
    displaced = chain.source == rates.DISPLACEMENT
    more = {'active_mapping__fixed': 'direct', 'mappings__direct__kind': 'rate',
            'mappings__direct__gain': chain.gain,
            'mappings__direct__dead_band_mps': chain.dead_band,
            'mappings__direct__max_speed_mps': chain.cap}
    if displaced:
        more['mappings__direct__input'] = 'displacement'
    else:
        more |= {'operator__rate_topic': '/input', 'operator__hand_topic': None}
    if chain.command:
        more['command__topic'] = '/command'
    if chain.clutch:
        more['engaged__topic'] = '/clutch'
    return syn.arm_parameters(**more)


def evaluated(chain: rates.RateChain):
    """Return the metrics found, the truth, the summary and the windows."""
    motion = rates.simulate(chain, inputs(chain), SECONDS, noisy=True)
    target = syn.evaluator(parameters(chain))
    windows = syn.feed(target, rates.messages(chain, motion).messages())
    summary = syn.closed(target)
    clean = rates.simulate(chain, inputs(chain), SECONDS) if chain.noise else motion
    return (syn.metrics(summary), rates.truth(clean, command=bool(chain.command)), summary,
            windows)


def rows(found: dict, true: dict):
    """Yield (term, part, found, true) of every part of every term."""
    for term in ('discrepancy', *TERMS):
        if term not in true:
            continue
        key = term if term == 'discrepancy' else f'budget_{term}'
        for part in ('rms', 'static', 'varying'):
            yield term, part, found[f'{key}_{part}_norm_s'], true[term][part]


def latencies(found: dict, true: dict):
    """Yield (name, found, true) of the delays."""
    a, b = true['delays']
    if found['latency_command_s']['status'] != 'not_configured':
        yield 'latency_command_s', found['latency_command_s'], a
        yield 'latency_response_s', found['latency_response_s'], b
    else:
        yield 'latency_s', found['latency_s'], b


@pytest.mark.parametrize('name', CASES)
def test_terms_are_those_of_the_noise_free_chain(name):
    """Terms within 5 % or 0.002 arm lengths/s, delays within 1 ms; shares sum to 1."""
    found, true, summary, _ = evaluated(CASES[name])
    assert summary['problems'] == []
    for term, part, metric, expected in rows(found, true):
        assert metric['status'] == 'ok', (term, part, metric)
        assert metric['value'] == pytest.approx(expected, rel=0.05, abs=0.002), (term, part)
        assert metric['unit'] == 'arm lengths/s'
    for which, metric, expected in latencies(found, true):
        assert metric['value'] == pytest.approx(expected, abs=1e-3), which
    shares = {term: found[f'budget_{term}_share'] for term in TERMS}
    if true['discrepancy']['rms'] > 0.006:
        assert sum(one['value'] for one in shares.values()) == pytest.approx(1.0, abs=1e-9)
        for term, one in shares.items():
            assert one['value'] == pytest.approx(true[term]['share'], rel=0.05, abs=0.02), term


def test_delays_are_those_that_were_put_in():
    """Pure delays of 40 and 80 ms; the estimator takes no part in this truth."""
    chain = rates.RateChain(**SHAPED, processing_s=0.04, transport_s=0.08)
    found, true, _, windows = evaluated(chain)
    assert true['delays'] == pytest.approx((0.04, 0.08), abs=2e-4)
    assert found['latency_command_s']['value'] == pytest.approx(0.04, abs=1e-3)
    assert found['latency_response_s']['value'] == pytest.approx(0.08, abs=1e-3)
    # With its delays taken out nothing is left but what sampling at 100 Hz costs.
    assert found['tracking_error_compensated_rms_norm_s']['value'] < 0.002
    assert found['bandwidth_hz']['status'] == 'unobservable'
    assert not any(name.startswith('joint_error') for name in windows[-1].metrics)


def test_positions_are_not_configured():
    """Where the tool should be follows from no velocity; the reason says so."""
    found, _, summary, windows = evaluated(CASES['all, twist'])
    names = ['workspace_overlap', *(f'orientation_error_{one}_rad' for one in ('rms', 'static'))]
    names += [f'{start}_{part}_norm' for start in (
        'discrepancy', *(f'budget_{term}' for term in TERMS))
        for part in ('rms', 'static', 'varying')]
    names += [f'tracking_error_{which}{part}_{unit}' for which in ('', 'compensated_')
              for part in ('rms', 'p95', 'max') for unit in ('norm', 'm')]
    for name in names:
        assert found[name]['status'] == 'not_configured', name
        assert found[name]['reason'].startswith('a rate mapping commands velocities'), name
    assert not any(name.endswith('_norm') for name in windows[-1].metrics)
    # Nothing depends on where the first engagement began.
    assert summary['notes'] == []


def test_without_a_command_topic_there_are_three_terms():
    """No command topic: a = 0, b = input -> robot, two terms not configured."""
    found, true, _, _ = evaluated(NO_COMMAND)
    for term, part, metric, expected in rows(found, true):
        assert metric['value'] == pytest.approx(expected, rel=0.05, abs=0.002), (term, part)
    for term in ('processing_delay', 'command'):
        for end in ('rms_norm_s', 'share'):
            metric = found[f'budget_{term}_{end}']
            assert metric['status'] == 'not_configured'
            assert 'command.topic' in metric['reason']
    shares = [found[f'budget_{term}_share']['value']
              for term in ('mapping', 'response_delay', 'residual')]
    assert sum(shares) == pytest.approx(1.0, abs=1e-9)


def test_positions_that_are_held_tell_no_velocity():
    """They step every 50 ms: their derivative would be a row of spikes, not a velocity."""
    chain = dataclasses.replace(CASES['all, twist'], command='joints')
    motion = rates.simulate(chain, inputs(chain), 30.0)
    made = rates.messages(chain, motion).messages()
    seen = itertools.count()
    kept = [one for one in made if one[1] != '/command' or next(seen) % 5 == 0]
    target = syn.evaluator({**parameters(chain), 'arms.right.command.hold': True})
    syn.feed(target, kept)
    found = syn.metrics(syn.closed(target))
    for name in ('budget_command_rms_norm_s', 'budget_processing_delay_share'):
        assert found[name]['status'] == 'not_configured'
        assert found[name]['reason'] == ('/command gives no tool velocity, since positions that '
                                         'are held (command.hold) only step')
    total = sum(rates.truth(motion)['delays'])
    assert found['latency_s']['value'] == pytest.approx(total, abs=0.005)
    assert found['budget_residual_rms_norm_s']['value'] < 0.02


def main():
    """Print found and true values of every case."""
    print(f'{"case":22} {"term":18} {"part":8} {"found":>9} {"truth":>9} {"off":>9}')
    for name, chain in {**CASES, 'no command': NO_COMMAND}.items():
        found, true, summary, _ = evaluated(chain)
        for term, part, metric, expected in (*rows(found, true), *(
                (which, 's', *pair) for which, *pair in latencies(found, true))):
            value = metric['value']
            shown = metric['status'] if value is None else f'{value:9.4f}'
            off = '' if value is None else f'{value - expected:+9.4f}'
            print(f'{name:22} {term:18} {part:8} {shown:>9} {expected:9.4f} {off:>9}')
        assert summary['problems'] == []


if __name__ == '__main__':
    main()
