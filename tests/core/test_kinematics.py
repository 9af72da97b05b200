# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Serial chains against closed forms, published tables and independent constructions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation

from teleop_eval.core.description import RobotDescription
from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf

L1, L2 = 0.3, 0.25
WIDE = (-10.0, 10.0)


def joint(
    name: str,
    parent: str,
    child: str,
    *,
    kind: str = 'revolute',
    xyz: tuple[float, ...] = (0.0, 0.0, 0.0),
    rpy: tuple[float, ...] = (0.0, 0.0, 0.0),
    axis: tuple[float, ...] = (0.0, 0.0, 1.0),
    limits: tuple[float, float] = WIDE,
    mimic: tuple[str, float, float] | None = None,
) -> str:
    def words(numbers: tuple[float, ...]) -> str:
        return ' '.join(f'{number:.17g}' for number in numbers)

    led = ''
    if mimic is not None:
        led = f'<mimic joint="{mimic[0]}" multiplier="{mimic[1]}" offset="{mimic[2]}"/>'
    return (
        f'<joint name="{name}" type="{kind}"><parent link="{parent}"/><child link="{child}"/>'
        f'<origin xyz="{words(xyz)}" rpy="{words(rpy)}"/><axis xyz="{words(axis)}"/>'
        f'<limit lower="{limits[0]}" upper="{limits[1]}" velocity="2"/>{led}</joint>'
    )


def robot(*joints: str, links: str) -> RobotDescription:
    names = ''.join(f'<link name="{name}"/>' for name in links.split())
    return parse_urdf(f'<robot name="r">{names}{"".join(joints)}</robot>')


def planar(first: float = L1, second: float = L2) -> SerialChain:
    description = robot(
        joint('q1', 'base', 'upper'),
        joint('q2', 'upper', 'lower', xyz=(first, 0.0, 0.0)),
        joint('end', 'lower', 'tip', kind='fixed', xyz=(second, 0.0, 0.0)),
        links='base upper lower tip',
    )
    return SerialChain.from_description(description, 'base', 'tip')


def mechanism() -> RobotDescription:
    """Return a tree with two branches, all kinds of joints and two mimic joints."""
    return robot(
        joint('lift', 'root', 'trunk', kind='prismatic', xyz=(0.1, 0, 0.4), axis=(0, 0.6, 0.8)),
        joint('a1', 'trunk', 'a_1', xyz=(0, 0.2, 0), rpy=(0.3, -0.2, 0.9), axis=(1, 2, 3)),
        joint('a2', 'a_1', 'a_2', kind='continuous', xyz=(0.3, 0, 0.1), rpy=(0, 0.5, 0)),
        joint(
            'a3', 'a_2', 'a_3', xyz=(0.2, 0.1, 0), axis=(0, 1, 0), mimic=('a2', -0.5, 0.2)
        ),
        joint('a4', 'a_3', 'a_4', kind='fixed', xyz=(0.05, 0, 0), rpy=(1, 2, 3)),
        joint('b1', 'trunk', 'b_1', xyz=(0, -0.2, 0), rpy=(-0.3, 0.2, 0), axis=(0, -1, 0)),
        joint(
            'b2',
            'b_1',
            'b_2',
            kind='prismatic',
            xyz=(0, 0, -0.3),
            axis=(1, 0, -1),
            mimic=('a1', 0.1, -0.05),
        ),
        links='root trunk a_1 a_2 a_3 a_4 b_1 b_2',
    )


def numeric_jacobian(chain: SerialChain, q: np.ndarray, step: float = 1e-6) -> np.ndarray:
    """Return central differences of the pose, (6, n)."""
    columns = []
    for change in np.eye(chain.size) * step:
        ahead, behind = chain.forward([q + change]), chain.forward([q - change])
        turned = Rotation.from_matrix(ahead.rotations[0] @ behind.rotations[0].T).as_rotvec()
        moved = ahead.positions[0] - behind.positions[0]
        columns.append(np.concatenate([moved, turned]) / (2.0 * step))
    return np.array(columns).reshape(chain.size, 6).T


# Planar two-link arm. Closed forms from any robotics textbook: x = l1 c1 + l2 c12, ...


def test_planar_position_and_both_inverse_solutions() -> None:
    # The second row is the other elbow, the mirror image about the line to the tip.
    q = np.radians([[30.0, 60.0], [83.991017, -60.0]])
    positions = planar().positions(q)
    assert_allclose(positions[0], [0.259807621, 0.4, 0.0], atol=1e-9)
    assert_allclose(positions[1], positions[0], atol=1e-8)


def test_planar_rotation_is_the_sum_of_the_angles() -> None:
    pose = planar().forward(np.radians([[30.0, 60.0]]))
    assert_allclose(pose.rotations[0], Rotation.from_euler('z', 90, degrees=True).as_matrix(),
                    atol=1e-15)


def test_planar_jacobian_and_its_condition() -> None:
    jacobian = planar().jacobian(np.radians([[30.0, 60.0]]))[0]
    assert_allclose(jacobian[:2], [[-0.4, -0.25], [0.259807621, 0.0]], atol=1e-9)
    assert_allclose(jacobian[2:], [[0, 0], [0, 0], [0, 0], [1, 1]], atol=1e-15)
    assert_allclose(np.linalg.cond(jacobian[:2]), 4.228343, atol=1e-6)


def test_planar_arm_of_ratio_root_two_is_isotropic_at_135_degrees() -> None:
    q = [[0.7, math.radians(135.0)]]
    jacobian = planar(math.sqrt(2.0), 1.0).jacobian(q)[0, :2]
    assert_allclose(np.linalg.cond(jacobian), 1.0, rtol=1e-12)


# PUMA 560, standard Denavit-Hartenberg table of Corke & Armstrong-Helouvry 1994, "A search for
# consensus among model parameters reported for the PUMA 560 robot", Proc. IEEE ICRA, 1608-1613.
PUMA = [  # d, a, alpha
    (0.0, 0.0, math.pi / 2),
    (0.0, 0.4318, 0.0),
    (0.15005, 0.0203, -math.pi / 2),
    (0.4318, 0.0, math.pi / 2),
    (0.0, 0.0, -math.pi / 2),
    (0.0, 0.0, 0.0),
]


def puma() -> SerialChain:
    joints, xyz, rpy = [], (0.0, 0.0, 0.0), (0.0, 0.0, 0.0)
    for index, (d, a, alpha) in enumerate(PUMA):
        joints.append(joint(f'q{index}', f'l{index}', f'l{index + 1}', xyz=xyz, rpy=rpy))
        # Rz(theta) Tz(d) Tx(a) Rx(alpha): what follows theta is the next joint's origin.
        xyz, rpy = (a, 0.0, d), (alpha, 0.0, 0.0)
    joints.append(joint('flange', 'l6', 'tool', kind='fixed', xyz=xyz, rpy=rpy))
    links = ' '.join(f'l{index}' for index in range(7)) + ' tool'
    return SerialChain.from_description(robot(*joints, links=links), 'l0', 'tool')


@pytest.mark.parametrize(
    ('q', 'position', 'rotation', 'tolerance'),
    [
        (np.zeros(6), (0.4521, -0.15005, 0.4318), np.eye(3), 1e-12),
        (np.radians([0, 90, -90, 0, 0, 0]), (0.0203, -0.15005, 0.8636), np.eye(3), 1e-12),
        # Printed in the kinematics notebook of the public toolbox that carries the table.
        (
            np.radians([0, 45, 180, 0, 45, 0]),
            (0.596303, -0.15005, -0.014354),
            [[0, 0, 1], [0, 1, 0], [-1, 0, 0]],
            1e-6,
        ),
        # Recomputed with pinocchio.
        (
            np.arange(1, 7) / 10.0,
            (0.247803, -0.125940, 0.474458),
            [
                [0.121698, -0.606672, -0.785582],
                [0.818364, 0.509197, -0.266456],
                [0.561667, -0.610465, 0.558446],
            ],
            1e-6,
        ),
    ],
)
def test_puma_560_poses(
    q: np.ndarray, position: tuple[float, ...], rotation: np.ndarray, tolerance: float
) -> None:
    pose = puma().forward([q])
    assert_allclose(pose.positions[0], position, atol=tolerance)
    assert_allclose(pose.rotations[0], rotation, atol=tolerance)


def test_puma_560_manipulability_of_all_six_rows() -> None:
    # sqrt(det(J J^T)) from pinocchio's Jacobian.
    q = np.array([np.arange(1, 7) / 10.0, np.radians([0, 45, 180, 0, 45, 0])])
    assert_allclose(
        np.abs(np.linalg.det(puma().jacobian(q))), [0.0202727949, 0.0786171653], atol=1e-8
    )


# Structure of the chain.


def test_variables_are_named_in_chain_order_with_their_limits() -> None:
    chain = SerialChain.from_description(mechanism(), 'root', 'a_4')
    assert chain.joint_names == ('lift', 'a1', 'a2')
    assert chain.kinds == ('prismatic', 'revolute', 'continuous')
    assert_allclose(chain.lower, [-10.0, -10.0, -math.inf])
    assert_allclose(chain.upper, [10.0, 10.0, math.inf])
    assert_allclose(chain.velocity_limits, [2.0, 2.0, 2.0])
    assert chain.prismatic.tolist() == [True, False, False]


def test_a_mimic_joint_stands_for_a_driver_outside_the_chain() -> None:
    chain = SerialChain.from_description(mechanism(), 'trunk', 'b_2')
    assert chain.joint_names == ('b1', 'a1')
    assert chain.kinds == ('revolute', 'revolute')
    # b2 slides by 0.1 a1 - 0.05 along (1, 0, -1) / sqrt 2 of its frame.
    origin = np.array([0.0, -0.2, 0.0])
    turn = Rotation.from_euler('xyz', [-0.3, 0.2, 0.0])
    slide = np.array([0.0, 0.0, -0.3]) + 0.15 * np.array([1.0, 0.0, -1.0]) / math.sqrt(2.0)
    assert_allclose(chain.positions([[0.0, 2.0]])[0], origin + turn.apply(slide), atol=1e-15)


def test_mimic_of_a_mimic_is_folded_through() -> None:
    description = robot(
        joint('m', 'base', 'a'),
        joint('n', 'a', 'b', mimic=('m', 2.0, 0.1)),
        joint('o', 'b', 'c', mimic=('n', -1.5, 0.2)),
        links='base a b c',
    )
    chain = SerialChain.from_description(description, 'b', 'c')
    assert chain.joint_names == ('m',)
    angle = -1.5 * (2.0 * 0.4 + 0.1) + 0.2
    expected = Rotation.from_rotvec([0, 0, angle]).as_matrix()
    assert_allclose(chain.forward([[0.4]]).rotations[0], expected, atol=1e-15)
    assert_allclose(chain.jacobian([[0.4]])[0, 5], [-3.0])


@pytest.mark.parametrize('pair', [('root', 'a_4'), ('a_4', 'b_2'), ('trunk', 'b_2')])
def test_a_chain_walked_backward_is_the_inverse(pair: tuple[str, str]) -> None:
    description = mechanism()
    there = SerialChain.from_description(description, *pair)
    back = SerialChain.from_description(description, *reversed(pair))
    assert sorted(back.joint_names) == sorted(there.joint_names)
    q = np.random.default_rng(1).uniform(-2.0, 2.0, (40, there.size))
    order = [there.joint_names.index(name) for name in back.joint_names]
    pose, inverse = there.forward(q), back.forward(q[:, order])
    turned_back = pose.rotations.transpose(0, 2, 1)
    assert_allclose(inverse.rotations, turned_back, atol=1e-14)
    expected = -np.einsum('nij,nj->ni', turned_back, pose.positions)
    assert_allclose(inverse.positions, expected, atol=1e-14)


def test_across_branches_the_poses_compose() -> None:
    description = mechanism()
    left = SerialChain.from_description(description, 'root', 'a_4')
    right = SerialChain.from_description(description, 'root', 'b_2')
    across = SerialChain.from_description(description, 'a_4', 'b_2')
    assert across.joint_names == ('a2', 'a1', 'b1')
    values = dict(zip(('lift', 'a1', 'a2', 'b1'), (0.2, -0.7, 1.9, 0.4), strict=True))
    a, b, c = (
        chain.forward([[values[name] for name in chain.joint_names]])
        for chain in (left, right, across)
    )
    assert_allclose(a.rotations[0] @ c.rotations[0], b.rotations[0], atol=1e-14)
    joined = a.positions[0] + a.rotations[0] @ c.positions[0]
    assert_allclose(joined, b.positions[0], atol=1e-14)


@pytest.mark.parametrize(
    'pair', [('root', 'a_4'), ('a_4', 'root'), ('a_4', 'b_2'), ('b_2', 'a_3'), ('trunk', 'b_2')]
)
def test_jacobian_equals_finite_differences_on_a_mixed_tree(pair: tuple[str, str]) -> None:
    chain = SerialChain.from_description(mechanism(), *pair)
    for q in np.random.default_rng(2).uniform(-2.0, 2.0, (10, chain.size)):
        assert_allclose(chain.jacobian([q])[0], numeric_jacobian(chain, q), atol=1e-8)


def test_joint_axes_are_lines_of_the_urdf() -> None:
    axes = planar().joint_axes(np.radians([[90.0, 10.0], [0.0, 0.0]]))
    assert_allclose(axes.points[0], [[0, 0, 0], [0, L1, 0]], atol=1e-15)
    assert_allclose(axes.points[1], [[0, 0, 0], [L1, 0, 0]], atol=1e-15)
    assert_allclose(axes.directions, np.tile([0.0, 0.0, 1.0], (2, 2, 1)), atol=1e-15)


def test_no_rows_give_no_rows() -> None:
    chain = puma()
    empty = np.empty((0, 6))
    assert chain.positions(empty).shape == (0, 3)
    assert chain.forward(empty).rotations.shape == (0, 3, 3)
    assert chain.jacobian(empty).shape == (0, 6, 6)
    assert chain.joint_axes(empty).points.shape == (0, 6, 3)


def test_a_chain_without_moving_joints_is_a_constant() -> None:
    chain = SerialChain.from_description(mechanism(), 'a_3', 'a_4')
    assert chain.joint_names == ()
    pose = chain.forward(np.empty((2, 0)))
    assert_allclose(pose.positions, [[0.05, 0, 0]] * 2)
    assert_allclose(pose.rotations[1], Rotation.from_euler('xyz', [1, 2, 3]).as_matrix())
    assert chain.jacobian(np.empty((2, 0))).shape == (2, 6, 0)
    itself = SerialChain.from_description(mechanism(), 'a_3', 'a_3')
    assert_allclose(itself.positions(np.empty((1, 0))), [[0, 0, 0]])


def test_nan_stays_in_its_row() -> None:
    q = np.array([[0.1] * 6, [np.nan] + [0.1] * 5, [0.2] * 6])
    positions = puma().positions(q)
    assert np.isfinite(positions[[0, 2]]).all()
    assert np.isnan(positions[1]).any()
    assert np.isfinite(puma().jacobian(q)[[0, 2]]).all()


@pytest.mark.parametrize('q', [np.zeros(6), np.zeros((3, 5)), np.zeros((1, 6, 1))])
def test_a_wrong_shape_is_refused(q: np.ndarray) -> None:
    for method in (puma().forward, puma().positions, puma().jacobian):
        with pytest.raises(ValueError, match=r'must have shape \(N, 6\)'):
            method(q)


@pytest.mark.parametrize(
    ('base', 'tip', 'words'),
    [
        ('trnk', 'a_4', "there is no link 'trnk': did you mean 'trunk'"),
        ('trunk', 'a4', "there is no link 'a4': did you mean 'a_4'"),
        ('trunk', '%', "there is no link '%': the links are "),
    ],
)
def test_an_unknown_link_is_named_with_its_neighbours(base: str, tip: str, words: str) -> None:
    with pytest.raises(DescriptionError, match=words):
        SerialChain.from_description(mechanism(), base, tip)


def test_links_of_two_trees_are_not_connected() -> None:
    description = robot(joint('j', 'a', 'b'), joint('k', 'c', 'd'), links='a b c d')
    with pytest.raises(DescriptionError, match="no joints connect 'a' with 'd'"):
        SerialChain.from_description(description, 'a', 'd')


@pytest.mark.parametrize('kind', ['floating', 'planar'])
def test_kinds_beyond_one_number_are_refused_only_on_the_chain(kind: str) -> None:
    description = robot(
        joint('free', 'world', 'base', kind=kind),
        joint('j', 'base', 'tip'),
        joint('led', 'tip', 'finger', mimic=('free', 1.0, 0.0)),
        links='world base tip finger',
    )
    assert SerialChain.from_description(description, 'base', 'tip').joint_names == ('j',)
    with pytest.raises(DescriptionError, match=f"joint 'free' between the links is {kind}"):
        SerialChain.from_description(description, 'world', 'tip')
    with pytest.raises(DescriptionError, match=f"'led' mimics 'free', which is {kind}"):
        SerialChain.from_description(description, 'base', 'finger')


def test_an_endless_chain_is_refused() -> None:
    links = [f'l{index}' for index in range(3001)]
    joints = [joint(f'j{i}', links[i], links[i + 1]) for i in range(3000)]
    description = robot(*joints, links=' '.join(links))
    assert SerialChain.from_description(description, 'l0', 'l100').size == 100
    with pytest.raises(DescriptionError, match='more than 100 moving joints'):
        SerialChain.from_description(description, 'l0', 'l3000')


# Random chains.


@st.composite
def random_parts(draw: st.DrawFn) -> list[dict[str, object]]:
    number = st.floats(-2.0, 2.0).map(lambda value: round(value, 3))
    triple = st.tuples(number, number, number)
    parts = []
    for _ in range(draw(st.integers(1, 7))):
        kind = draw(st.sampled_from(['revolute', 'revolute', 'continuous', 'prismatic', 'fixed']))
        axis = draw(triple.filter(lambda axis: np.linalg.norm(axis) > 0.1))
        parts.append({'kind': kind, 'xyz': draw(triple), 'rpy': draw(triple), 'axis': axis})
    return parts


@settings(max_examples=60, deadline=None)
@given(random_parts(), st.integers(0, 2**32 - 1))
def test_random_chains_equal_a_product_of_transforms(
    parts: list[dict[str, object]], seed: int
) -> None:
    count = len(parts)
    joints = [joint(f'j{i}', f'l{i}', f'l{i + 1}', **part) for i, part in enumerate(parts)]
    links = ' '.join(f'l{i}' for i in range(count + 1))
    chain = SerialChain.from_description(robot(*joints, links=links), 'l0', f'l{count}')
    q = np.random.default_rng(seed).uniform(-3.0, 3.0, chain.size)

    turn, place, left = Rotation.identity(), np.zeros(3), list(q)
    for part in parts:
        place = place + turn.apply(part['xyz'])
        turn = turn * Rotation.from_euler('xyz', part['rpy'])
        axis = np.array(part['axis']) / np.linalg.norm(part['axis'])
        if part['kind'] == 'prismatic':
            place = place + turn.apply(axis * left.pop(0))
        elif part['kind'] != 'fixed':
            turn = turn * Rotation.from_rotvec(axis * left.pop(0))

    pose = chain.forward([q])
    assert_allclose(pose.positions[0], place, atol=1e-12)
    assert_allclose(pose.rotations[0], turn.as_matrix(), atol=1e-12)
    assert_allclose(chain.positions([q])[0], place, atol=1e-12)
    assert_allclose(chain.jacobian([q])[0], numeric_jacobian(chain, q), atol=1e-7)
