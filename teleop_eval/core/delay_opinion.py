# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What it means when the slope of the phase and the correlation tell different delays."""

from __future__ import annotations

import math

from teleop_eval.core.metric import Metric

_T95 = 1.96
# Standard error of a median over that of a mean, for normally distributed values.
_MEDIAN = math.sqrt(math.pi / 2.0)
# Nobody acts on less.
_MIN_DIFFERENCE_S = 0.002


def second_opinion(phase: Metric, latency: Metric) -> str:
    """
    Return a sentence if phase delay and correlation latency disagree, '' if not.

    They disagree if they differ by more than 2 ms and their joint uncertainty: 95 % of the
    scatter of both, and what the segments of the phase cannot resolve.

    A pure delay is the same for slow and fast motion. A servo's lag is not: slow motion is
    late by delay + 2 zeta / omega_n (first order: delay + tau), fast motion by less if the
    servo is well damped, by more near the resonance of one that is not. Correlation of
    velocities weights the band by the power of the velocity, the phase's slope by frequency
    and coherence: with a lag they differ, and neither is wrong.

    Parameters
    ----------
    phase
        `phase_delay_s` of `frequency_metrics.metrics`.
    latency
        `latency_s`, or another delay by correlation, of the same pair of signals.

    """
    if phase.value is None or latency.value is None:
        return ''
    difference = phase.value - latency.value
    joint = _T95 * math.hypot(_number(phase, 'standard_error_s'), _latency_error(latency))
    joint = math.hypot(joint, _number(phase, 'resolution_s'))
    if abs(difference) <= max(joint, _MIN_DIFFERENCE_S):
        return ''
    return (f'the slope of the phase tells {_ms(phase.value)}, the correlation '
            f'{_ms(latency.value)} (joint uncertainty {_ms(joint)}): {_meaning(phase)}')


def _meaning(phase: Metric) -> str:
    change = _number(phase, 'change_s')
    surely = max(_T95 * _number(phase, 'change_standard_error_s'),
                 2.0 * _number(phase, 'resolution_s'), _MIN_DIFFERENCE_S)
    slow, fast = _number(phase, 'slow_s'), _number(phase, 'fast_s')
    where = (f'motion up to {_number(phase, "slow_up_to_hz"):.2g} Hz is late by {_ms(slow)}, '
             f'from {_number(phase, "fast_from_hz"):.2g} Hz on by {_ms(fast)}')
    if change < -surely:
        return (f'{where}, so part of it is a lag (servo or filter) and not a pure delay; the '
                'two weight slow and fast motion differently, and for slow motion the lag '
                'counts in full')
    if change > surely:
        return (f'{where}, so the servo is little damped and falls behind near its resonance; '
                'the two weight slow and fast motion differently')
    return ('slow and fast motion are equally late, so it is no lag; the delay changed during '
            'the run, or the two saw different parts of it')


def _latency_error(latency: Metric) -> float:
    """Return the standard error of the median over windows, 0 where nothing is known."""
    if latency.ci95 is not None:
        return (latency.ci95[1] - latency.ci95[0]) / (2.0 * _T95)
    single = max(_number(latency, 'window_standard_error_s'), _number(latency, 'spread_s'))
    return _MEDIAN * single / math.sqrt(max(latency.n, 1))


def _number(metric: Metric, name: str) -> float:
    value = metric.details.get(name)
    return float(value) if isinstance(value, int | float) and math.isfinite(value) else 0.0


def _ms(seconds: float) -> str:
    return f'{seconds * 1e3:.1f} ms'
