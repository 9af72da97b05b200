# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The truth against an independent correlation of the same noise-free run."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.interpolate import CubicSpline

from teleop_eval.resources import config_file
from teleop_eval.teardown_cell.arm import arm_chain
from teleop_eval.teardown_cell.mappings import Mirror
from teleop_eval.teardown_cell.plan import MIRROR, REACH, Plan
from teleop_eval.teardown_cell.truth import simulate, truth_document

PLAN = Plan(seconds=24.0, seed=7)


@pytest.fixture(scope='module')
def chain():
    return arm_chain(config_file('teardown_arm.urdf').read_text('utf-8'))


@pytest.fixture(scope='module')
def document(chain):
    return truth_document(chain, PLAN, window_s=6.0)


def test_the_parts_and_their_sum(document):
    parts = [document[key] for key in (
        'processing_delay_s', 'transport_delay_s', 'servo_lag_s')]
    assert_allclose(parts, [0.008, 0.060, 0.072])
    assert_allclose(document['sum_s'], sum(parts))


@pytest.mark.parametrize('mapping', [MIRROR, REACH])
def test_the_correlation_delay_lies_near_the_sum(document, mapping):
    """Human reaches end near 2 Hz, where the servo's group delay has hardly changed yet."""
    of_mapping = document['mappings'][mapping]
    delay = of_mapping['noise_free_correlation_delay_s']
    assert_allclose(delay, document['sum_s'], atol=0.003)
    assert of_mapping['metrics']['latency_s'] == delay
    split = (of_mapping['metrics']['latency_command_s']
             + of_mapping['metrics']['latency_response_s'])
    assert_allclose(split, delay, atol=0.001)


def test_a_plain_cross_correlation_finds_the_same(chain, document):
    """Independent of the estimator: splines at 4 kHz, unfiltered velocity, argmax."""
    run = simulate(chain, PLAN, noise=False)
    begin, end = PLAN.engaged_span(MIRROR)
    fine = np.arange(begin + 1.2, end - 0.5, 0.00025)
    ideal = CubicSpline(run.times, Mirror().joints(run.operator.joints)).derivative()
    robot = CubicSpline(run.times, run.joints).derivative()(fine)
    lags = np.arange(0.12, 0.16, 0.00025)
    correlation = [np.sum(ideal(fine - lag) * robot)
                   / np.linalg.norm(ideal(fine - lag)) for lag in lags]
    found = lags[int(np.argmax(correlation))]
    assert_allclose(found, document['mappings'][MIRROR]['noise_free_correlation_delay_s'],
                    atol=0.002)


def test_nothing_saturates_in_the_run_that_sets_the_truth(chain):
    """A limited set point would add a delay that none of the stated parts holds."""
    run = simulate(chain, PLAN, noise=True)
    speed = np.abs(np.diff(run.commands, axis=0)) * PLAN.timing.operator_rate_hz
    assert np.all(speed < chain.velocity_limits)


def test_the_truth_is_the_same_every_time(chain, document):
    assert truth_document(chain, PLAN, window_s=6.0) == document


def test_too_short_a_window_gives_no_number(chain):
    found = truth_document(chain, Plan(seconds=16.0, seed=7), window_s=2.0)
    assert found['mappings'][MIRROR]['noise_free_correlation_delay_s'] is None
    assert found['mappings'][MIRROR]['metrics']['latency_command_s'] == 0.008
