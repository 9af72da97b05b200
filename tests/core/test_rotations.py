# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Quaternion functions against closed forms, scipy and transforms3d."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation, Slerp

from teleop_eval.core import rotations

IDENTITY = np.array([0.0, 0.0, 0.0, 1.0])
X90 = np.array([math.sqrt(0.5), 0.0, 0.0, math.sqrt(0.5)])
Y90 = np.array([0.0, math.sqrt(0.5), 0.0, math.sqrt(0.5)])


def random_rotations(count: int, seed: int) -> Rotation:
    return Rotation.from_quat(np.random.default_rng(seed).normal(size=(count, 4)))


def vectors(limit: float) -> st.SearchStrategy[np.ndarray]:
    number = st.floats(-limit, limit, allow_nan=False)
    return st.tuples(number, number, number).map(np.array)


def same_rotation(a: np.ndarray, b: np.ndarray, tolerance: float = 1e-12) -> None:
    """Compare up to the sign that a rotation leaves free."""
    sign = np.where(np.sum(a * b, axis=-1, keepdims=True) < 0.0, -1.0, 1.0)
    assert_allclose(a, sign * b, atol=tolerance)


def test_angle_between_quarter_turns_about_x_and_y_is_120_degrees() -> None:
    # acos((tr(R1^T R2) - 1) / 2), trace 0.
    assert_allclose(rotations.angle_between(X90, Y90), math.radians(120.0), rtol=1e-12)


def test_frobenius_distance_of_the_same_pair_is_root_six() -> None:
    # |R1 - R2| = 2 sqrt(2) sin(angle / 2).
    difference = rotations.to_matrix(X90) - rotations.to_matrix(Y90)
    assert_allclose(np.linalg.norm(difference), math.sqrt(6.0), rtol=1e-12)


def test_roll_pitch_yaw_of_rep_103_composes_in_the_stated_order() -> None:
    # Fixed axes roll 10, pitch 20, yaw 30 deg; value agreed on by scipy and transforms3d.
    roll, pitch, yaw = (
        rotations.exp(np.radians(angle) * np.eye(3)[axis])
        for axis, angle in enumerate((10.0, 20.0, 30.0))
    )
    q = rotations.multiply(yaw, rotations.multiply(pitch, roll))
    assert_allclose(q, [0.03813458, 0.18930786, 0.23929834, 0.95154852], atol=1e-8)
    assert_allclose(q, Rotation.from_euler('xyz', [10, 20, 30], degrees=True).as_quat())


def test_component_order_is_x_y_z_w() -> None:
    assert_allclose(rotations.to_matrix(IDENTITY), np.eye(3))
    # A yaw of 90 deg written w, x, y, z and misread becomes 90 deg about x, 120 deg away.
    misread = np.array([math.sqrt(0.5), 0.0, 0.0, math.sqrt(0.5)])
    yaw = np.array([0.0, 0.0, math.sqrt(0.5), math.sqrt(0.5)])
    assert_allclose(rotations.log(misread), [math.pi / 2.0, 0.0, 0.0], atol=1e-12)
    assert_allclose(rotations.angle_between(misread, yaw), math.radians(120.0), rtol=1e-12)


def test_opposite_signs_are_the_same_rotation() -> None:
    q = random_rotations(50, 1).as_quat()
    assert_allclose(rotations.angle_between(q, -q), 0.0, atol=1e-15)
    assert_allclose(rotations.log(q), rotations.log(-q), atol=1e-15)


def test_conversions_and_products_agree_with_scipy() -> None:
    a, b = random_rotations(500, 2), random_rotations(500, 3)
    v = np.random.default_rng(4).normal(size=(500, 3))
    assert_allclose(rotations.to_matrix(a.as_quat()), a.as_matrix(), atol=1e-14)
    same_rotation(rotations.from_matrix(a.as_matrix()), a.as_quat())
    same_rotation(rotations.multiply(a.as_quat(), b.as_quat()), (a * b).as_quat())
    same_rotation(rotations.conjugate(a.as_quat()), a.inv().as_quat())
    assert_allclose(rotations.rotate(a.as_quat(), v), a.apply(v), atol=1e-13)
    assert_allclose(rotations.log(a.as_quat()), a.as_rotvec(), atol=1e-12)
    same_rotation(rotations.exp(a.as_rotvec()), a.as_quat())
    assert_allclose(
        rotations.angle_between(a.as_quat(), b.as_quat()), (a.inv() * b).magnitude(), atol=1e-12
    )


def test_conversions_agree_with_transforms3d() -> None:
    quaternions = pytest.importorskip(
        'transforms3d.quaternions', reason='transforms3d (test extra) is not installed'
    )
    a, b = random_rotations(50, 5).as_quat(), random_rotations(50, 6).as_quat()
    for p, q in zip(a, b, strict=True):
        p_wxyz, q_wxyz = np.roll(p, 1), np.roll(q, 1)
        assert_allclose(rotations.to_matrix(p), quaternions.quat2mat(p_wxyz), atol=1e-14)
        product = np.roll(quaternions.qmult(p_wxyz, q_wxyz), -1)
        assert_allclose(rotations.multiply(p, q), product, atol=1e-14)


@pytest.mark.parametrize('axis', [0, 1, 2])
def test_half_turns_survive_the_matrix(axis: int) -> None:
    # Shepperd's choice matters here: w is 0 and the trace -1.
    q = np.zeros(4)
    q[axis] = 1.0
    same_rotation(rotations.from_matrix(rotations.to_matrix(q)), q)


@given(vectors(3.0))
def test_log_undoes_exp_within_half_a_turn(v: np.ndarray) -> None:
    angle = np.linalg.norm(v)
    if angle > 3.14:
        v = v * (3.14 / angle)
    assert_allclose(rotations.log(rotations.exp(v)), v, rtol=1e-9, atol=1e-14)


@given(vectors(20.0))
def test_log_is_at_most_half_a_turn(v: np.ndarray) -> None:
    q = rotations.exp(v)
    short = rotations.log(q)
    assert np.linalg.norm(short) <= math.pi + 1e-12
    same_rotation(rotations.exp(short), q, 1e-9)


@pytest.mark.parametrize('angle', [1e-300, 1e-20, 1e-12, 1e-6, 9.99e-4, 1.001e-3, 1e-2])
def test_small_angles_keep_their_relative_precision(angle: float) -> None:
    v = angle * np.array([0.6, 0.0, -0.8])
    q = rotations.exp(v)
    assert_allclose(q[:3], math.sin(angle / 2.0) * np.array([0.6, 0.0, -0.8]), rtol=1e-14)
    assert_allclose(rotations.log(q), v, rtol=1e-14)
    if angle > 1e-100:  # its square still has to be a number
        assert_allclose(rotations.angle_between(IDENTITY, q), angle, rtol=1e-14)


def test_zero_rotation_has_zero_log_without_warning() -> None:
    with np.errstate(all='raise'):
        assert_allclose(rotations.log(IDENTITY), np.zeros(3))
        assert_allclose(rotations.exp(np.zeros(3)), IDENTITY)
        assert_allclose(rotations.slerp(IDENTITY, IDENTITY, 0.3), IDENTITY)


@pytest.mark.filterwarnings('ignore:invalid value')
def test_normalize_gives_nan_for_what_has_no_direction() -> None:
    q = rotations.normalize([[0, 0, 0, 0], [0, 0, 0, 2], [np.nan, 0, 0, 1], [np.inf, 0, 0, 1]])
    assert np.all(np.isnan(q[[0, 2, 3]]))
    assert_allclose(q[1], IDENTITY)


def test_slerp_agrees_with_scipy() -> None:
    ends = random_rotations(2, 7)
    fractions = np.linspace(0.0, 1.0, 41)
    expected = Slerp([0.0, 1.0], ends)(fractions).as_quat()
    a, b = ends.as_quat()
    same_rotation(rotations.slerp(a, b, fractions), expected)
    same_rotation(rotations.slerp(a, -b, fractions), expected)


@given(st.floats(0.0, 1.0), vectors(1.7), vectors(1.7))
def test_slerp_divides_the_angle_in_proportion(
    fraction: float, start: np.ndarray, turn: np.ndarray
) -> None:
    a = rotations.exp(start)
    b = rotations.multiply(a, rotations.exp(turn))
    middle = rotations.slerp(a, b, fraction)
    whole = rotations.angle_between(a, b)
    assert_allclose(rotations.angle_between(a, middle), fraction * whole, atol=1e-9)
    assert_allclose(rotations.angle_between(middle, b), (1.0 - fraction) * whole, atol=1e-9)


def test_slerp_pairs_rows_with_their_fractions() -> None:
    a = np.repeat(IDENTITY[None, :], 3, axis=0)
    b = rotations.exp(np.array([[0.4, 0, 0], [0, 1e-12, 0], [0, 0, 3.0]]))
    v = rotations.log(rotations.slerp(a, b, np.array([0.25, 0.5, 1.0])))
    assert_allclose(v, [[0.1, 0, 0], [0, 5e-13, 0], [0, 0, 3.0]], rtol=1e-9, atol=1e-25)


def test_chordal_mean_agrees_with_scipy_and_ignores_signs() -> None:
    # scipy's Rotation.mean is the same minimiser (Markley et al. 2007).
    spread = Rotation.from_rotvec(np.random.default_rng(8).normal(scale=0.4, size=(200, 3)))
    cloud = random_rotations(1, 9)[0] * spread
    signs = np.where(np.arange(200) % 3 == 0, -1.0, 1.0)[:, None]
    same_rotation(rotations.chordal_mean(signs * cloud.as_quat()), cloud.mean().as_quat())


def test_chordal_mean_of_two_is_half_way() -> None:
    b = rotations.exp(np.array([0.0, 0.0, 1.0]))
    mean = rotations.chordal_mean(np.stack([IDENTITY, -b]))
    assert_allclose(rotations.log(mean), [0.0, 0.0, 0.5], atol=1e-12)


@pytest.mark.parametrize(
    ('q', 'words'),
    [
        (np.empty((0, 4)), 'n >= 1'),
        (np.ones(4), 'shape'),
        (np.zeros((2, 4)), 'not zero'),
    ],
)
def test_chordal_mean_refuses_what_has_no_mean(q: np.ndarray, words: str) -> None:
    with pytest.raises(ValueError, match=words):
        rotations.chordal_mean(q)


def test_nan_rows_stay_nan_and_leave_others_alone() -> None:
    q = np.stack([X90, np.full(4, np.nan)])
    for values in (rotations.log(q), rotations.to_matrix(q), rotations.from_matrix(
        rotations.to_matrix(q)), rotations.slerp(q, q, 0.5), rotations.rotate(q, [1, 2, 3])
    ):
        assert np.all(np.isfinite(values[0]))
        assert np.all(np.isnan(values[1]))
