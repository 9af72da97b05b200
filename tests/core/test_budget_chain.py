# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The error budget of whole chains against the decomposition of the same chains without noise.

`python tests/core/test_budget_chain.py` prints the table of both.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent))

import synthetic_chain as chains  # noqa: E402
import synthetic_session as syn  # noqa: E402

SECONDS = 62.0
CLUTCH = ((1.0, 21.5), (23.0, 42.3), (44.1, 63.0))

CASES = {
    'link ratio': chains.Chain(scale=(0.48,) * 3),
    'over-scale': chains.Chain(scale=(1.3,) * 3),
    'scale per axis': chains.Chain(scale=(1.2, 1.0, 0.7)),
    'processing delay': chains.Chain(processing_s=0.04),
    'filter': chains.Chain(filter_s=0.08),
    'command offset': chains.Chain(command_offset=(0.0, 0.03, -0.02)),
    'transport delay': chains.Chain(transport_s=0.1),
    'sluggish servo': chains.Chain(servo=(12.0, 0.9)),
    'noise': chains.Chain(transport_s=0.05, noise=0.001),
    'clutch': chains.Chain(relative=True, scale=(0.8,) * 3, transport_s=0.08, clutch=CLUTCH),
    'orientation offset': chains.Chain(
        scale=(0.9,) * 3, transport_s=0.07, turn_offset=(0.1, -0.2, 0.05)),
    'all': chains.Chain(scale=(0.9, 0.8, 0.7), offset=(0.05, 0.0, 0.02), processing_s=0.02,
                        filter_s=0.05, command_offset=(0.0, 0.02, 0.0), transport_s=0.06,
                        servo=(18.0, 0.7), noise=0.001),
    'all with clutch': chains.Chain(
        scale=(0.9, 0.8, 0.7), relative=True, processing_s=0.02, filter_s=0.05,
        transport_s=0.06, servo=(18.0, 0.7), noise=0.001, clutch=CLUTCH),
}


def parameters(chain: chains.Chain, command: bool = True) -> dict:
    """Return flat parameters whose mapping model is what the chain is meant to do."""
    more = {'active_mapping__fixed': 'direct',
            'mappings__direct__kind': 'relative' if chain.relative else 'task_space'}
    if chain.scale == (0.48,) * 3:
        # The arms differ and the stack does not care: 0.6 m / 1.25 m.
        more['mappings__direct__scaling'] = 'metric'
    elif len(set(chain.scale)) == 1:
        more['mappings__direct__scale'] = chain.scale[0]
    else:
        more['mappings__direct__scale_xyz'] = list(chain.scale)
    if any(chain.offset):
        more['mappings__direct__robot_center_m'] = (
            syn.SHOULDER_M + syn.REACH_M * np.array(chain.offset)).tolist()
    if command:
        more['command__topic'] = '/command'
    if chain.turn_offset is not None:
        more['mappings__direct__hand_to_tool_xyzw'] = [0.0, 0.0, 0.0, 1.0]
    if chain.clutch:
        more['engaged__topic'] = '/clutch'
    return syn.arm_parameters(**more)


def evaluated(chain: chains.Chain, *, command: bool = True):
    """Return the metrics found, the truth, and the summary."""
    motion = chains.simulate(chain, syn.wander(), SECONDS, noisy=True)
    target = syn.evaluator(parameters(chain, command))
    syn.feed(target, chains.messages(chain, motion, command=command).messages())
    summary = syn.closed(target)
    clean = chains.simulate(chain, syn.wander(), SECONDS) if chain.noise else motion
    return syn.metrics(summary), chains.truth(clean, command=command), summary


def rows(name: str, found: dict, true: dict):
    """Yield (term, part, found, true) of every part of every term."""
    del name
    for term in ('discrepancy', *chains.TERMS):
        if term not in true:
            continue
        key = term if term == 'discrepancy' else f'budget_{term}'
        for part in ('rms', 'static', 'varying'):
            yield term, part, found[f'{key}_{part}_norm'], true[term][part]


@pytest.mark.parametrize('name', CASES)
def test_terms_are_those_of_the_noise_free_chain(name):
    """Each term within 5 % or 0.002 arm lengths of the truth; shares sum to 1."""
    found, true, summary = evaluated(CASES[name])
    assert summary['problems'] == []
    for term, part, metric, expected in rows(name, found, true):
        assert metric['status'] == 'ok', (term, part, metric)
        assert metric['value'] == pytest.approx(expected, rel=0.05, abs=0.002), (term, part)
    if true['discrepancy']['rms'] > 0.006:
        shares = {term: found[f'budget_{term}_share'] for term in chains.TERMS}
        assert sum(one['value'] for one in shares.values()) == pytest.approx(1.0, abs=1e-9)
        for term, one in shares.items():
            assert one['value'] == pytest.approx(true[term]['share'], rel=0.05, abs=0.02), term


def test_an_orientation_offset_is_the_static_part():
    """Its angle is |(0.1, -0.2, 0.05)| = 0.22913 rad; nothing of it is in the budget."""
    found, true, _ = evaluated(CASES['orientation offset'])
    static = found['orientation_error_compensated_static_rad']
    assert static['value'] == pytest.approx(0.22913, abs=1e-3)
    assert found['orientation_error_compensated_varying_rad']['value'] < 2e-3
    assert found['budget_residual_rms_norm']['value'] < 1e-3
    assert true['residual']['rms'] < 1e-3


def test_without_a_command_topic_there_are_three_terms():
    """No command topic: a = 0, b = operator -> robot, two terms not configured."""
    chain = chains.Chain(scale=(0.8,) * 3, processing_s=0.03, transport_s=0.07)
    found, true, _ = evaluated(chain, command=False)
    assert true['delays'][1] == pytest.approx(0.1, abs=1e-3)
    for term, part, metric, expected in rows('', found, true):
        assert metric['value'] == pytest.approx(expected, rel=0.05, abs=0.002), (term, part)
    for term in ('processing_delay', 'command'):
        for part in ('rms_norm', 'share'):
            metric = found[f'budget_{term}_{part}']
            assert metric['status'] == 'not_configured'
            assert 'command.topic' in metric['reason']
    shares = [found[f'budget_{term}_share']['value']
              for term in ('mapping', 'response_delay', 'residual')]
    assert sum(shares) == pytest.approx(1.0, abs=1e-9)


def test_the_budget_is_unobservable_without_a_delay():
    """Periodic motion tells no delay, so there is no budget, and the reason says so."""
    def rhythm(times):
        wave = 0.15 * np.sin(2.0 * np.pi * np.asarray(times) / 0.8)
        return np.column_stack([0.5 + 0 * wave, wave, 0.1 + 0 * wave])

    chain = chains.Chain(transport_s=0.1)
    motion = chains.simulate(chain, rhythm, 30.0)
    target = syn.evaluator(parameters(chain))
    windows = syn.feed(target, chains.messages(chain, motion).messages())
    found = syn.metrics(syn.closed(target))
    for name in ('budget_residual_rms_norm', 'budget_mapping_share', 'discrepancy_rms_norm'):
        assert found[name]['status'] == 'unobservable', (name, found[name])
        assert 'no delay' in found[name]['reason']
    assert windows[-1].metrics['budget_response_delay_rms_norm'].status == 'unobservable'


def main():
    """Print found and true values of every case."""
    print(f'{"case":18} {"term":18} {"part":8} {"found":>9} {"truth":>9} {"off":>9}')
    for name, chain in CASES.items():
        found, true, _ = evaluated(chain)
        for term, part, metric, expected in rows(name, found, true):
            value = metric['value']
            shown = metric['status'] if value is None else f'{value:9.4f}'
            off = '' if value is None else f'{value - expected:+9.4f}'
            print(f'{name:18} {term:18} {part:8} {shown:>9} {expected:9.4f} {off:>9}')
        a, b = true['delays']
        print(f'{name:18} delays: command {a * 1e3:.1f} ms, response {b * 1e3:.1f} ms (truth)')


if __name__ == '__main__':
    main()
