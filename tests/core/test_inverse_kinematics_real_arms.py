# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Inverse kinematics of real arms, checked by forward kinematics of this project and of pinocchio.

The descriptions are those of the package example-robot-data 6.0.0 (a test extra, 131 MB).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
import robot_data
from numpy.testing import assert_allclose, assert_array_equal
from scipy.optimize import minimize

from teleop_eval.core import rotations
from teleop_eval.core.inverse_kinematics import IkResult, PathSolver, orientation_possible
from teleop_eval.core.kinematics import SerialChain

robot_data.need()

TURN = 2.0 * math.pi
# file, base, tip, reach from the shoulder (m) as `find_reach` gives it
ARMS = {
    'panda': ('panda_description/urdf/panda.urdf', 'panda_link0', 'panda_hand_tcp', 0.947),
    'ur5': ('ur_description/urdf/ur5_robot.urdf', 'base_link', 'tool0', 0.950),
    # Three continuous joints.
    'kinova': ('kinova_description/robots/kinova.urdf', 'base', 'j2s6s200_end_effector', 0.985),
    # A sliding column before seven joints.
    'tiago': ('tiago_description/robots/tiago_no_hand.urdf', 'base_link', 'wrist_ft_tool_link',
              0.817),
    'xarm7': ('xarm_description/urdf/xarm7.urdf', 'link_base', 'link_eef', 0.772),
    # Two continuous ones among seven.
    'pr2': ('pr2_description/urdf/pr2.urdf', 'torso_lift_link', 'l_gripper_tool_frame', 1.001),
    # Five joints: the position alone.
    'so101': ('so_arm_description/urdf/so101.urdf', 'base_link', 'gripper_frame_link', 0.441),
}


def chain_of(name: str) -> SerialChain:
    return robot_data.chain(*ARMS[name][:3])


def solver(name: str, *, with_orientation: bool | None = None) -> PathSolver:
    chain = chain_of(name)
    if with_orientation is None:
        with_orientation = orientation_possible(chain)
    return PathSolver(chain, reach_m=ARMS[name][3], with_orientation=with_orientation)


def within(chain: SerialChain, count: int, seed: int) -> np.ndarray:
    lower, upper = np.maximum(chain.lower, -math.pi), np.minimum(chain.upper, math.pi)
    return np.random.default_rng(seed).uniform(lower, upper, (count, chain.size))


def smooth(chain: SerialChain, seed: int, *, count: int = 500) -> np.ndarray:
    """Return a joint path (count, n) inside the limits at 50 Hz."""
    lower, upper = np.maximum(chain.lower, -2.0), np.minimum(chain.upper, 2.0)
    random = np.random.default_rng(seed)
    phase = TURN * np.arange(count)[:, None] / 50.0 * random.uniform(0.05, 0.2, chain.size)
    wave = np.sin(phase + random.uniform(0.0, TURN, chain.size))
    return 0.5 * (lower + upper) + 0.2 * (upper - lower) * wave


def by_pinocchio(name: str, joints: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return tip positions (m, 3) and rotations (m, 3, 3) in base axes."""
    pin = pytest.importorskip('pinocchio', reason='pin (test extra) is not installed')
    file, base, tip, _ = ARMS[name]
    model = pin.buildModelFromXML(robot_data.text_of(file), mimic=True)
    data = model.createData()
    ends = [model.getFrameId(link, pin.FrameType.BODY) for link in (base, tip)]
    positions, turns = [], []
    for row in joints:
        q = pin.neutral(model)
        for joint_name, value in zip(chain_of(name).joint_names, row, strict=True):
            joint = model.joints[model.getJointId(joint_name)]
            # A continuous joint is a cosine and a sine.
            numbers = [value] if joint.nq == 1 else [math.cos(value), math.sin(value)]
            q[joint.idx_q:joint.idx_q + joint.nq] = numbers
        pin.framesForwardKinematics(model, data, q)
        pose = data.oMf[ends[0]].inverse() * data.oMf[ends[1]]
        positions.append(pose.translation)
        turns.append(pose.rotation)
    return np.array(positions), np.array(turns)


def check(name: str, result: IkResult, q: np.ndarray, *, turned: bool) -> None:
    """Check answers to targets made from q by two forward kinematics and the limits."""
    chain = chain_of(name)
    assert np.all((result.joints >= chain.lower) & (result.joints <= chain.upper))
    goal = chain.forward(q)
    own = chain.forward(result.joints)
    for positions, turns in (
        (own.positions, own.rotations), by_pinocchio(name, result.joints),
    ):
        apart = np.linalg.norm(positions - goal.positions, axis=1)
        assert apart[result.reached].max() <= 1e-6
        assert_allclose(result.position_error_m, apart, atol=1e-9)
        if turned:
            angles = rotations.angle_between(
                rotations.from_matrix(turns), rotations.from_matrix(goal.rotations))
            assert angles[result.reached].max() <= 1e-6
            assert_allclose(result.orientation_error_rad, angles, atol=1e-9)


@pytest.mark.parametrize('name', ARMS)
def test_random_targets_inside_the_limits_are_reached(name: str) -> None:
    chain = chain_of(name)
    q = within(chain, 25, seed=11)
    goal = chain.forward(q)
    result = solver(name).solve(goal.positions, rotations.from_matrix(goal.rotations))
    assert result.reached.all()
    check(name, result, q, turned=orientation_possible(chain))


@pytest.mark.parametrize('name', ARMS)
def test_smooth_paths_are_followed(name: str) -> None:
    chain = chain_of(name)
    q = smooth(chain, seed=5)
    goal = chain.forward(q)
    result = solver(name).solve(goal.positions, rotations.from_matrix(goal.rotations))
    assert result.reached.all()
    check(name, result, q, turned=orientation_possible(chain))
    steps = np.abs(np.diff(result.joints, axis=0)).max(axis=1)
    # Between jumps the postures form a path; what it asks of the joints is theirs to bear.
    assert steps[~result.jumped[1:]].max() < 0.5
    assert np.count_nonzero(result.jumped) <= 5


@pytest.mark.parametrize('name', ['panda', 'ur5', 'tiago', 'kinova'])
def test_a_smooth_path_of_positions_is_followed(name: str) -> None:
    q = smooth(chain_of(name), seed=6)
    goal = chain_of(name).forward(q)
    result = solver(name, with_orientation=False).solve(goal.positions)
    assert result.reached.all()
    assert_array_equal(np.flatnonzero(result.jumped), [0])
    check(name, result, q, turned=False)


def least_distance(chain: SerialChain, target: np.ndarray) -> float:
    """Return the tip's least distance from a target, by another minimiser from many starts."""
    box = list(zip(np.maximum(chain.lower, -TURN), np.minimum(chain.upper, TURN), strict=True))

    def gap(q: np.ndarray) -> tuple[float, np.ndarray]:
        arm = chain.positions(q[None, :])[0] - target
        return float(arm @ arm), 2.0 * arm @ chain.jacobian(q[None, :])[0, :3]

    starts = within(chain, 4000, seed=10)
    near = np.argsort(np.linalg.norm(chain.positions(starts) - target, axis=1))
    return math.sqrt(min(
        minimize(gap, start, jac=True, method='L-BFGS-B', bounds=box,
                 options={'ftol': 1e-16, 'gtol': 1e-9, 'maxiter': 200}).fun
        for start in starts[near[:120:40]]))


@pytest.mark.parametrize('name', ['panda', 'ur5', 'tiago', 'so101'])
def test_positions_out_of_reach_are_reported_with_the_closest_point(name: str) -> None:
    chain = chain_of(name)
    directions = np.random.default_rng(8).normal(size=(3, 3))
    directions /= np.linalg.norm(directions, axis=1, keepdims=True)
    middle = chain.positions(within(chain, 200, seed=9)).mean(axis=0)
    targets = middle + 2.5 * ARMS[name][3] * directions
    result = solver(name, with_orientation=False).solve(targets)
    assert result.asked.all()
    assert not result.reached.any()
    assert np.all((result.joints >= chain.lower) & (result.joints <= chain.upper))
    gaps = np.linalg.norm(chain.positions(result.joints) - targets, axis=1)
    assert_allclose(gaps, result.position_error_m, atol=1e-12)
    others = [least_distance(chain, target) for target in targets]
    assert np.all(result.position_error_m <= np.array(others) + 1e-7)


@pytest.mark.parametrize('name', ['panda', 'so101'])
def test_what_only_postures_beyond_a_limit_reach_is_not_reached(name: str) -> None:
    # A copy of the arm with its elbow stopped short; targets are those of the whole arm.
    file, base, tip, reach = ARMS[name]
    del file
    whole, elbow = chain_of(name), {'panda': 3, 'so101': 2}[name]
    short = SerialChain.from_description(whole.description, base, tip)
    low = max(whole.lower[elbow], -math.pi)
    short.upper = whole.upper.copy()
    short.upper[elbow] = low + 0.35 * (whole.upper[elbow] - low)
    targets = whole.positions(within(whole, 12, seed=12))
    free = PathSolver(whole, reach_m=reach, with_orientation=False).solve(targets)
    assert free.reached.all()
    result = PathSolver(short, reach_m=reach, with_orientation=False).solve(targets)
    assert np.all((result.joints >= short.lower) & (result.joints <= short.upper))
    others = np.array([least_distance(short, target) for target in targets])
    assert_array_equal(result.reached, others < 1e-6)
    assert 0 < np.count_nonzero(result.reached) < len(targets)
    assert np.all(result.position_error_m <= others + 1e-6)


def test_poses_out_of_reach_are_not_reached_and_are_followed_as_near_as_can_be() -> None:
    chain = chain_of('panda')
    goal = chain.forward(smooth(chain, seed=7, count=120))
    middle = goal.positions.mean(axis=0)
    targets = middle + np.linspace(1.0, 4.0, 120)[:, None] * (goal.positions - middle)
    turns = rotations.from_matrix(goal.rotations)
    result = solver('panda').solve(targets, turns)
    lost = ~result.reached
    assert 0 < np.count_nonzero(lost) < 120
    pose = chain.forward(result.joints)
    assert_allclose(
        np.linalg.norm(pose.positions - targets, axis=1), result.position_error_m, atol=1e-12)
    # Moving no joint a little inside its limits brings the tool nearer.
    reach = ARMS['panda'][3]
    cost = (result.position_error_m / reach) ** 2 + result.orientation_error_rad ** 2
    for column in range(chain.size):
        for move in (-1e-4, 1e-4):
            q = result.joints.copy()
            q[:, column] += move
            inside = (q[:, column] >= chain.lower[column]) & (q[:, column] <= chain.upper[column])
            pose = chain.forward(q)
            gap = np.linalg.norm(pose.positions - targets, axis=1) / reach
            turn = rotations.angle_between(rotations.from_matrix(pose.rotations), turns)
            assert np.all((gap ** 2 + turn ** 2 >= cost - 1e-10)[lost & inside])
