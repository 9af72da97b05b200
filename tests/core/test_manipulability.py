# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Normalised manipulability against closed forms and published arms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.manipulability import generic_rank, manipulability_norm
from teleop_eval.core.urdf import parse_urdf

L1, L2 = 0.3, 0.25
Z, Y, X = '0 0 1', '0 1 0', '1 0 0'


def arm(*joints: tuple[str, str, str], tool: str, rpy: str = '0 0 0') -> SerialChain:
    """Build a chain from (kind, axis, offset before the joint) and the tool's offset."""
    text = '<robot name="r"><link name="l0"/>'
    for index, (kind, axis, xyz) in enumerate(joints):
        turn = rpy if index == 0 else '0 0 0'
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="{kind}">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}" rpy="{turn}"/><axis xyz="{axis}"/>'
            '<limit lower="-3.1" upper="3.1"/></joint>'
        )
    text += (
        f'<link name="tip"/><joint name="end" type="fixed"><parent link="l{len(joints)}"/>'
        f'<child link="tip"/><origin xyz="{tool}"/></joint></robot>'
    )
    return SerialChain.from_description(parse_urdf(text), 'l0', 'tip')


def planar(rpy: str = '0 0 0') -> SerialChain:
    return arm(
        ('revolute', Z, '0 0 0'), ('revolute', Z, f'{L1} 0 0'), tool=f'{L2} 0 0', rpy=rpy
    )


def spatial(scale: float = 1.0) -> SerialChain:
    return arm(
        ('revolute', Z, f'0 0 {0.3 * scale}'),
        ('revolute', Y, '0 0 0'),
        ('revolute', Y, f'{0.4 * scale} 0 0'),
        tool=f'{0.35 * scale} 0 0',
    )


@pytest.mark.parametrize('rpy', ['0 0 0', '0.4 -1.1 2.0'])
def test_planar_manipulability_is_l1_l2_sine_of_the_elbow(rpy: str) -> None:
    # Yoshikawa 1985: w = l1 l2 |sin q2|; 0.064951905 at 60 deg; largest, l1 l2, at 90 deg.
    chain, reach = planar(rpy), L1 + L2
    assert generic_rank(chain) == 2
    elbow = np.radians([60.0, 0.0, 180.0, 90.0, -90.0])
    q = np.stack([np.full(5, 0.5), elbow], axis=1)
    w = manipulability_norm(chain, q, reach) * reach**2
    assert_allclose(w, [0.064951905, 0.0, 0.0, L1 * L2, L1 * L2], atol=1e-9)


def test_planar_mean_and_area() -> None:
    # Mean over q2: (2 / pi) l1 l2. Area swept with q1 over d, q2 over [0, pi]: 2 d l1 l2.
    chain, reach = planar(), L1 + L2
    elbow = (np.arange(20_000) + 0.5) * math.pi / 20_000
    w = manipulability_norm(chain, np.stack([0 * elbow, elbow], axis=1), reach) * reach**2
    assert_allclose(w.mean(), 2.0 / math.pi * L1 * L2, rtol=1e-8)
    assert_allclose(w.mean() * math.pi * math.pi / 2.0, 0.235619, atol=1e-6)


def test_spatial_arm_equals_its_closed_form() -> None:
    # |det J| = r a b |sin q3| for a turret with upper arm a, forearm b, tip at radius r.
    q = np.random.default_rng(3).uniform(-3.0, 3.0, (200, 3))
    radius = 0.4 * np.cos(q[:, 1]) + 0.35 * np.cos(q[:, 1] + q[:, 2])
    expected = np.abs(radius) * 0.4 * 0.35 * np.abs(np.sin(q[:, 2])) / 0.75**3
    assert generic_rank(spatial()) == 3
    assert_allclose(manipulability_norm(spatial(), q, 0.75), expected, atol=1e-15)


def test_redundant_arm_equals_the_product_of_singular_values() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0.1'),
        ('revolute', Y, '0 0 0.1'),
        ('continuous', X, '0.2 0 0'),
        ('revolute', Y, '0.2 0 0'),
        ('revolute', Z, '0.1 0.05 0'),
        tool='0.2 0 0.03',
    )
    q = np.random.default_rng(4).uniform(-3.0, 3.0, (300, 5))
    values = np.linalg.svd(chain.jacobian(q)[:, :3], compute_uv=False)
    assert_allclose(manipulability_norm(chain, q, 1.0), values.prod(axis=1), atol=1e-14)


def test_size_of_the_arm_does_not_matter() -> None:
    q = np.random.default_rng(5).uniform(-3.0, 3.0, (50, 3))
    small = manipulability_norm(spatial(), q, 0.75)
    assert_allclose(manipulability_norm(spatial(4.0), q, 3.0), small, atol=1e-14)


def test_prismatic_columns_are_measured_in_arm_lengths() -> None:
    # Polar arm in the plane, tip at radius r: columns (r, 0) and (0, 1); r L / L^2.
    chain = arm(('revolute', Z, '0 0 0'), ('prismatic', X, '0 0 0'), tool='0.2 0 0')
    assert generic_rank(chain) == 2
    assert_allclose(manipulability_norm(chain, [[0.3, 0.6]], 2.0), [0.8 / 2.0])
    gantry = arm(
        ('prismatic', X, '0 0 0'), ('prismatic', Y, '0 0 0'), ('prismatic', Z, '0 0 0'),
        tool='0 0 0',
    )
    assert_allclose(manipulability_norm(gantry, [[0.0, 0.1, 0.2]], 2.0), [1.0])


@pytest.mark.parametrize(
    ('chain', 'rank'),
    [
        (arm(('revolute', Z, '0 0 0'), tool='0.2 0 0'), 1),
        (arm(('revolute', Z, '0 0 0'), tool='0 0 0.2'), 0),
        # Pan and tilt: two directions at once, though the tip leaves every plane.
        (arm(('revolute', Z, '0 0 0'), ('revolute', Y, '0 0 0'), tool='0.2 0 0'), 2),
        # A right angle written as 1.571 does not turn a planar arm into a spatial one.
        (arm(('revolute', Y, '0 0 0'), ('revolute', '0 1 0.0002', '0.3 0 0'), tool='.2 0 0'), 2),
        (spatial(), 3),
    ],
)
def test_generic_rank(chain: SerialChain, rank: int) -> None:
    assert generic_rank(chain) == rank
    assert generic_rank(chain, 7) == rank


def test_rank_one_is_the_length_of_the_only_column() -> None:
    chain = arm(('revolute', Z, '0 0 0'), tool='0.2 0 0')
    assert_allclose(manipulability_norm(chain, [[0.4]], 0.2), [1.0])


def test_puma_560_translational_manipulability() -> None:
    # Table: Corke & Armstrong-Helouvry 1994; values from pinocchio's Jacobian.
    table = [(0, 0, 1), (0, 0.4318, 0), (0.15005, 0.0203, -1), (0.4318, 0, 1), (0, 0, -1)]
    text, xyz, rpy = '<robot name="p"><link name="l0"/>', '0 0 0', '0 0 0'
    for index in range(6):
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="continuous">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}" rpy="{rpy}"/><axis xyz="0 0 1"/></joint>'
        )
        if index < 5:
            d, a, quarters = table[index]
            xyz, rpy = f'{a} 0 {d}', f'{quarters * math.pi / 2!r} 0 0'
    chain = SerialChain.from_description(parse_urdf(text + '</robot>'), 'l0', 'l6')
    q = np.array([np.arange(1, 7) / 10.0, np.radians([0, 45, 180, 0, 45, 0])])
    assert_allclose(
        manipulability_norm(chain, q, 1.0), [0.0422855966, 0.1111814615], atol=1e-8
    )


@pytest.mark.parametrize('chain', [planar(), spatial()])
def test_nan_rows_are_nan_and_no_rows_are_none(chain: SerialChain) -> None:
    q = np.full((3, chain.size), 0.5)
    q[1, 0] = np.nan
    values = manipulability_norm(chain, q, 0.5)
    assert np.isfinite(values[[0, 2]]).all()
    assert np.isnan(values[1])
    assert manipulability_norm(chain, np.empty((0, chain.size)), 0.5).shape == (0,)


@pytest.mark.parametrize('reach', [0.0, -1.0, math.nan])
def test_a_reach_that_is_none_is_refused(reach: float) -> None:
    with pytest.raises(ValueError, match='reach must be positive'):
        manipulability_norm(planar(), [[0.0, 1.0]], reach)
