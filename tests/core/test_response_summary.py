# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Each phase delay is compared with the correlation delay of the same two sides."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from teleop_eval.core.frequency_response import FrequencyResponse
from teleop_eval.core.metric import Metric, missing
from teleop_eval.core.response_summary import response_metrics

RATE_HZ = 100.0


def delayed_by(cells):
    """Return the response of a motion to itself some cells earlier: a pure delay."""
    x = np.cumsum(np.random.default_rng(4).standard_normal((12000, 3)), axis=0)
    found = FrequencyResponse(RATE_HZ)
    count = len(x) - cells
    found.add(x[cells:], x[:count], np.ones(count, dtype=bool), np.zeros(count, dtype=np.int64),
              shift_cells=cells)
    return found


def latency(value):
    return Metric(value, 's', (value - 1e-4, value + 1e-4), 30, 3000)


@pytest.fixture(scope='module')
def accumulator():
    """Return what has seen 100 ms from the ideal command and 60 ms from the command on."""
    return SimpleNamespace(responses={
        'latency_s': delayed_by(10), 'latency_response_s': delayed_by(6)})


@pytest.mark.parametrize(('whole', 'response', 'doubted'), [
    (0.1, 0.06, ()), (0.06, 0.06, ('phase_delay_s',)),
    (0.1, 0.1, ('phase_delay_response_s',)),
    (0.06, 0.1, ('phase_delay_s', 'phase_delay_response_s'))])
def test_only_the_matching_latency_can_disagree(accumulator, whole, response, doubted):
    found = response_metrics(accumulator, {
        'latency_s': latency(whole), 'latency_response_s': latency(response)}, no_ideal='')
    for name, value, other in (('phase_delay_s', 0.1, whole),
                               ('phase_delay_response_s', 0.06, response)):
        assert found[name].value == pytest.approx(value, abs=1e-4)
        assert ('the slope of the phase tells' in found[name].reason) == (name in doubted)
        if name in doubted:
            assert f'the correlation {other * 1e3:.1f} ms' in found[name].reason


def test_a_response_is_configured_with_its_own_latency(accumulator):
    why = missing('not_configured', 's', 'command.topic is not configured')
    found = response_metrics(
        accumulator, {'latency_s': latency(0.1), 'latency_response_s': why}, no_ideal='')
    assert found['phase_delay_s'].status == 'ok'
    assert found['phase_delay_response_s'].reason == why.reason
    found = response_metrics(
        accumulator, {'latency_s': latency(0.1), 'latency_response_s': latency(0.06)},
        no_ideal='no model')
    assert found['phase_delay_s'].reason == found['bandwidth_hz'].reason == 'no model'
    assert found['phase_delay_response_s'].status == 'ok'
