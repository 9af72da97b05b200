# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One posture at a time against many at once, and second derivatives against differences."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core import rotations
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.scaled_chain import ScaledChain, Target, rotation_vector
from teleop_eval.core.urdf import parse_urdf

REACH = 0.7
JOINTS = [
    # kind, axis, xyz, rpy, mimic
    ('prismatic', '0 0.6 0.8', '0.1 0 0.2', '0.2 -0.4 1.0', ''),
    ('revolute', '0 0 1', '0 0.1 0.3', '-1.1 0.3 0.2', ''),
    ('continuous', '1 0 0', '0.2 0 0.05', '0.5 0.1 -0.7', ''),
    ('revolute', '0.6 0 0.8', '0 0.25 0', '0.1 1.2 0.4', ''),
    ('revolute', '0 1 0', '0.02 0 0.1', '0 0.3 -0.2', '<mimic joint="q3" multiplier="-0.7"/>'),
    ('revolute', '0 1 0', '0.1 0.05 0', '1.0 0 0.1', ''),
    ('prismatic', '1 0 0', '0 0 0.1', '0.3 0.2 0.1', ''),
    ('revolute', '0 0 1', '0.05 0 0.02', '-0.4 0.9 0.3', ''),
]


def bent_arm(*, upward: bool = False) -> SerialChain:
    """Return a chain with every kind of joint, mimic included, none parallel to another."""
    text = '<robot name="r"><link name="l0"/>'
    for index, (kind, axis, xyz, rpy, mimic) in enumerate(JOINTS):
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="{kind}">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}" rpy="{rpy}"/><axis xyz="{axis}"/>{mimic}'
            '<limit lower="-2" upper="2.5" effort="1" velocity="1"/></joint>')
    text += ('<link name="tip"/><joint name="end" type="fixed"><parent link="l8"/>'
             '<child link="tip"/><origin xyz="0.1 0.2 0.05" rpy="1 2 3"/></joint></robot>')
    ends = ('tip', 'l0') if upward else ('l0', 'tip')
    return SerialChain.from_description(parse_urdf(text), *ends)


def configurations(chain: SerialChain, count: int) -> np.ndarray:
    return np.random.default_rng(2).uniform(-2.0, 2.0, (count, chain.size))


@pytest.mark.parametrize('upward', [False, True])
def test_pose_and_jacobian_equal_those_of_the_chain(upward: bool) -> None:
    chain = bent_arm(upward=upward)
    scaled = ScaledChain(chain, REACH, with_orientation=True)
    assert scaled.scale.tolist().count(REACH) == 2
    q = configurations(chain, 20)
    pose, jacobian = chain.forward(q), chain.jacobian(q)
    for row in range(len(q)):
        posture = scaled.at(q[row] / scaled.scale)
        assert_allclose(posture.position, pose.positions[row], atol=1e-14)
        assert_allclose(posture.rotation, pose.rotations[row], atol=1e-14)
        expected = jacobian[row] * scaled.scale
        expected[:3] /= REACH
        assert_allclose(posture.jacobian, expected, atol=1e-14)


@pytest.mark.parametrize('upward', [False, True])
@pytest.mark.parametrize('with_orientation', [False, True])
def test_derivatives_of_the_squared_error_equal_differences(
    upward: bool, with_orientation: bool,
) -> None:
    scaled = ScaledChain(bent_arm(upward=upward), REACH, with_orientation=with_orientation)
    y = configurations(scaled.chain, 12)
    goal = scaled.at(y[0])
    target = Target(goal.position, goal.rotation if with_orientation else None)
    unit, h = np.eye(y.shape[1]), 1e-6

    def cost(at: np.ndarray) -> float:
        return 0.5 * float(np.sum(scaled.error(scaled.at(at), target) ** 2))

    def slope(at: np.ndarray) -> np.ndarray:
        posture = scaled.at(at)
        return -posture.jacobian.T @ scaled.error(posture, target)

    for row in y[1:]:
        posture = scaled.at(row)
        differences = [(cost(row + h * d) - cost(row - h * d)) / (2.0 * h) for d in unit]
        assert_allclose(slope(row), differences, atol=1e-8)
        second = [(slope(row + h * d) - slope(row - h * d)) / (2.0 * h) for d in unit]
        bending = scaled.bending(posture, scaled.error(posture, target))
        assert np.abs(bending).max() > 0.05
        assert_allclose(posture.jacobian.T @ posture.jacobian - bending, second, atol=1e-7)


@pytest.mark.parametrize('angle', [0.0, 1e-12, 1e-6, 0.3, 2.9, 3.1, math.pi - 1e-9, math.pi])
def test_rotation_vector_up_to_half_a_turn(angle: float) -> None:
    axis = np.array([2.0, -3.0, 6.0]) / 7.0
    vector = rotation_vector(rotations.to_matrix(rotations.exp(axis * angle)))
    # At half a turn the axis has no sign.
    sign = math.copysign(1.0, float(vector @ axis)) if angle == math.pi else 1.0
    assert_allclose(vector, sign * axis * angle, atol=1e-8)
