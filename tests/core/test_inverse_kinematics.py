# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Inverse kinematics of planar arms against closed forms.

The two-link formulas are common textbook ones: r^2 = l1^2 + l2^2 + 2 l1 l2 cos(q2) and
q1 = atan2(y, x) - atan2(l2 sin(q2), l1 + l2 cos(q2)).
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.optimize import minimize_scalar

from teleop_eval.core.inverse_kinematics import (
    IkResult,
    PathSolver,
    orientation_possible,
    pull_share,
)
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf

L1, L2, L3 = 0.3, 0.25, 0.15
Z = '0 0 1'
TURN = 2.0 * math.pi


def arm(*joints: tuple[str, str, str, float, float], tool: str) -> SerialChain:
    """Build a chain from (kind, axis, offset before the joint, lower, upper) and the tool."""
    text = '<robot name="r"><link name="l0"/>'
    for index, (kind, axis, xyz, lower, upper) in enumerate(joints):
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="{kind}">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}"/><axis xyz="{axis}"/>'
            f'<limit lower="{lower}" upper="{upper}" effort="1" velocity="2"/></joint>')
    text += (f'<link name="tip"/><joint name="end" type="fixed"><parent link="l{len(joints)}"/>'
             f'<child link="tip"/><origin xyz="{tool}"/></joint></robot>')
    return SerialChain.from_description(parse_urdf(text), 'l0', 'tip')


def two_links(low: float = -3.1, high: float = 3.1, *, kind: str = 'revolute') -> SerialChain:
    return arm((kind, Z, '0 0 0', -3.1, 3.1), (kind, Z, f'{L1} 0 0', low, high),
               tool=f'{L2} 0 0')


def three_links() -> SerialChain:
    return arm(('revolute', Z, '0 0 0', -2.5, 2.5), ('revolute', Z, f'{L1} 0 0', -2.0, 2.6),
               ('revolute', Z, f'{L2} 0 0', -1.0, 2.0), tool=f'{L3} 0 0')


def solver(chain: SerialChain, **options: object) -> PathSolver:
    return PathSolver(chain, reach_m=L1 + L2, with_orientation=False, **options)  # type: ignore


def elbow(x: float, y: float, sign: float) -> tuple[float, float]:
    """Return (q1, q2) of the two-link arm with q2 of that sign."""
    cosine = (x * x + y * y - L1 * L1 - L2 * L2) / (2.0 * L1 * L2)
    q2 = math.copysign(math.acos(cosine), sign)
    return math.atan2(y, x) - math.atan2(L2 * math.sin(q2), L1 + L2 * math.cos(q2)), q2


def arc(radius: float | np.ndarray, angles: np.ndarray) -> np.ndarray:
    return np.stack([radius * np.cos(angles), radius * np.sin(angles), 0.0 * angles], axis=1)


def check_limits(chain: SerialChain, result: IkResult) -> None:
    joints = result.joints[result.asked]
    assert np.all((joints >= chain.lower) & (joints <= chain.upper))


@pytest.mark.parametrize(('low', 'high'), [(-3.1, 3.1), (0.0, 3.1), (-3.1, 0.0)])
def test_two_links_equal_the_closed_form_on_either_branch(low: float, high: float) -> None:
    chain = two_links(low, high)
    random = np.random.default_rng(1)
    targets = arc(random.uniform(0.08, 0.54, 40), random.uniform(-1.4, 1.4, 40))
    result = solver(chain).solve(targets)
    assert result.reached.all()
    check_limits(chain, result)
    for (x, y, _), (q1, q2) in zip(targets, result.joints, strict=True):
        expected = elbow(x, y, q2)
        turns = round((q1 - expected[0]) / TURN) * TURN
        assert_allclose([q1 - turns, q2], expected, atol=2e-6)


def test_a_smooth_path_stays_on_its_branch() -> None:
    angles = np.linspace(-1.0, 1.2, 200)
    targets = arc(0.35 + 0.1 * np.sin(5.0 * angles), angles)
    result = solver(two_links(), rest=[0.0, -0.5]).solve(targets)
    assert result.reached.all()
    assert_array_equal(np.flatnonzero(result.jumped), [0])
    assert_allclose(result.joints, [elbow(x, y, -1.0) for x, y, _ in targets], atol=1e-6)


@pytest.mark.parametrize('beyond', [1e-5, 0.02, 0.3])
def test_beyond_reach_the_closest_point_lies_on_the_reach_circle(beyond: float) -> None:
    angles = np.linspace(-1.0, 1.0, 30)
    targets = arc(L1 + L2 + beyond, angles)
    chain = two_links()
    result = solver(chain).solve(targets)
    assert result.asked.all()
    assert not result.reached.any()
    assert_allclose(result.position_error_m, beyond, atol=1e-9)
    assert_allclose(chain.positions(result.joints), arc(L1 + L2, angles), atol=2e-6)
    assert_allclose(result.joints[:, 1], 0.0, atol=1e-4)


def test_in_the_hole_about_the_shoulder_the_closest_point_lies_on_its_rim() -> None:
    angles = np.linspace(-1.0, 1.0, 30)
    chain = two_links(kind='continuous')
    result = solver(chain).solve(arc(0.03, angles))
    assert not result.reached.any()
    assert not result.at_limit.any()
    assert_allclose(result.position_error_m, L1 - L2 - 0.03, atol=1e-9)
    assert_allclose(chain.positions(result.joints), arc(L1 - L2, angles), atol=2e-6)


def test_beside_its_plane_an_arm_comes_as_close_as_the_plane_is() -> None:
    targets = arc(0.4, np.linspace(-0.5, 0.5, 20))
    targets[:, 2] = 0.05
    chain = two_links()
    result = solver(chain).solve(targets)
    assert not result.reached.any()
    assert_allclose(result.position_error_m, 0.05, atol=1e-9)
    assert_allclose(chain.positions(result.joints)[:, :2], targets[:, :2], atol=1e-6)


def test_a_target_only_beyond_a_limit_can_reach_is_not_reached() -> None:
    # An elbow of at most 2.0 rad leaves a hole of this radius.
    hole = math.sqrt(L1 ** 2 + L2 ** 2 + 2.0 * L1 * L2 * math.cos(2.0))
    angles = np.linspace(-1.0, 1.0, 20)
    inside, free = arc(hole - 0.04, angles), two_links(0.2, 3.0)
    assert solver(free).solve(inside).reached.all()
    chain = two_links(0.2, 2.0)
    result = solver(chain).solve(inside)
    assert not result.reached.any()
    check_limits(chain, result)
    assert_array_equal(result.at_limit, np.tile([False, True], (20, 1)))
    assert_array_equal(result.joints[:, 1], 2.0)
    assert_allclose(result.position_error_m, 0.04, atol=1e-9)
    assert_allclose(chain.positions(result.joints), arc(hole, angles), atol=2e-6)
    assert solver(chain).solve(arc(hole + 0.001, angles)).reached.all()


def test_coming_back_into_reach_is_followed_again() -> None:
    radius = L1 + L2 + 0.1 * np.sin(np.linspace(-1.5, 7.0, 300))
    result = solver(two_links(), rest=[0.0, 0.8]).solve(arc(radius, 0.0 * radius + 0.3))
    assert_array_equal(result.reached, radius <= L1 + L2)
    assert_allclose(result.position_error_m, np.maximum(radius - L1 - L2, 0.0), atol=1e-7)
    assert 0 < np.count_nonzero(result.reached) < 300


def test_another_branch_is_found_where_the_followed_one_ends() -> None:
    # With the elbow bent backward q1 meets its limit; bent forward the target is reached.
    chain = two_links()
    angles = np.linspace(2.0, 3.0, 150)
    start = elbow(*arc(0.4, angles[:1])[0, :2], -1.0)
    path = solver(chain, rest=start)
    result = path.solve(arc(0.4, angles))
    assert result.reached.all()
    jumps = np.flatnonzero(result.jumped)
    assert jumps.size == 2
    assert jumps[0] == 0
    assert np.all(result.joints[:jumps[1], 1] < 0.0)
    assert np.all(result.joints[jumps[1]:, 1] > 0.0)
    check_limits(chain, result)


def nearest_of_three_links(
    x: float, y: float, wanted: np.ndarray, sign: float,
) -> np.ndarray:
    """Return the posture nearest to `wanted` of those with the tip at (x, y), by scanning."""
    def posture(heading: float) -> np.ndarray:
        q1, q2 = elbow(x - L3 * math.cos(heading), y - L3 * math.sin(heading), sign)
        return np.array([q1, q2, heading - q1 - q2])

    def distance(heading: float) -> float:
        try:
            return float(np.linalg.norm(posture(heading) - wanted))
        except ValueError:
            return 10.0

    grid = np.linspace(-math.pi, math.pi, 4001)
    best = min(grid, key=distance)
    found = minimize_scalar(
        distance, bounds=(best - 0.002, best + 0.002), method='bounded',
        options={'xatol': 1e-12})
    return posture(float(found.x))


def test_each_posture_is_the_nearest_to_the_last_one_moved_to_its_rest() -> None:
    chain, pull = three_links(), 0.1
    rest = np.array([-0.2, 0.9, 0.3])
    path = solver(chain, rest=rest, pull=pull)
    angles = np.linspace(0.2, 0.8, 25)
    targets = arc(0.5 - 0.05 * angles, angles)
    joints = path.solve(targets).joints
    for before, after, (x, y, _) in zip(joints[:-1], joints[1:], targets[1:], strict=True):
        anchor = before + pull * (rest - before)
        assert_allclose(after, nearest_of_three_links(x, y, anchor, 1.0), atol=1e-5)


@pytest.mark.parametrize('rest', [[-0.2, 0.9, 0.3], [0.4, 0.3, 0.9], [0.3, 1.6, -0.6]])
def test_a_resting_target_settles_nearest_to_the_rest(rest: list[float]) -> None:
    x, y = 0.42, 0.21
    expected = nearest_of_three_links(x, y, np.array(rest), 1.0)
    path = solver(three_links(), rest=rest, pull=0.1)
    first = path.solve([[x, y, 0.0]])
    assert_allclose(first.joints[0], expected, atol=1e-4)  # settled at once
    path.solve([[x + 0.1, y, 0.0]])
    last = path.solve(np.tile([x, y, 0.0], (250, 1)))
    assert last.reached.all()
    assert_allclose(last.joints[-1], expected, atol=1e-6)


def test_a_joint_at_its_limit_is_held_while_the_others_settle() -> None:
    # The free arm would settle with q3 below -1.0; held there it is a two-link arm.
    rest, (x, y) = [0.3, 1.8, -0.9], (0.42, 0.21)
    assert nearest_of_three_links(x, y, np.array(rest), 1.0)[2] < -1.1
    result = solver(three_links(), rest=rest, pull=0.2).solve(np.tile([x, y, 0.0], (200, 1)))
    assert result.reached.all()
    forearm = math.hypot(L2 + L3 * math.cos(1.0), L3 * math.sin(1.0))
    turn = math.atan2(-L3 * math.sin(1.0), L2 + L3 * math.cos(1.0))
    bend = math.acos((x * x + y * y - L1 ** 2 - forearm ** 2) / (2.0 * L1 * forearm))
    q1 = math.atan2(y, x) - math.atan2(
        forearm * math.sin(bend), L1 + forearm * math.cos(bend))
    assert_allclose(result.joints[-1], [q1, bend - turn, -1.0], atol=2e-6)
    assert_array_equal(result.at_limit[-1], [False, False, True])


def test_a_sliding_joint_is_measured_in_arm_lengths() -> None:
    # A slide along x carries an arm that turns and slides: a larger unit makes slides cheaper.
    chain = arm(('prismatic', '1 0 0', '0 0 0', -1.0, 1.0), ('revolute', Z, '0 0 0', -3.1, 3.1),
                ('prismatic', '1 0 0', '0.2 0 0', -0.1, 0.9), tool='0 0 0')
    x, y = 0.5, 0.2

    def posture(slide: float) -> np.ndarray:
        return np.array(
            [slide, math.atan2(y, x - slide), math.hypot(x - slide, y) - 0.2])

    for reach in (0.5, 2.0):
        path = PathSolver(chain, reach_m=reach, with_orientation=False, pull=0.1)
        joints = path.solve(np.tile([x, y, 0.0], (200, 1))).joints[-1]
        slides = np.linspace(-0.9, 0.9, 200_001)
        apart = [np.linalg.norm((posture(slide) - [0.0, 0.0, 0.4]) / [reach, 1.0, reach])
                 for slide in slides]
        assert_allclose(joints, posture(slides[int(np.argmin(apart))]), atol=3e-5)


def test_continuous_joints_are_not_unwound() -> None:
    kind = 'continuous'
    chain = arm((kind, Z, '0 0 0', 0, 0), (kind, Z, f'{L1} 0 0', 0, 0),
                (kind, Z, f'{L2} 0 0', 0, 0), tool=f'{L3} 0 0')
    turns = np.arange(4 * 300 + 1) / 300.0
    result = solver(chain, rest=[0.0, 1.0, 0.5], pull=0.05).solve(arc(0.5, TURN * turns))
    assert result.reached.all()
    assert_array_equal(np.flatnonzero(result.jumped), [0])
    # Free motion is the same in each turn, however many came before.
    assert_allclose(result.joints[-1] - result.joints[-301], [TURN, 0.0, 0.0], atol=1e-4)


def test_a_pose_missed_by_its_angle_alone_is_not_reached() -> None:
    # Three slides and a wrist about one point: position and orientation are independent.
    slide, turn = ('prismatic', '0 0 0', -1.0, 1.0), ('revolute', '0 0 0', -0.5, 0.5)
    chain = arm(*((kind, axis, xyz, low, high) for (kind, xyz, low, high), axis in (
        (slide, '1 0 0'), (slide, '0 1 0'), (slide, Z),
        (turn, Z), (turn, '0 1 0'), (turn, '1 0 0'))), tool='0 0 0')
    assert orientation_possible(chain)
    path = PathSolver(chain, reach_m=1.0, with_orientation=True)
    angles = np.array([0.4, 0.5 + 1e-5, 0.8])
    turned = np.stack([np.sin(angles / 2), 0 * angles, 0 * angles, np.cos(angles / 2)], axis=1)
    result = path.solve(np.tile([0.3, -0.2, 0.1], (3, 1)), turned)
    assert_allclose(result.position_error_m, 0.0, atol=1e-7)
    assert_allclose(result.orientation_error_rad, [0.0, 1e-5, 0.3], atol=1e-7)
    assert_array_equal(result.reached, [True, False, False])
    with pytest.raises(ValueError, match=r'orientations must have shape \(1, 4\), got None'):
        path.solve([[0.0, 0.0, 0.0]])
    unknown = path.solve([[0.3, -0.2, 0.1]], [[np.nan, 0.0, 0.0, 1.0]])
    assert not unknown.asked[0]


def test_other_branches_are_tried_again_while_targets_stay_out_of_reach() -> None:
    # Out of the plane, round to where only the other elbow serves, and into the plane again.
    angles = np.concatenate([
        np.linspace(1.8, 2.0, 30), np.linspace(2.0, 3.0, 20), np.full(70, 3.0)])
    targets = arc(0.35, angles)
    targets[30:50, 2] = 0.05
    chain = two_links()
    result = solver(chain, rest=[0.0, -1.0]).solve(targets)
    assert result.reached[:30].all()
    assert not result.reached[30:52].any()
    assert np.all(result.joints[:52, 1] < 0.0)
    back = int(np.argmax(result.reached[50:])) + 50
    assert back == 80  # the 50th target since the last search
    assert result.reached[back:].all()
    assert_array_equal(np.flatnonzero(result.jumped), [0, back])
    assert np.all(result.joints[back:, 1] > 0.0)


def test_rows_without_target_ask_nothing() -> None:
    targets = arc(0.4, np.linspace(0.0, 0.3, 20))
    targets[5:9, 1] = np.nan
    result = solver(two_links(), rest=[0.0, 1.0]).solve(targets)
    assert_array_equal(np.flatnonzero(~result.asked), [5, 6, 7, 8])
    assert_array_equal(result.reached, result.asked)
    assert np.isnan(result.joints[5:9]).all()
    assert np.isnan(result.position_error_m[5:9]).all()
    assert not result.at_limit[5:9].any()
    assert_array_equal(np.flatnonzero(result.jumped), [0])
    assert np.isnan(result.orientation_error_rad).all()


@pytest.mark.parametrize('make', [two_links, three_links])
def test_windows_of_any_size_give_the_same_postures(make: Callable[[], SerialChain]) -> None:
    radius = 0.5 + 0.3 * np.sin(np.linspace(0.0, 9.0, 240))  # in reach and out of it
    targets = arc(radius, np.linspace(-1.0, 1.0, 240))
    whole = solver(make()).solve(targets)
    pieces = solver(make())
    parts = [pieces.solve(part) for part in np.split(targets, [1, 7, 100, 101])]
    assert_array_equal(whole.joints, np.concatenate([part.joints for part in parts]))
    assert_array_equal(whole.jumped, np.concatenate([part.jumped for part in parts]))
    pieces.restart()
    assert_array_equal(pieces.solve(targets).joints, whole.joints)


def test_a_path_that_starts_stretched_leaves_the_singular_posture() -> None:
    # Straight toward the shoulder: the error lies where no joint can move the tip to.
    radius = np.linspace(L1 + L2, 0.3, 100)
    result = solver(two_links()).solve(arc(radius, 0.0 * radius))
    assert result.reached.all()


@pytest.mark.parametrize(('period', 'settle'), [(0.02, 2.0), (0.5, 1.0)])
def test_pull_share_settles_with_its_time_constant(period: float, settle: float) -> None:
    left = (1.0 - pull_share(period, settle)) ** (settle / period)
    assert_allclose(left, math.exp(-1.0))


def test_what_cannot_be_asked_is_refused() -> None:
    chain = two_links()
    assert not orientation_possible(chain)
    with pytest.raises(ValueError, match='orientation needs 6 or more joints, and there are 2'):
        PathSolver(chain, reach_m=0.5, with_orientation=True)
    with pytest.raises(ValueError, match='the reach must be positive, got nan'):
        PathSolver(chain, reach_m=math.nan, with_orientation=False)
    with pytest.raises(ValueError, match='the pull must lie between 0 and 1, got 1.5'):
        solver(chain, pull=1.5)
    with pytest.raises(ValueError, match='rest needs 2 positions inside the limits'):
        solver(chain, rest=[0.0, 3.2])
    with pytest.raises(ValueError, match=r'positions must have shape \(m, 3\), got \(3,\)'):
        solver(chain).solve([0.1, 0.2, 0.0])
    fixed = SerialChain.from_description(chain.description, 'l2', 'tip')
    with pytest.raises(ValueError, match='without moving joints'):
        solver(fixed)


def test_after_an_interruption_the_branch_of_the_last_posture_is_kept() -> None:
    # The rest lies on the other branch; only the last posture tells which one was followed.
    path = solver(two_links(), rest=elbow(0.35, 0.0, -1.0), pull=0.0)
    path.solve(arc(0.4, np.linspace(0.0, 0.3, 20)))
    path.rest[:] = path._rest[:] = elbow(0.35, 0.0, 1.0)
    path.interrupt()
    result = path.solve(arc(0.38, np.array([0.5, 0.51])))
    assert_array_equal(result.jumped, [True, False])
    assert np.all(result.joints[:, 1] < 0.0)
    path.restart()
    assert np.all(path.solve(arc(0.38, np.array([0.5]))).joints[:, 1] > 0.0)


def test_joints_are_searched_at_the_whole_turn_nearest_to_the_robot() -> None:
    chain = arm(('revolute', Z, '0 0 0', -9.0, 9.0), ('revolute', Z, f'{L1} 0 0', -9.0, 9.0),
                tool=f'{L2} 0 0')
    for turns in ((-1, 0), (0, -1), (0, 0)):
        start = np.array(elbow(0.3, 0.2, 1.0)) + TURN * np.array(turns)
        result = solver(chain, rest=start).solve([[-0.05, 0.35, 0.0]])
        expected = np.array(elbow(-0.05, 0.35, 1.0)) + TURN * np.array(turns)
        assert_allclose(result.joints[0], expected, atol=1e-5)


def test_whole_turns_are_taken_as_the_limits_let_them() -> None:
    chain = arm(('revolute', Z, '0 0 0', -9.0, 9.0), ('revolute', Z, f'{L1} 0 0', -3.0, 4.0),
                ('prismatic', '1 0 0', f'{L2} 0 0', -9.0, 9.0), tool='0 0 0')
    found = solver(chain)._unwound(np.array([[1.0, 2.0, 1.0]]), np.array([-6.0, -5.0, 8.0]))
    assert_allclose(found, [[1.0 - TURN, 2.0, 1.0]])
