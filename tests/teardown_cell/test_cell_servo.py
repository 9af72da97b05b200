# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The servo against the closed forms of the second-order system (control textbooks)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.teardown_cell.plan import CellTiming
from teleop_eval.teardown_cell.servo import Servo

WN = 2.0 * math.pi * 2.0


def sine_response(zeta, frequency_hz, *, wn=WN, step_s=1e-3):
    """Return the complex gain at a frequency, from a run in steady state."""
    servo = Servo([0.0], zeta=zeta, natural_frequency_rad_s=wn, step_s=step_s)
    per_cycle = 1.0 / frequency_hz / step_s
    cycles = math.ceil(6.0 * frequency_hz) + 4
    n = round(cycles * per_cycle)
    t = np.arange(1, n + 1) * step_s
    u = np.sin(2.0 * np.pi * frequency_hz * t)
    y = np.array([servo.step([value])[0] for value in u])
    # Whole cycles at the end, so that the projection is exact.
    last = slice(n - round(2 * per_cycle), n)
    carrier = np.exp(-2j * np.pi * frequency_hz * t[last])
    return np.sum(y[last] * carrier) / np.sum(u[last] * carrier)


# Columns: zeta, w_3dB/wn = sqrt(1 - 2z^2 + sqrt(4z^4 - 4z^2 + 2)).
@pytest.mark.parametrize(('zeta', 'ratio'), [
    (0.5, 1.272020), (0.7, 1.010049), (1.0 / math.sqrt(2.0), 1.0), (1.0, 0.643594)])
def test_bandwidth(zeta, ratio):
    gain = abs(sine_response(zeta, ratio * WN / (2.0 * math.pi)))
    assert_allclose(gain, 1.0 / math.sqrt(2.0), rtol=1e-3)


# Lag 2 zeta/wn at low frequency, wn = 2 pi 2 rad/s.
@pytest.mark.parametrize(('zeta', 'lag_ms'), [
    (0.5, 79.577472), (0.7, 111.408460), (1.0 / math.sqrt(2.0), 112.539540), (1.0, 159.154943)])
def test_lag_behind_a_ramp(zeta, lag_ms):
    servo = Servo([0.0], zeta=zeta, natural_frequency_rad_s=WN, step_s=2e-3)
    speed, n = 0.3, 3000
    for index in range(1, n + 1):
        servo.step([speed * index * 2e-3])
    assert_allclose((speed * n * 2e-3 - servo.position[0]) / speed, lag_ms * 1e-3, rtol=1e-7)


def test_resonance_peak():
    zeta = 0.5
    peak_hz = WN / (2.0 * math.pi) * math.sqrt(1.0 - 2.0 * zeta**2)
    assert_allclose(abs(sine_response(zeta, peak_hz)), 1.154701, rtol=1e-3)


# exp(-pi z/sqrt(1-z^2)).
@pytest.mark.parametrize(('zeta', 'overshoot'), [(0.5, 0.163034), (0.7, 0.045988)])
def test_step_overshoot(zeta, overshoot):
    servo = Servo([0.0], zeta=zeta, natural_frequency_rad_s=WN, step_s=1e-3)
    servo.set_point = np.array([1.0])
    peak = max(servo.step([1.0])[0] for _ in range(1500))
    assert_allclose(peak - 1.0, overshoot, atol=1e-5)


@pytest.mark.parametrize(('zeta', 'gain', 'degrees'), [
    (0.5, 1.109400, -33.690068), (1.0, 0.8, -53.130102)])
def test_gain_and_phase_at_1_hz(zeta, gain, degrees):
    response = sine_response(zeta, 1.0)
    assert_allclose(abs(response), gain, rtol=1e-4)
    assert_allclose(np.degrees(np.angle(response)), degrees, atol=1e-2)


def test_the_result_does_not_depend_on_the_step():
    """A ramp cut into steps of different lengths ends in the same state."""
    ends = []
    for steps in (1, 10, 1000):
        servo = Servo([0.2, -0.4], zeta=0.9, natural_frequency_rad_s=25.0, step_s=0.4 / steps)
        for index in range(1, steps + 1):
            servo.step(np.array([0.2, -0.4]) + np.array([0.5, 0.1]) * index / steps)
        ends.append(np.concatenate([servo.position, servo.velocity]))
    assert_allclose(ends[1], ends[0], rtol=1e-9)
    assert_allclose(ends[2], ends[0], rtol=1e-9)


def test_the_cell_states_its_own_lag():
    timing = CellTiming()
    assert_allclose(timing.servo_lag_s, 2.0 * 0.9 / 25.0)
    assert_allclose(timing.sum_s, 0.008 + 0.060 + 0.072)
