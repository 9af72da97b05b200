# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""rate: dead band, cap and gain in closed form, and where its integral is anchored."""

from __future__ import annotations

import numpy as np
import pytest
from mapping_cells import IDENTITY, cells, model, operator, quaternion, same_turns
from scipy.spatial.transform import Rotation

from teleop_eval.core.mappings import Anchor
from teleop_eval.core.mappings.rate import shaped

START = np.array([0.4, 0.1, 0.2])
ANCHOR = Anchor(np.zeros(3), IDENTITY, START, IDENTITY)


def stick(rows, **given):
    """Return cells with a rate input; a cell is 0.01 s."""
    rows = np.asarray(rows, dtype=float)
    return cells(len(rows), rate_input=rows, **{'anchors': {0: ANCHOR}, **given})


def push(x, count=1):
    """Return rate input along x only."""
    return np.tile([x, 0.0, 0.0, 0.0, 0.0, 0.0], (count, 1))


@pytest.mark.parametrize(('speed', 'expected'), [
    (0.0, 0.0), (0.049, 0.0), (0.05, 0.0), (0.051, 0.001), (0.15, 0.1), (0.25, 0.2),
    (0.2501, 0.2), (9.0, 0.2)])
def test_dead_band_is_continuous_and_the_cap_flat(speed: float, expected: float) -> None:
    """With band 0.05 and cap 0.2, v becomes min(max(v - 0.05, 0), 0.2), in v's direction."""
    direction = np.array([2.0, -1.0, 2.0]) / 3.0
    found = shaped(speed * direction[None], 0.05, 0.2)
    np.testing.assert_allclose(found, [expected * direction], atol=1e-15)


def test_gain_axes_and_raw_velocity() -> None:
    """
    Twist (0.1, 0.2, 0) under axes turned by 90 deg about z is (-0.2, 0.1, 0) in the robot's.

    Times (1, 2, 5): (-0.2, 0.2, 0), norm 0.283. Angular (0, 0.3, 0.4) becomes (-0.3, 0, 0.4),
    norm 0.5; times 2 it is 1.0; less the dead band 0.2, capped at 0.5: (-0.3, 0, 0.4).
    """
    one = model('rate', operator(axes=quaternion('z', 90)), gain_xyz=[1.0, 2.0, 5.0],
                turn_gain=2.0, turn_dead_band_rad_s=0.2, max_turn_rate_rad_s=0.5,
                dead_band_mps=0.1)
    found = one.ideal(stick([[0.1, 0.2, 0.0, 0.0, 0.3, 0.4]]))
    norm = np.hypot(0.2, 0.2)
    np.testing.assert_allclose(found.raw_velocities_mps, [[-0.2, 0.2, 0.0]], atol=1e-15)
    np.testing.assert_allclose(found.velocities_mps,
                               [np.array([-0.2, 0.2, 0.0]) * (norm - 0.1) / norm], atol=1e-15)
    np.testing.assert_allclose(found.turn_rates_rad_s, [[-0.3, 0.0, 0.4]], atol=1e-15)
    assert (one.needs, one.gives, one.anchored) == ('rate_input', 'velocity', True)


def test_displacement_since_engagement_sets_the_velocity() -> None:
    """0.1 m at gain 2 is 0.2 m/s; a hand turned by 0.3 rad about y at turn gain 0.5, 0.15."""
    one = model('rate', input='displacement', gain=2.0, turn_gain=0.5)
    turn = Rotation.from_rotvec([0.0, 0.3, 0.0])
    start = Rotation.from_euler('z', 40, degrees=True)
    anchor = Anchor(np.array([1.0, 1.0, 1.0]), start.as_quat(), START, IDENTITY)
    found = one.ideal(cells(3, hand_m=np.array([[1.1, 1.0, 1.0]] * 3),
                            hand_xyzw=np.tile((turn * start).as_quat(), (3, 1)),
                            stretch=np.array([-1, 0, 1]), anchors={0: anchor}))
    np.testing.assert_allclose(found.velocities_mps[1], [0.2, 0.0, 0.0], atol=1e-15)
    np.testing.assert_allclose(found.turn_rates_rad_s[1], [0.0, 0.15, 0.0], atol=1e-12)
    # Disengaged, and engaged at a moment of which nothing is known.
    assert np.isnan(found.velocities_mps[[0, 2]]).all()
    assert one.needs == 'hand'
    points = one.ideal(cells(1, hand_m=np.array([[1.1, 1.0, 1.0]]), anchors={0: anchor}))
    assert points.turn_rates_rad_s is None and points.orientations is None


def test_a_stick_commands_nothing_while_disengaged() -> None:
    found = model('rate').ideal(stick(push(0.3, 4), stretch=np.array([-1, 0, 0, -1])))
    np.testing.assert_array_equal(np.isfinite(found.velocities_mps[:, 0]),
                                  [False, True, True, False])


def test_positions_integrate_from_the_robots_pose_at_engagement() -> None:
    """v = 0.1 t: from the edge of the first cell, x = 0.05 t^2 at each centre (trapezoids)."""
    one = model('rate')
    centres = (np.arange(200) + 0.5) * 0.01
    rows = np.zeros((200, 6))
    rows[:, 0], rows[:, 5] = 0.1 * centres, 0.4
    parts = [one.ideal(stick(rows[i:i + 50])) for i in range(0, 200, 50)]
    x = np.concatenate([part.positions_m for part in parts])
    # The half cell before the first centre counts at that centre's velocity, 1.25e-6 m too much.
    np.testing.assert_allclose(x[:, 0] - START[0], 0.05 * centres ** 2 + 1.25e-6, atol=1e-12)
    np.testing.assert_allclose(x[:, 1:], np.tile(START[1:], (200, 1)), atol=1e-15)
    turned = Rotation.from_rotvec(np.outer(0.4 * centres, [0.0, 0.0, 1.0])).as_quat()
    same_turns(np.concatenate([part.orientations for part in parts]), turned)


def test_positions_begin_anew_each_engagement_and_every_anchor_s() -> None:
    """
    At 0.2 m/s with anchor_s 0.5 a cell is 2 mm; the robot stays where it is.

    Stretch 3: 80 cells, the 51st (0.505 s after its beginning) is anchored at the robot.
    Stretch 4 begins at its own anchor, and lasts longer than one window.
    """
    one = model('rate', anchor_s=0.5)
    stretch = np.repeat([3, -1, 4], [80, 10, 40])
    robot = np.tile([1.0, 2.0, 3.0], (130, 1))
    anchors = {3: ANCHOR, 4: Anchor(robot_m=np.array([9.0, 0.0, 0.0]))}
    first = one.ideal(stick(push(0.2, 130), stretch=stretch, robot_m=robot, anchors=anchors))
    x = first.positions_m[:, 0]
    steps = 0.002 * np.arange(130)
    np.testing.assert_allclose(x[:50], 0.401 + steps[:50], atol=1e-12)
    np.testing.assert_allclose(x[50:80], 1.0 + steps[:30], atol=1e-12)
    assert np.isnan(x[80:90]).all()
    np.testing.assert_allclose(x[90:], 9.001 + steps[:40], atol=1e-12)
    then = one.ideal(stick(push(0.2, 120), stretch=np.full(120, 4), robot_m=robot[:120],
                           anchors=anchors)).positions_m[:, 0]
    np.testing.assert_allclose(then[:10], 9.001 + 0.08 + steps[:10], atol=1e-12)
    np.testing.assert_allclose(then[10:60], 1.0 + steps[:50], atol=1e-12)
    np.testing.assert_allclose(then[60:110], 1.0 + steps[:50], atol=1e-12)


def test_after_a_gap_the_position_waits_for_the_next_anchor() -> None:
    one = model('rate', anchor_s=0.5)
    rows = push(0.2, 60)
    rows[10] = np.nan
    x = one.ideal(stick(rows, robot_m=np.tile([1.0, 2.0, 3.0], (60, 1)))).positions_m[:, 0]
    assert np.isfinite(x[:10]).all() and np.isnan(x[10:50]).all()
    np.testing.assert_allclose(x[50:], 1.0 + 0.002 * np.arange(10), atol=1e-12)


def test_a_new_segment_anchors_at_the_robot_not_at_an_old_engagement() -> None:
    one = model('rate')
    one.ideal(stick(push(0.2, 20)))
    one.restart()
    robot = np.tile([1.0, 2.0, 3.0], (20, 1))
    robot[:5] = np.nan
    x = one.ideal(stick(push(0.2, 20), robot_m=robot)).positions_m[:, 0]
    assert np.isnan(x[:5]).all()
    np.testing.assert_allclose(x[5:], 1.0 + 0.002 * np.arange(15), atol=1e-12)


def test_a_gain_given_twice() -> None:
    settings = type(model('rate')).Settings
    assert settings('rate', gain=2.0, gain_xyz=(1.0, 1.0, 1.0)).fault('k') == (
        'k has both gain and gain_xyz; keep one.')
