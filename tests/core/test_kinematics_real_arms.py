# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Real robots' descriptions against pinocchio and their makers' Denavit-Hartenberg tables.

The descriptions are those of the package example-robot-data 6.0.0 (a test extra, 131 MB).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
import robot_data
from numpy.testing import assert_allclose
from scipy.optimize import differential_evolution, minimize

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.manipulability import generic_rank, manipulability_norm
from teleop_eval.core.reach import find_reach, find_shoulder
from teleop_eval.core.urdf import parse_urdf

robot_data.need()

# file, base, tip, independent variables of the chain
ARMS = {
    'panda': ('panda_description/urdf/panda.urdf', 'panda_link0', 'panda_hand_tcp', 7),
    'panda_finger': ('panda_description/urdf/panda.urdf', 'panda_link0', 'panda_rightfinger', 8),
    'ur3': ('ur_description/urdf/ur3_robot.urdf', 'base_link', 'tool0', 6),
    'ur5': ('ur_description/urdf/ur5_robot.urdf', 'base_link', 'tool0', 6),
    'ur10': ('ur_description/urdf/ur10_robot.urdf', 'base_link', 'tool0', 6),
    'xarm7': ('xarm_description/urdf/xarm7.urdf', 'link_base', 'link_eef', 7),
    'kinova': ('kinova_description/robots/kinova.urdf', 'base', 'j2s6s200_end_effector', 6),
    'so101': ('so_arm_description/urdf/so101.urdf', 'base_link', 'gripper_frame_link', 5),
    'z1': ('z1_description/urdf/z1.urdf', 'world', 'gripperMover', 7),
    'baxter_left': ('baxter_description/urdf/baxter.urdf', 'torso', 'left_gripper', 7),
    'baxter_right': ('baxter_description/urdf/baxter.urdf', 'torso', 'right_gripper', 7),
    'pr2_left': ('pr2_description/urdf/pr2.urdf', 'torso_lift_link', 'l_gripper_tool_frame', 7),
    'pr2_lift': ('pr2_description/urdf/pr2.urdf', 'base_link', 'r_gripper_tool_frame', 8),
    'pr2_finger': (
        'pr2_description/urdf/pr2.urdf', 'torso_lift_link', 'l_gripper_l_finger_tip_link', 8,
    ),
    'tiago': (
        'tiago_description/robots/tiago_no_hand.urdf', 'base_link', 'wrist_ft_tool_link', 8,
    ),
    'tiago_pro_finger': (
        'tiago_pro_description/robots/tiago_pro.urdf',
        'torso_lift_link', 'gripper_right_fingertip_right_link', 8,
    ),
    'talos_left': (
        'talos_data/robots/talos_reduced.urdf', 'torso_2_link', 'gripper_left_base_link', 7,
    ),
    'talos_right': (
        'talos_data/robots/talos_reduced.urdf', 'torso_2_link', 'gripper_right_base_link', 7,
    ),
    'romeo_left': ('romeo_description/urdf/romeo.urdf', 'torso', 'l_gripper', 7),
    'g1_left': (
        'g1_description/urdf/g1_29dof_rev_1_0.urdf', 'torso_link', 'left_rubber_hand', 7,
    ),
    'g1_right': (
        'g1_description/urdf/g1_29dof_rev_1_0.urdf', 'torso_link', 'right_rubber_hand', 7,
    ),
    'icub_right': ('icub_description/robots/icub.urdf', 'chest', 'r_gripper', 7),
    'centauro': ('centauro_description/urdf/centauro.urdf', 'torso_2', 'arm2_8', 6),
    'human_right': ('human_description/robots/human.urdf', 'middle_pelvis', 'right_hand', 13),
    'human_left': ('human_description/robots/human.urdf', 'middle_thorax', 'left_hand', 8),
    # Across branches and upward: joints walked backward.
    'talos_hand_to_hand': (
        'talos_data/robots/talos_reduced.urdf',
        'gripper_left_base_link', 'gripper_right_base_link', 14,
    ),
    'tiago_upward': (
        'tiago_description/robots/tiago_no_hand.urdf', 'wrist_ft_tool_link', 'base_link', 8,
    ),
}


def chain_of(name: str) -> SerialChain:
    return robot_data.chain(*ARMS[name][:3])


def samples(chain: SerialChain, count: int, seed: int) -> np.ndarray:
    lower, upper = np.maximum(chain.lower, -math.pi), np.minimum(chain.upper, math.pi)
    return np.random.default_rng(seed).uniform(lower, upper, (count, chain.size))


class PinocchioChain:
    """The same chain by pinocchio, which shares no code with this project."""

    def __init__(self, file: str, base: str, tip: str, *, mimic: bool = True) -> None:
        self.pin = pytest.importorskip('pinocchio', reason='pin (test extra) is not installed')
        # Without the flag pinocchio lets mimic joints move freely.
        self.model = self.pin.buildModelFromXML(robot_data.text_of(file), mimic=mimic)
        self.data = self.model.createData()
        self.base, self.tip = (
            self.model.getFrameId(link, self.pin.FrameType.BODY) for link in (base, tip)
        )
        self.rest = self.pin.neutral(self.model)

    def configuration(self, names: tuple[str, ...], q: np.ndarray) -> np.ndarray:
        full = self.rest.copy()
        for name, value in zip(names, q, strict=True):
            joint = self.model.joints[self.model.getJointId(name)]
            # A continuous joint is a cosine and a sine.
            numbers = [value] if joint.nq == 1 else [math.cos(value), math.sin(value)]
            full[joint.idx_q:joint.idx_q + joint.nq] = numbers
        return full

    def pose_and_jacobian(
        self, names: tuple[str, ...], q: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return position, rotation and Jacobian of the tip against the base, in base axes."""
        pin, full = self.pin, self.configuration(names, q)
        pin.computeJointJacobians(self.model, self.data, full)
        pin.updateFramePlacements(self.model, self.data)
        base, tip = self.data.oMf[self.base], self.data.oMf[self.tip]
        of_base, of_tip = (
            pin.getFrameJacobian(
                self.model, self.data, frame, pin.ReferenceFrame.LOCAL_WORLD_ALIGNED
            )
            for frame in (self.base, self.tip)
        )
        relative = of_tip - of_base
        arm = (tip.translation - base.translation)[:, None]
        relative[:3] -= np.cross(of_base[3:], arm, axis=0)
        turn = base.rotation.T
        columns = [self.model.joints[self.model.getJointId(name)].idx_v for name in names]
        jacobian = np.concatenate([turn @ relative[:3], turn @ relative[3:]])[:, columns]
        pose = base.inverse() * tip
        return pose.translation, pose.rotation, jacobian


@pytest.mark.parametrize('name', ARMS)
def test_pose_and_jacobian_equal_pinocchio(name: str) -> None:
    file, base, tip, size = ARMS[name]
    chain = chain_of(name)
    assert chain.size == size
    # pinocchio refuses Romeo's fingers, which are listed before what drives them.
    other = PinocchioChain(file, base, tip, mimic=name != 'romeo_left')
    q = samples(chain, 25, seed=1)
    pose, jacobian = chain.forward(q), chain.jacobian(q)
    assert_allclose(chain.positions(q), pose.positions, atol=1e-14)
    for index, row in enumerate(q):
        position, rotation, slope = other.pose_and_jacobian(chain.joint_names, row)
        assert_allclose(pose.positions[index], position, atol=1e-9)
        assert_allclose(pose.rotations[index], rotation, atol=1e-9)
        assert_allclose(jacobian[index], slope, atol=1e-9)


@pytest.mark.parametrize('name', ['panda', 'ur5', 'tiago', 'human_left', 'talos_right'])
def test_limits_equal_pinocchio(name: str) -> None:
    file, base, tip, _ = ARMS[name]
    chain, model = chain_of(name), PinocchioChain(file, base, tip).model
    joints = [model.joints[model.getJointId(variable)] for variable in chain.joint_names]
    columns = [joint.idx_q for joint in joints]
    assert_allclose(chain.lower, model.lowerPositionLimit[columns])
    assert_allclose(chain.upper, model.upperPositionLimit[columns])
    assert_allclose(chain.velocity_limits, model.velocityLimit[[j.idx_v for j in joints]])


def test_manipulability_equals_pinocchio_jacobians() -> None:
    chain = chain_of('panda')
    other = PinocchioChain(*ARMS['panda'][:3])
    q = samples(chain, 25, seed=2)
    jacobians = [other.pose_and_jacobian(chain.joint_names, row)[2][:3] for row in q]
    expected = [math.sqrt(np.linalg.det(j @ j.T)) / 0.9**3 for j in jacobians]
    assert generic_rank(chain) == 3
    assert_allclose(manipulability_norm(chain, q, 0.9), expected, rtol=1e-9)


def test_kinova_limits_on_continuous_joints_are_ignored() -> None:
    chain = chain_of('kinova')
    assert chain.kinds.count('continuous') == 3
    endless = np.array([kind == 'continuous' for kind in chain.kinds])
    assert_allclose(chain.upper[endless], math.inf)


def test_mimic_joints_in_the_chain_are_driven() -> None:
    assert 'l_gripper_l_finger_joint' in chain_of('pr2_finger').joint_names
    assert 'l_gripper_l_finger_tip_joint' not in chain_of('pr2_finger').joint_names
    # The right finger follows the left one, which is no part of this chain.
    assert chain_of('panda_finger').joint_names[-1] == 'panda_finger_joint1'


def turn_z(angle: float) -> np.ndarray:
    c, s = math.cos(angle), math.sin(angle)
    return np.array([[c, -s, 0, 0], [s, c, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1.0]])


def turn_x(angle: float) -> np.ndarray:
    c, s = math.cos(angle), math.sin(angle)
    return np.array([[1, 0, 0, 0], [0, c, -s, 0], [0, s, c, 0], [0, 0, 0, 1.0]])


def shift(x: float, z: float) -> np.ndarray:
    matrix = np.eye(4)
    matrix[[0, 2], 3] = x, z
    return matrix


def test_ur5_equals_the_table_of_its_maker() -> None:
    # Universal Robots' DH parameters, from memory; their agreement with the URDF vouches for
    # them. The table is in `base`, half a turn away from `base_link`.
    d = [0.089159, 0.0, 0.0, 0.10915, 0.09465, 0.0823]
    a = [0.0, -0.425, -0.39225, 0.0, 0.0, 0.0]
    alpha = [math.pi / 2, 0.0, 0.0, math.pi / 2, -math.pi / 2, 0.0]
    description = parse_urdf(robot_data.text_of(ARMS['ur5'][0]))
    chain = SerialChain.from_description(description, 'base', 'tool0')
    q = samples(chain, 50, seed=3)
    pose = chain.forward(q)
    for index, row in enumerate(q):
        table = np.eye(4)
        for joint in range(6):
            table = table @ turn_z(row[joint]) @ shift(a[joint], d[joint]) @ turn_x(alpha[joint])
        assert_allclose(pose.positions[index], table[:3, 3], atol=1e-9)
        assert_allclose(pose.rotations[index], table[:3, :3], atol=1e-9)


def test_panda_equals_the_table_of_its_maker() -> None:
    # Franka's modified DH parameters (Craig), from memory; agreement with the URDF vouches.
    a = [0.0, 0.0, 0.0, 0.0825, -0.0825, 0.0, 0.088, 0.0]
    d = [0.333, 0.0, 0.316, 0.0, 0.384, 0.0, 0.0, 0.107]
    alpha = [0, -math.pi / 2, math.pi / 2, math.pi / 2, -math.pi / 2, math.pi / 2,
             math.pi / 2, 0]
    description = parse_urdf(robot_data.text_of(ARMS['panda'][0]))
    chain = SerialChain.from_description(description, 'panda_link0', 'panda_link8')
    q = samples(chain, 50, seed=4)
    pose = chain.forward(q)
    for index, row in enumerate(q):
        table = np.eye(4)
        for joint, angle in enumerate([*row, 0.0]):
            table = table @ turn_x(alpha[joint]) @ shift(a[joint], 0.0)
            table = table @ turn_z(angle) @ shift(0.0, d[joint])
        assert_allclose(pose.positions[index], table[:3, 3], atol=1e-9)
        assert_allclose(pose.rotations[index], table[:3, :3], atol=1e-9)


@pytest.mark.parametrize(
    ('name', 'height'),
    [('panda', 0.333), ('ur5', 0.089159)],  # d1 of the tables above
)
def test_shoulder_height_is_d1_of_the_table(name: str, height: float) -> None:
    chain = chain_of(name)
    q = samples(chain, 5, seed=5)
    assert_allclose(find_shoulder(chain).positions(q), [[0, 0, height]] * 5, atol=1e-9)


def test_a_lifting_column_carries_the_shoulder() -> None:
    chain = chain_of('tiago')
    shoulder = find_shoulder(chain)
    q = samples(chain, 20, seed=6)
    positions = shoulder.positions(q)
    assert chain.kinds[0] == 'prismatic'
    assert_allclose(positions[:, 2] - positions[0, 2], q[:, 0] - q[0, 0], atol=1e-6)
    assert_allclose(np.ptp(positions[:, :2], axis=0), [0, 0], atol=1e-6)


def test_pr2_reaches_the_sum_of_its_link_offsets() -> None:
    # Nothing keeps this arm from stretching straight: the lengths add up, 1.001 m.
    description = chain_of('pr2_left').description
    offsets = ['l_shoulder_lift_joint', 'l_elbow_flex_joint', 'l_wrist_roll_joint',
               'l_gripper_palm_joint', 'l_gripper_tool_joint', 'l_upper_arm_joint',
               'l_forearm_joint', 'l_forearm_roll_joint', 'l_wrist_flex_joint']
    length = sum(
        float(np.linalg.norm(description.joints[name].origin_xyz)) for name in offsets
    )
    chain = chain_of('pr2_left')
    assert_allclose(length, 1.001, atol=1e-12)
    assert_allclose(find_reach(chain, find_shoulder(chain)).length_m, length, rtol=1e-9)


@pytest.mark.parametrize('name', ['ur5', 'z1', 'so101'])
def test_reach_equals_an_independent_global_search(name: str) -> None:
    chain = chain_of(name)
    shoulder = find_shoulder(chain)
    box = list(zip(chain.lower, chain.upper, strict=True))

    def shortfall(q: np.ndarray) -> np.ndarray:
        rows = np.atleast_2d(q.T)
        return -np.linalg.norm(chain.positions(rows) - shoulder.positions(rows), axis=1)

    other = differential_evolution(
        shortfall, box, vectorized=True, updating='deferred', seed=1, maxiter=400, tol=1e-10
    )
    reach = find_reach(chain, shoulder)
    assert reach.length_m >= -float(np.max(other.fun)) - 1e-12
    assert_allclose(reach.length_m, -other.fun, rtol=1e-6)


@pytest.mark.parametrize('name', ['ur5', 'z1'])
def test_single_local_searches_end_folded_where_the_reach_does_not(name: str) -> None:
    chain = chain_of(name)
    shoulder = find_shoulder(chain)
    reach = find_reach(chain, shoulder).length_m

    def shortfall(q: np.ndarray) -> float:
        return -float(np.linalg.norm(chain.positions([q]) - shoulder.positions([q])))

    box = list(zip(chain.lower, chain.upper, strict=True))
    ends = [
        -minimize(shortfall, start, method='L-BFGS-B', bounds=box).fun
        for start in samples(chain, 25, seed=7)
    ]
    assert min(ends) < 0.5 * reach
    assert max(ends) <= reach + 1e-9
