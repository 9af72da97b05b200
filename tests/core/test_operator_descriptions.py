# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The two operator arms of the config folder, and a tree in another size."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core.description_scaling import scaled
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.reach import find_reach, find_shoulder
from teleop_eval.core.urdf import parse_urdf

CONFIG = Path(__file__).parents[2] / 'config'
HUMAN = ('human_arm', 'human_arm_base', 'finger_tip')
LINKAGE = ('wearable_linkage', 'back_plate', 'hand_grip')
DRAWN_M = 1.75
# Drillis & Contini 1966 as given in Winter, fig. 4.1, shares of stature (second-hand).
UPPER_ARM, FOREARM, HAND = 0.186, 0.146, 0.108
# Boone & Azen 1979, J Bone Joint Surg 61-A:756-759, as tabulated in Norkin & White, Measurement
# of Joint Motion, table A.1, degrees. Adduction is not in it: 45 is common practice.
MOTION_DEG = {
    'shoulder_flexion': (-62, 167), 'shoulder_abduction': (-45, 184),
    'shoulder_rotation': (-104, 69), 'elbow_flexion': (0, 143), 'forearm_rotation': (-82, 76),
    'wrist_flexion': (-75, 76), 'wrist_deviation': (-36, 22)}


def text_of(name: str) -> str:
    return (CONFIG / f'{name}.urdf').read_text(encoding='utf-8')


def chain_of(which: tuple[str, str, str], factor: float = 1.0) -> SerialChain:
    name, base, tip = which
    return SerialChain.from_description(scaled(parse_urdf(text_of(name)), factor), base, tip)


def postures(chain: SerialChain, count: int = 200) -> np.ndarray:
    return np.random.default_rng(5).uniform(chain.lower, chain.upper, (count, chain.size))


def at(chain: SerialChain, **degrees: float) -> np.ndarray:
    """Return the tip (3,) of one posture, other joints at zero."""
    q = [math.radians(degrees.get(name, 0.0)) for name in chain.joint_names]
    return chain.positions([q])[0]


def distance(which: tuple[str, str, str], first: str, second: str, factor: float = 1.0) -> float:
    description = scaled(parse_urdf(text_of(which[0])), factor)
    chain = SerialChain.from_description(description, first, second)
    return float(np.linalg.norm(chain.positions(np.zeros((1, chain.size)))))


@pytest.mark.parametrize('stature', [1.50, DRAWN_M, 1.95])
def test_the_human_segments_have_the_published_proportions(stature) -> None:
    factor = stature / DRAWN_M
    for first, second, share in (('human_arm_base', 'forearm', UPPER_ARM),
                                 ('forearm', 'wrist', FOREARM), ('wrist', 'finger_tip', HAND)):
        assert_allclose(distance(HUMAN, first, second, factor), share * stature, rtol=1e-12)


def test_the_human_joints_have_the_published_ranges() -> None:
    chain = chain_of(HUMAN)
    assert chain.joint_names == tuple(MOTION_DEG)
    limits = np.degrees(np.column_stack([chain.lower, chain.upper]))
    assert_allclose(limits, list(MOTION_DEG.values()), atol=0.05)


def test_the_human_arm_moves_as_its_joints_are_called() -> None:
    """Anatomy as everybody knows it; x forward, y left, z up, a right arm."""
    chain = chain_of(HUMAN)
    arm, lower = 0.44 * DRAWN_M, 0.254 * DRAWN_M
    assert_allclose(at(chain), [0, 0, -arm], atol=1e-12)
    assert_allclose(at(chain, shoulder_flexion=90), [arm, 0, 0], atol=1e-12)
    assert_allclose(at(chain, shoulder_abduction=90), [0, -arm, 0], atol=1e-12)
    assert_allclose(at(chain, elbow_flexion=90), [lower, 0, -0.186 * DRAWN_M], atol=1e-12)
    # Medial rotation brings the bent forearm across the body.
    assert_allclose(at(chain, elbow_flexion=90, shoulder_rotation=60)[:2],
                    [lower * 0.5, lower * math.sqrt(0.75)], atol=1e-12)
    # At zero the palm faces the body: flexion moves the finger tips to the left.
    assert at(chain, wrist_flexion=45)[1] > 0.1
    # The thumb is in front.
    assert at(chain, wrist_deviation=20)[0] > 0.05
    # Pronation turns the palm backwards: then flexion moves the finger tips back.
    assert at(chain, forearm_rotation=70, wrist_flexion=45)[0] < -0.1


@pytest.mark.parametrize('stature', [1.50, DRAWN_M, 1.95])
def test_the_human_shoulder_and_reach(stature) -> None:
    chain = chain_of(HUMAN, stature / DRAWN_M)
    shoulder = find_shoulder(chain)
    assert_allclose(shoulder.positions(np.zeros((1, 7))), [[0, 0, 0]], atol=1e-15)
    reach = find_reach(chain, shoulder)
    assert_allclose(reach.length_m, (UPPER_ARM + FOREARM + HAND) * stature, rtol=1e-9)


def test_the_linkage_by_hand() -> None:
    """Its axes meet where the post carries the lift; stretched, the parts add up."""
    chain = chain_of(LINKAGE)
    shoulder = find_shoulder(chain)
    assert_allclose(shoulder.positions(np.zeros((1, 8)))[0], [-0.04, -0.22, 0.15], atol=1e-15)
    assert_allclose(at(chain), [-0.04 + 0.06 + 0.31 + 0.20 + 0.04 + 0.03 + 0.07, -0.22, 0.15],
                    atol=1e-15)
    reach = find_reach(chain, shoulder)
    assert_allclose(reach.length_m, 0.06 + 0.31 + 0.20 + 0.04 + 0.03 + 0.07 + 0.08, rtol=1e-9)
    named = find_shoulder(chain, 'wearer_shoulder')
    assert_allclose(named.positions(np.zeros((1, 8)))[0], [0.09, -0.19, 0.02], atol=1e-15)


def test_the_linkage_follows_a_whole_human_arm() -> None:
    """It has the three turns and the three places a grip needs."""
    chain = chain_of(LINKAGE)
    ranks = np.linalg.matrix_rank(chain.jacobian(postures(chain, 50)), tol=1e-3)
    assert set(ranks.tolist()) == {6}


@pytest.mark.parametrize('which', [HUMAN, LINKAGE])
@pytest.mark.parametrize('factor', [1.0, 1.9 / DRAWN_M])
def test_the_tip_is_where_an_independent_library_has_it(which, factor) -> None:
    """Pinocchio reads the same text; its placements are scaled by its own means."""
    pinocchio = pytest.importorskip('pinocchio', reason='pin (test extra) is not installed')
    model = pinocchio.buildModelFromXML(text_of(which[0]))
    for place in [*model.jointPlacements, *(frame.placement for frame in model.frames)]:
        place.translation = place.translation * factor
    data = model.createData()
    chain = chain_of(which, factor)
    assert list(model.names)[1:] == list(chain.joint_names)
    if factor == 1.0:
        assert_allclose(model.lowerPositionLimit, chain.lower)
        assert_allclose(model.upperPositionLimit, chain.upper)
    pose = chain.forward(postures(chain))
    for row, position, rotation in zip(postures(chain), pose.positions, pose.rotations,
                                       strict=True):
        pinocchio.framesForwardKinematics(model, data, row)
        tip = data.oMf[model.getFrameId(which[2])]
        assert_allclose(position, tip.translation, atol=1e-12)
        assert_allclose(rotation, tip.rotation, atol=1e-12)


# Scaling


def test_a_scaled_arm_is_the_arm_with_every_length_scaled() -> None:
    for which in (HUMAN, LINKAGE):
        drawn, grown = chain_of(which), chain_of(which, 1.2)
        q = postures(drawn)
        assert_allclose(grown.positions(np.where(drawn.prismatic, 1.2 * q, q)),
                        1.2 * drawn.positions(q), atol=1e-12)
        assert_allclose(grown.upper, np.where(drawn.prismatic, 1.2, 1.0) * drawn.upper)
        assert_allclose(grown.velocity_limits,
                        np.where(drawn.prismatic, 1.2, 1.0) * drawn.velocity_limits)


MIMICS = """<robot name="r"><link name="a"/><link name="b"/><link name="c"/><link name="d"/>
<joint name="turn" type="revolute"><parent link="a"/><child link="b"/><origin xyz="0 0 1"/>
<axis xyz="0 0 1"/><limit lower="-1" upper="1"/></joint>
<joint name="rack" type="prismatic"><parent link="b"/><child link="c"/><origin xyz="1 0 0"/>
<axis xyz="1 0 0"/><limit lower="-9" upper="9"/>
<mimic joint="turn" multiplier="0.5" offset="0.25"/></joint>
<joint name="pinion" type="revolute"><parent link="c"/><child link="d"/><axis xyz="0 0 1"/>
<limit lower="-9" upper="9"/><mimic joint="rack" multiplier="2" offset="0.1"/></joint></robot>"""


def test_racks_and_pinions_keep_their_angles_in_another_size() -> None:
    drawn = parse_urdf(MIMICS)
    pair = [SerialChain.from_description(one, 'a', 'd') for one in (drawn, scaled(drawn, 3.0))]
    q = np.linspace(-1, 1, 9)[:, None]
    small, large = (chain.forward(q) for chain in pair)
    assert_allclose(large.positions, 3.0 * small.positions, atol=1e-12)
    assert_allclose(large.rotations, small.rotations, atol=1e-12)
    # By hand at 1 rad: the rack stands 0.5 + 0.25 out, so the pinion has turned 1.6 more.
    assert_allclose(small.positions[-1], [1.75 * math.cos(1), 1.75 * math.sin(1), 1], atol=1e-12)
    assert_allclose(np.arctan2(small.rotations[-1, 1, 0], small.rotations[-1, 0, 0]), 2.6)


@pytest.mark.parametrize('factor', [0.0, -1.0, math.nan, math.inf])
def test_no_size_is_refused(factor) -> None:
    with pytest.raises(ValueError, match='size factor'):
        scaled(parse_urdf(MIMICS), factor)
