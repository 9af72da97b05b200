# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""task_space against numbers worked out by hand, and its rotations against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from mapping_cells import ROBOT_SHOULDER, cells, model, operator, quaternion, same_turns
from scipy.spatial.transform import Rotation

from teleop_eval.core.errors import ConfigError


def test_scale_acts_along_the_axes_of_the_robots_base() -> None:
    """
    Hand 0.1, 0.2, 0.3 m from its centre; operator axes turned by 90 deg about z.

    R maps (x, y, z) to (-y, x, z): (-0.2, 0.1, 0.3). With S = (2, 3, 0.5): (-0.4, 0.3, 0.15).
    Added to the robot's centre (1, 1, 1): (0.6, 1.3, 1.15). Were S taken along the operator's
    axes, it would be (-0.6, 0.2, 0.15).
    """
    one = model('task_space', operator(axes=quaternion('z', 90)), scaling='metric',
                scale_xyz=[2.0, 3.0, 0.5], operator_center_m=[1.0, 2.0, 3.0],
                robot_center_m=[1.0, 1.0, 1.0])
    found = one.ideal(cells(1, hand_m=np.array([[1.1, 2.2, 3.3]])))
    np.testing.assert_allclose(found.positions_m, [[0.6, 1.3, 1.15]], atol=1e-15)
    assert found.orientations is None and not one.scales_by_arm_lengths


def test_normalized_scale_times_factor_per_axis_about_the_shoulders() -> None:
    """L_r / L_o = 0.9 / 0.6 = 1.5; times (1, 2, 0) that is (1.5, 3, 0): z is locked."""
    one = model('task_space', scale_xyz=[1.0, 2.0, 0.0])
    found = one.ideal(cells(1, hand_m=np.array([[0.2, 0.3, 1.9]])))
    np.testing.assert_allclose(found.positions_m, [ROBOT_SHOULDER + [0.3, 0.3, 0.0]], atol=1e-15)
    assert one.scales_by_arm_lengths


def test_a_moving_shoulder_is_the_centre_cell_by_cell() -> None:
    moving = np.array([[0.0, 0.0, 1.0], [0.1, 0.0, 1.0], [np.nan] * 3])
    hand = np.array([[0.1, 0.0, 1.0], [0.2, 0.0, 1.0], [0.2, 0.0, 1.0]])
    one = model('task_space', operator(shoulder_m=None, moves=True), scaling='metric')
    found = one.ideal(cells(3, hand_m=hand, shoulder_m=moving)).positions_m
    np.testing.assert_allclose(found[:2] - ROBOT_SHOULDER, [[0.1, 0.0, 0.0]] * 2, atol=1e-15)
    assert np.isnan(found[2]).all()
    # No message of the shoulder in this window: nothing is known, and nothing is guessed.
    assert np.isnan(one.ideal(cells(3, hand_m=hand)).positions_m).all()
    # A configured centre wins.
    fixed = model('task_space', operator(), scaling='metric', operator_center_m=[0.1, 0.0, 1.0])
    found = fixed.ideal(cells(3, hand_m=hand, shoulder_m=moving)).positions_m
    np.testing.assert_allclose(found[0], ROBOT_SHOULDER, atol=1e-15)


def test_orientation_is_axes_times_hand_times_hand_to_tool() -> None:
    rng = np.random.default_rng(1)
    axes, offset = Rotation.random(2, random_state=1)
    hand = Rotation.random(20, random_state=2)
    one = model('task_space', operator(axes=axes.as_quat()),
                hand_to_tool_xyzw=offset.as_quat().tolist())
    found = one.ideal(cells(20, hand_m=rng.normal(size=(20, 3)), hand_xyzw=hand.as_quat()))
    same_turns(found.orientations, (axes * hand * offset).as_quat())


def test_what_the_arms_lack_is_one_sentence() -> None:
    with pytest.raises(ConfigError, match='give operator.arm_length_m or stature_m, or scaling'):
        model('task_space', operator(length_m=None))
    with pytest.raises(ConfigError, match="'x' needs a centre; give operator.shoulder_m"):
        model('task_space', operator(shoulder_m=None))
