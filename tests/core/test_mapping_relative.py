# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""relative: both frames against numbers worked out by hand, and against scipy's rotations."""

from __future__ import annotations

import numpy as np
import pytest
from mapping_cells import IDENTITY, cells, model, operator, quaternion, same_turns
from scipy.spatial.transform import Rotation

from teleop_eval.core.mappings import Anchor

# Engagement: hand at (1, 2, 3) turned by 90 deg about z, tool at (0.5, 0, 0.2) turned by 90 deg
# about y. Since then the hand went by d = (0.1, 0.2, 0.3) and turned by 90 deg about x of the
# operator's base.
HAND, TOOL = np.array([1.0, 2.0, 3.0]), np.array([0.5, 0.0, 0.2])
ANCHOR = Anchor(HAND, quaternion('z', 90), TOOL, quaternion('y', 90))
NOW_M = HAND + [0.1, 0.2, 0.3]
NOW = (Rotation.from_euler('x', 90, degrees=True)
       * Rotation.from_euler('z', 90, degrees=True)).as_quat()
SCALE = {'scaling': 'metric', 'scale_xyz': [2.0, 3.0, 4.0]}


def one_cell(kind_model):
    return kind_model.ideal(cells(1, hand_m=NOW_M[None], hand_xyzw=NOW[None],
                                  anchors={0: ANCHOR}))


def test_world_frame_by_hand() -> None:
    """
    Operator axes turned by 90 deg about z: R maps (x, y, z) to (-y, x, z).

    R d = (-0.2, 0.1, 0.3); S R d = (-0.4, 0.3, 1.2); p_i = (0.1, 0.3, 1.4). R turns the axis x
    of the hand's turn into y, so the tool turns by 90 deg about y. It stood at 90 deg about y,
    hence at 180 deg now: x to -x, y to y, z to -z.
    """
    found = one_cell(model('relative', operator(axes=quaternion('z', 90)), **SCALE))
    np.testing.assert_allclose(found.positions_m, [[0.1, 0.3, 1.4]], atol=1e-15)
    matrix = Rotation.from_quat(found.orientations[0]).as_matrix()
    np.testing.assert_allclose(matrix, np.diag([-1.0, 1.0, -1.0]), atol=1e-12)


def test_tool_frame_by_hand() -> None:
    """
    Hand to tool: 90 deg about x; the axes R between the two bases play no part.

    d in the hand's axes at engagement, (x, y, z) to (y, -x, z): (0.2, -0.1, 0.3). In the tool's
    axes, Q^T maps (x, y, z) to (x, z, -y): (0.2, 0.3, 0.1). In the base, R_r0 maps (x, y, z) to
    (z, y, -x): (0.1, 0.3, -0.2). Scaled (0.2, 0.9, -0.8); p_i = (0.7, 0.9, -0.6).

    The hand's turn about x is, in its own axes at engagement, one about (0, -1, 0): -90 deg
    about y. In the tool's axes that y is (0, 0, -1): 90 deg about z. R_i = R_y(90) R_z(90), whose
    columns are the images of x, y, z: x to y to y; y to -x to z; z to z to x.
    """
    found = one_cell(model('relative', operator(axes=quaternion('z', 37)), frame='tool',
                           hand_to_tool_xyzw=quaternion('x', 90).tolist(), **SCALE))
    np.testing.assert_allclose(found.positions_m, [[0.7, 0.9, -0.6]], atol=1e-15)
    matrix = Rotation.from_quat(found.orientations[0]).as_matrix()
    np.testing.assert_allclose(matrix, [[0, 0, 1], [1, 0, 0], [0, 1, 0]], atol=1e-12)


@pytest.mark.parametrize('frame', ['world', 'tool'])
def test_both_frames_against_scipy(frame: str) -> None:
    """The definitions, written with scipy's rotations and 40 random poses in two stretches."""
    rng = np.random.default_rng(3)
    axes, offset = Rotation.random(2, random_state=4)
    turns = Rotation.random(40, random_state=5)
    hand = rng.normal(size=(40, 3))
    starts = Rotation.random(4, random_state=6)
    anchors = {4: Anchor(rng.normal(size=3), starts[0].as_quat(), rng.normal(size=3),
                         starts[1].as_quat()),
               7: Anchor(rng.normal(size=3), starts[2].as_quat(), rng.normal(size=3),
                         starts[3].as_quat())}
    stretch = np.repeat([4, -1, 7], [15, 5, 20])
    extra = {} if frame == 'world' else {'hand_to_tool_xyzw': offset.as_quat().tolist()}
    one = model('relative', operator(axes=axes.as_quat()), frame=frame, scale=0.4, **extra)
    found = one.ideal(cells(40, hand_m=hand, hand_xyzw=turns.as_quat(), stretch=stretch,
                            anchors=anchors))
    for number, start, tool in ((4, starts[0], starts[1]), (7, starts[2], starts[3])):
        here, anchor = stretch == number, anchors[number]
        if frame == 'world':
            towards = axes
            expected = axes * turns[here] * start.inv() * axes.inv() * tool
        else:
            towards = tool * offset.inv() * start.inv()
            expected = tool * offset.inv() * start.inv() * turns[here] * offset
        np.testing.assert_allclose(
            found.positions_m[here],
            anchor.robot_m + 0.4 * 1.5 * towards.apply(hand[here] - anchor.hand_m), atol=1e-12)
        same_turns(found.orientations[here], expected.as_quat())
    outside = stretch < 0
    assert np.isnan(found.positions_m[outside]).all()
    assert np.isnan(found.orientations[outside]).all()
    assert one.scales_by_arm_lengths and one.anchored and not one.estimates_tool_rotation


@pytest.mark.parametrize('frame', ['world', 'tool'])
def test_each_stretch_begins_at_the_tools_pose(frame: str) -> None:
    """The clutch moves the anchor: at engagement the ideal pose is the robot's, whatever R, Q."""
    found = model('relative', operator(axes=quaternion('y', 20)), frame=frame).ideal(
        cells(1, hand_m=HAND[None], hand_xyzw=ANCHOR.hand_xyzw[None], anchors={0: ANCHOR}))
    np.testing.assert_allclose(found.positions_m, TOOL[None], atol=1e-15)
    same_turns(found.orientations, ANCHOR.robot_xyzw[None])


def test_what_an_anchor_lacks_is_not_guessed() -> None:
    hand = np.array([[1.1, 2.0, 3.0], [np.nan] * 3])
    turns = np.array([IDENTITY, IDENTITY])
    world, tool = (model('relative', frame=frame, scaling='metric') for frame in ('world', 'tool'))

    def ideal(one, anchor, hand_turns=turns):
        return one.ideal(cells(2, hand_m=hand, hand_xyzw=hand_turns,
                               anchors={} if anchor is None else {0: anchor}))
    for anchor in (None, Anchor(hand_m=HAND), Anchor(robot_m=TOOL, robot_xyzw=IDENTITY)):
        found = ideal(world, anchor)
        assert np.isnan(found.positions_m).all() and found.orientations is None
    # Points without orientation: positions follow in world axes, and cannot in the tool's.
    points = Anchor(HAND, None, TOOL, IDENTITY)
    found = ideal(world, points, None)
    np.testing.assert_allclose(found.positions_m[0], TOOL + [0.1, 0.0, 0.0], atol=1e-15)
    assert np.isnan(found.positions_m[1]).all() and found.orientations is None
    assert np.isnan(ideal(tool, points, None).positions_m).all()


def test_settings_that_do_not_go_together() -> None:
    settings = type(model('relative')).Settings
    assert 'no effect with frame: world' in settings(
        'relative', hand_to_tool_xyzw=(0.0, 0.0, 0.0, 1.0)).fault('k')
    assert 'both scale and scale_xyz' in settings(
        'relative', scale=2.0, scale_xyz=(1.0, 1.0, 1.0)).fault('k')
    assert 'k.hand_to_tool_xyzw has norm 2' in settings(
        'relative', frame='tool', hand_to_tool_xyzw=(0.0, 0.0, 0.0, 2.0)).fault('k')
