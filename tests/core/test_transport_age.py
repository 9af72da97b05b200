# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Age of messages on arrival: values, clocks that are not synchronised, bounded memory."""

from __future__ import annotations

import numpy as np
import pytest
import synthetic_session as syn

from teleop_eval.core.transport_age import MOST_PENDING, TransportAge


def ages(values, *, rate=100.0, window=200):
    """Return the statistics of ages (n,) s, closed every `window` messages."""
    found = TransportAge()
    for k, age in enumerate(values):
        receive_ns = syn.ns(k / rate)
        found.add(receive_ns, receive_ns - int(round(age * 1e9)))
        if k % window == window - 1:
            found.close_window(receive_ns)
    found.close_window(syn.ns(len(values) / rate))
    return found


@pytest.mark.parametrize('common', [0.0, 46.0, -3.0])
def test_values_are_those_of_numpy(common):
    """A clock that is off by a minute costs no resolution."""
    values = common + 0.004 + np.random.default_rng(1).gamma(2.0, 0.003, 20_000)
    found = ages(values).metrics(simulated_time=False)
    assert found['transport_age_min_s'].value == pytest.approx(values.min(), abs=1e-9)
    assert found['transport_age_s'].value == pytest.approx(np.median(values), abs=5e-5)
    low, high = np.percentile(values, [5.0, 95.0])
    assert found['transport_age_jitter_s'].value == pytest.approx(high - low, abs=1e-4)
    assert found['transport_age_s'].samples == 20_000
    assert found['transport_age_s'].n == 100


def test_negative_age_is_called_unsynchronised():
    found = ages([-0.020] * 300 + [0.001] * 300)
    assert 'below zero' in found.warning() and '-20.0 ms' in found.warning()
    assert ages([0.001] * 600).warning() == ''


@pytest.mark.parametrize('ppm', [30.0, -30.0])
def test_drifting_clock_is_called_so(ppm):
    """30 parts per million make 18 ms in 600 s."""
    n = 60_000
    rng = np.random.default_rng(2)
    values = 0.05 + ppm * 1e-6 * np.arange(n) / 100.0 + rng.gamma(2.0, 0.001, n)
    found = ages(values)
    assert found.drift_s() == pytest.approx(ppm * 1e-6 * 600.0, rel=0.05)
    assert 'drifts' in found.warning()


def test_steady_clock_with_jitter_does_not_drift():
    rng = np.random.default_rng(3)
    for _ in range(20):
        assert ages(0.05 + rng.gamma(2.0, 0.01, 6000)).drift_s() is None


def test_zero_stamps_have_no_age():
    found = TransportAge()
    for k in range(10):
        found.add(syn.ns(k), 0)
    found.close_window(syn.ns(10))
    metric = found.metrics(simulated_time=False)['transport_age_s']
    assert metric.status == 'unobservable' and 'zero' in metric.reason


def test_pending_messages_are_bounded_where_no_window_closes():
    found = TransportAge()
    for k in range(MOST_PENDING + 10):
        found.add(k + 10 ** 9, k + 1)
    assert len(found._pending) == 10
    found.close_window(2 * 10 ** 9)
    assert found.metrics(simulated_time=False)['transport_age_s'].samples == MOST_PENDING + 10


def run(made, **parameters):
    target = syn.evaluator(syn.arm_parameters(**syn.TASK, **parameters))
    windows = syn.feed(target, made.messages())
    return syn.closed(target), target, windows


def test_evaluator_warns_on_every_stamp_based_latency():
    """Stamps 10 ms in the future: the latency is given, with the warning."""
    summary, target, _ = run(syn.session(26.0, motion=syn.wander(), delay=0.1, ahead=0.010))
    latency = syn.metrics(summary)['latency_s']
    assert latency['status'] == 'ok'
    assert 'not synchronised' in latency['reason'] and 'hand' in latency['reason']
    compensated = syn.metrics(summary)['tracking_error_compensated_rms_norm']
    assert 'not synchronised' in compensated['reason']
    assert 'not synchronised' not in syn.metrics(summary)['tracking_error_rms_norm']['reason']
    line = target.diagnostics(syn.ns(26.0))[0]
    assert line.level == 1 and 'not synchronised' in line.message
    metrics = summary['arms']['right']['inputs']['hand']['metrics']
    assert metrics['transport_age_min_s']['value'] == pytest.approx(-0.008, abs=1e-6)


def test_short_session_has_ages_too():
    """Also where no window ever closed."""
    made = syn.Feed().poses('/hand', [0.0, 0.1, 0.2], np.zeros((3, 3)), transport=0.005)
    made.joints('/joints', [0.05], np.zeros((1, 6)), transport=0.007)
    summary, _, _ = run(made)
    inputs = summary['arms']['right']['inputs']
    assert inputs['hand']['metrics']['transport_age_s']['value'] == pytest.approx(0.005)
    assert inputs['robot_joints']['metrics']['transport_age_s']['value'] == pytest.approx(0.007)


def test_plan_has_no_age():
    """A trajectory is stamped with the time at which it starts."""
    made = syn.session(12.0, motion=syn.wander())
    for k in range(20):
        made.plan(0.5 * k, '/command', 0.5 * k + 0.2, [0.1, 0.5], np.zeros((2, 6)))
    summary, _, _ = run(made, command__topic='/command')
    metrics = summary['arms']['right']['inputs']['command']['metrics']
    assert metrics['transport_age_s']['status'] == 'unobservable'
    assert not any('synchronised' in text for text in summary['problems'])
