# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated operator: minimum-jerk reaches, an arm of human proportions, seeded noise."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.polynomial import polynomial
from numpy.testing import assert_allclose, assert_array_equal

from teleop_eval.core import rotations
from teleop_eval.teardown_cell import operator_motion
from teleop_eval.teardown_cell.human_arm import SHOULDER_M, HumanArm
from teleop_eval.teardown_cell.operator_motion import OperatorMotion, minimum_jerk

X = np.linspace(0.0, 1.0, 6)


@pytest.fixture(scope='module')
def way():
    """Return the reach as a polynomial: five intervals determine a quintic."""
    return polynomial.polyfit(X, minimum_jerk(X), 5)


# Constants of the minimum-jerk reach of distance 1 in time 1: Flash and Hogan 1985,
# J. Neuroscience 5(7), 1688-1703; the integrals follow from the polynomial.
def test_peak_speed(way):
    speed = polynomial.polyder(way)
    assert_allclose(polynomial.polyval(0.5, speed), 1.875, rtol=1e-9)
    assert_allclose(polynomial.polyval(np.linspace(0, 1, 101), speed).max(), 1.875, rtol=1e-9)


def test_peak_acceleration(way):
    at = (3.0 - np.sqrt(3.0)) / 6.0
    assert_allclose(polynomial.polyval(at, polynomial.polyder(way, 2)), 5.773503, rtol=1e-6)


def test_jerk_at_start_middle_end(way):
    jerk = polynomial.polyval(np.array([0.0, 0.5, 1.0]), polynomial.polyder(way, 3))
    assert_allclose(jerk, [60.0, -30.0, 60.0], rtol=1e-8)


def test_integrals(way):
    def integral(of):
        return polynomial.polyval(1.0, polynomial.polyint(polynomial.polymul(of, of)))
    assert_allclose(integral(polynomial.polyder(way, 3)), 720.0, rtol=1e-8)
    assert_allclose(integral(polynomial.polyder(way, 2)), 120.0 / 7.0, rtol=1e-8)
    assert_allclose(1.0 / 1.875, 8.0 / 15.0)


def test_the_hand_moves_by_this_law():
    motion = OperatorMotion(5, 20.0, noise=False)
    duration = motion._length[0]
    t = np.linspace(0.0, duration, 20001)
    speed = np.linalg.norm(np.gradient(motion.at(t).hand, t, axis=0), axis=1)
    distance = np.linalg.norm(motion.at([duration]).hand - motion.at([0.0]).hand)
    assert_allclose(speed.max(), 1.875 * distance / duration, rtol=1e-6)
    assert_allclose(speed[10000], speed.max(), rtol=1e-6)
    pause = motion.at(np.linspace(duration, duration + 0.19, 5)).hand
    assert_allclose(pause, np.repeat(pause[:1], 5, axis=0), atol=1e-12)


def test_reaches_and_pauses_are_as_long_as_promised():
    motion = OperatorMotion(3, 300.0, noise=False)
    pauses = np.diff(motion._begin) - motion._length[:-1]
    assert len(motion._length) > 150
    assert 0.7 <= motion._length.min() and motion._length.max() <= 1.4
    assert 0.2 <= pauses.min() and pauses.max() <= 0.6
    assert np.all(np.diff(motion._order) != 0)
    assert set(motion._order) == set(range(6))


def test_joints_put_the_hand_where_it_is():
    motion = OperatorMotion(11, 30.0, noise=False)
    state = motion.at(np.arange(0.0, 30.0, 0.05))
    tip, hand = motion.arm.forward(state.joints)
    assert_allclose(tip, state.hand, atol=1e-12)
    assert_allclose(hand, rotations.to_matrix(state.orientation), atol=1e-12)
    # Continuous: no joint flips between two samples.
    assert np.abs(np.diff(state.joints, axis=0)).max() < 0.3


def test_proportions_of_the_arm():
    """Segments 0.186 H, 0.146 H, 0.108 H: Winter after Drillis and Contini (second-hand)."""
    arm = HumanArm(stature_m=1.75)
    assert_allclose([arm.upper_arm_m, arm.forearm_m, arm.hand_m], [0.3255, 0.2555, 0.189])
    assert_allclose(arm.length_m, 0.77)
    tip, _ = arm.forward(np.zeros((1, 7)))
    assert_allclose(tip[0] - SHOULDER_M, [0.77, 0.0, 0.0], atol=1e-12)


def test_out_of_reach_is_an_error():
    with pytest.raises(ValueError, match='out of the reach'):
        HumanArm().inverse(SHOULDER_M + np.array([[0.9, 0.0, 0.0]]), np.eye(3)[None])


def test_noise_has_the_stated_size_and_band():
    t = np.arange(0.0, 200.0, 0.01)
    quiet = OperatorMotion(2, 1.0, noise=False).at(t)
    noisy = OperatorMotion(2, 1.0)
    wobble = operator_motion.MOTOR_NOISE_M * noisy._wobble(t)[:, :3]
    assert_allclose(wobble.std(axis=0), 1.5e-3, rtol=0.05)
    spectrum = np.abs(np.fft.rfft(wobble * np.hanning(len(t))[:, None], axis=0)) ** 2
    frequency = np.fft.rfftfreq(len(t), 0.01)
    inside = (frequency > 0.4) & (frequency < 6.1)
    assert spectrum[inside].sum() / spectrum.sum() > 0.999
    tracker = noisy.at(t).hand - quiet.hand - wobble
    assert_allclose(tracker.std(axis=0), 0.3e-3, rtol=0.05)


def test_the_seed_fixes_everything():
    t = np.arange(0.0, 5.0, 0.01)
    first, second = OperatorMotion(4, 10.0).at(t), OperatorMotion(4, 10.0).at(t)
    assert_array_equal(first.hand, second.hand)
    assert_array_equal(first.joints, second.joints)
    assert np.abs(OperatorMotion(5, 10.0).at(t).hand - first.hand).max() > 0.05
