# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Shoulder rule and reach against closed forms and an independent optimiser."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.optimize import minimize

from teleop_eval.core.errors import DescriptionError
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.reach import find_reach, find_shoulder, shoulder_at_base
from teleop_eval.core.urdf import parse_urdf

L1, L2 = 0.3, 0.25
X, Y, Z = '1 0 0', '0 1 0', '0 0 1'
FREE = (-3.1, 3.1)


def degrees(low: float, high: float) -> tuple[float, float]:
    return math.radians(low), math.radians(high)


def arm(
    *joints: tuple[str, str, str, tuple[float, float]],
    tool: str,
    extra: str = '',
    base: str = 'l0',
    tip: str = 'tip',
) -> SerialChain:
    """Build a chain from (kind, axis, offset before the joint, limits) and the tool's offset."""
    text = '<robot name="r"><link name="l0"/>' + extra
    for index, (kind, axis, xyz, (low, high)) in enumerate(joints):
        text += (
            f'<link name="l{index + 1}"/><joint name="q{index}" type="{kind}">'
            f'<parent link="l{index}"/><child link="l{index + 1}"/>'
            f'<origin xyz="{xyz}"/><axis xyz="{axis}"/>'
            f'<limit lower="{low!r}" upper="{high!r}"/></joint>'
        )
    text += (
        f'<link name="tip"/><joint name="end" type="fixed"><parent link="l{len(joints)}"/>'
        f'<child link="tip"/><origin xyz="{tool}"/></joint></robot>'
    )
    return SerialChain.from_description(parse_urdf(text), base, tip)


def planar(elbow: tuple[float, float], first: float = L1, second: float = L2) -> SerialChain:
    return arm(
        ('revolute', Z, '0 0 0.1', FREE),
        ('revolute', Z, f'{first!r} 0 0', elbow),
        tool=f'{second!r} 0 0',
    )


def cosine_law(elbow: float, first: float = L1, second: float = L2) -> float:
    square = first**2 + second**2 + 2.0 * first * second * math.cos(elbow)
    return math.sqrt(max(square, 0.0))


# Reach


def test_a_free_planar_arm_reaches_the_sum_of_its_links() -> None:
    chain = planar(FREE)
    reach = find_reach(chain, find_shoulder(chain))
    assert_allclose(reach.length_m, L1 + L2, rtol=1e-12)
    assert_allclose(reach.posture, [0.0, 0.0], atol=1e-6)
    assert reach.sampled_m < reach.length_m
    assert '0.5500 m from the shoulder' in reach.note


@pytest.mark.parametrize(
    ('elbow', 'at'),
    [((60, 120), 60), ((-150, -90), -90), ((20, 300), 20), ((-200, -45), -45), ((170, 180), 170)],
)
def test_a_limited_elbow_follows_the_law_of_cosines(
    elbow: tuple[float, float], at: float
) -> None:
    chain = planar(degrees(*elbow))
    reach = find_reach(chain, find_shoulder(chain))
    assert_allclose(reach.length_m, cosine_law(math.radians(at)), rtol=1e-12)
    assert_allclose(reach.posture, [0.0, math.radians(at)], atol=1e-9)


@settings(max_examples=15, deadline=None)
@given(st.floats(0.1, 1.0), st.floats(0.1, 1.0), st.floats(-6.0, 6.0), st.floats(0.2, 3.0))
def test_any_elbow_range_follows_the_law_of_cosines(
    first: float, second: float, low: float, span: float
) -> None:
    straight = any(low <= turn * 2.0 * math.pi <= low + span for turn in (-1, 0, 1))
    nearest = 0.0 if straight else max((low, low + span), key=math.cos)
    expected = cosine_law(nearest, first, second)
    chain = planar((low, low + span), first, second)
    reach = find_reach(chain, find_shoulder(chain))
    assert_allclose(reach.length_m, expected, rtol=1e-9)


def test_a_single_local_search_stops_where_this_one_does_not() -> None:
    chain = planar(degrees(20, 300))
    shoulder = find_shoulder(chain)

    def shortfall(q: np.ndarray) -> float:
        return -float(np.sum((chain.positions([q]) - shoulder.positions([q])) ** 2))

    bounds = list(zip(chain.lower, chain.upper, strict=True))
    alone = minimize(shortfall, [0.0, math.radians(250.0)], bounds=bounds)
    assert_allclose(math.sqrt(-alone.fun), cosine_law(math.radians(300.0)), rtol=1e-6)
    best = find_reach(chain, shoulder).length_m
    assert_allclose(best, cosine_law(math.radians(20.0)), rtol=1e-12)


def highest_of_all(links: list[float], limits: list[tuple[int, int]]) -> float:
    """
    Return the reach of a planar chain by dynamic programming over the links' headings.

    The largest distance is the largest extent in a fixed direction, a sum over links of length
    times cosine of the heading; headings are 0.2 deg apart, so each link is at most 1.6e-6 of
    its length too short.
    """
    cosine = np.cos(np.radians(np.arange(1800) / 5.0))
    best = links[-1] * cosine
    for length, (low, high) in zip(links[-2::-1], limits[::-1], strict=True):
        following = [np.roll(best, -turn) for turn in range(5 * low, 5 * high + 1)]
        best = length * cosine + np.max(following, axis=0)
    return float(best.max())


def test_many_false_summits_are_climbed_past() -> None:
    # Every elbow may end at either limit; a global search that knows no summits says which
    # of them is highest.
    limits = [(50, 290), (40, 310), (-300, -65), (35, 320)]
    links = [0.3, 0.15, 0.2, 0.12, 0.25]
    chain = arm(
        ('continuous', Z, '0 0 0', FREE),
        *(
            ('revolute', Z, f'{length} 0 0', degrees(*limit))
            for length, limit in zip(links, limits, strict=False)
        ),
        tool='0.25 0 0',
    )
    found = [
        find_reach(chain, find_shoulder(chain), seed=seed).length_m for seed in range(2)
    ]
    assert_allclose(found, highest_of_all(links, limits), rtol=2e-6)


def test_limits_bind_a_spatial_arm_too() -> None:
    # Turret with shoulder pitch and an elbow that cannot straighten: pitch does not matter.
    chain = arm(
        ('continuous', Z, '0 0 0.3', FREE),
        ('revolute', Y, '0 0 0', FREE),
        ('revolute', Y, '0.4 0 0', degrees(30, 150)),
        ('continuous', X, '0.35 0 0', FREE),
        tool='0 0 0',
    )
    reach = find_reach(chain, find_shoulder(chain))
    assert_allclose(reach.length_m, cosine_law(math.radians(30), 0.4, 0.35), rtol=1e-12)
    assert_allclose(reach.posture, [0, 0, math.radians(30), 0], atol=1e-9)


def test_a_slide_behind_the_shoulder_adds_its_full_stroke() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0', FREE),
        ('revolute', Y, '0 0 0', FREE),
        ('prismatic', X, '0.2 0 0', (0.0, 0.5)),
        tool='0.1 0 0',
    )
    assert_allclose(find_reach(chain, find_shoulder(chain)).length_m, 0.8, rtol=1e-12)


def test_a_slide_before_the_shoulder_adds_nothing() -> None:
    chain = arm(
        ('prismatic', Z, '0 0 0.2', (0.0, 0.6)),
        ('revolute', Z, '0 0 0', FREE),
        ('revolute', Y, '0 0 0', FREE),
        ('revolute', Y, '0.3 0 0', FREE),
        tool='0.2 0 0',
    )
    assert_allclose(find_reach(chain, find_shoulder(chain)).length_m, 0.5, rtol=1e-12)
    # From the base the slide counts: 0.2 + 0.6 below an arm stretched upward.
    assert_allclose(find_reach(chain, shoulder_at_base(chain)).length_m, 1.3, rtol=1e-12)


def test_a_joint_of_endless_limits_is_searched_within_one_turn() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0', FREE),
        ('revolute', Z, '0.3 0 0', (-1e16, 1e16)),
        tool='0.2 0 0',
    )
    reach = find_reach(chain, find_shoulder(chain))
    assert_allclose(reach.length_m, 0.5, rtol=1e-12)
    assert np.all(np.abs(reach.posture) <= math.pi)


def test_the_posture_attains_the_length_within_limits_and_repeats() -> None:
    chain = planar(degrees(60, 120))
    shoulder = find_shoulder(chain)
    reach = find_reach(chain, shoulder)
    q = reach.posture[None, :]
    distance = np.linalg.norm(chain.positions(q) - shoulder.positions(q))
    assert distance == reach.length_m
    assert np.all((reach.posture >= chain.lower) & (reach.posture <= chain.upper))
    again = find_reach(chain, shoulder)
    assert (again.length_m, again.posture.tolist()) == (reach.length_m, reach.posture.tolist())
    assert_allclose(find_reach(chain, shoulder, seed=9).length_m, reach.length_m, rtol=1e-12)


def test_what_has_no_reach_is_said() -> None:
    still = arm(tool='0.1 0 0')
    with pytest.raises(DescriptionError, match="no joint moves between 'l0' and 'tip'"):
        find_reach(still, shoulder_at_base(still))
    spinning = arm(('revolute', Z, '0 0 0', FREE), tool='0 0 0')
    with pytest.raises(DescriptionError, match="'tip' never leaves the shoulder"):
        find_reach(spinning, find_shoulder(spinning))


# Shoulder


def test_the_shoulder_is_where_the_first_axis_passes_the_second() -> None:
    chain = arm(
        ('revolute', Z, '0.01 0.02 0.1', FREE),
        ('revolute', Y, '0.1 0.05 0.4', FREE),
        ('revolute', Y, '0.3 0 0', FREE),
        tool='0.2 0 0',
    )
    shoulder = find_shoulder(chain)
    q = np.random.default_rng(1).uniform(-3.0, 3.0, (20, 3))
    assert_allclose(shoulder.positions(q), np.tile([0.01, 0.02, 0.5], (20, 1)), atol=1e-15)
    assert shoulder.joint == 'q0'
    assert shoulder.note == "point of the axis of joint 'q0' nearest to the axis of 'q1'"
    assert_allclose(shoulder.jacobian(q), np.zeros((20, 3, 3)))


def test_skew_axes_give_the_foot_of_the_common_perpendicular() -> None:
    chain = arm(
        ('revolute', '1 1 0', '0.2 0 0', FREE),
        ('revolute', '0 1 1', '0 0.1 0.3', FREE),
        tool='0.3 0 0',
    )
    point = find_shoulder(chain).positions(np.zeros((1, 2)))[0]
    # Least squares over both line parameters, solved apart.
    a, b = np.array([1, 1, 0]) / math.sqrt(2.0), np.array([0, 1, 1]) / math.sqrt(2.0)
    start, other = np.array([0.2, 0, 0]), np.array([0.2, 0.1, 0.3])
    along = np.linalg.lstsq(np.stack([a, -b], axis=1), other - start, rcond=None)[0][0]
    assert_allclose(point, start + along * a, atol=1e-14)


@pytest.mark.parametrize(('tilt', 'parallel'), [(0.0, True), (0.9e-3, True), (1.1e-3, False)])
def test_parallel_axes_give_the_origin_of_the_first_joint(tilt: float, parallel: bool) -> None:
    # The axes would meet 0.3 / tan(tilt) away from the joint, 270 m and more.
    chain = arm(
        ('revolute', Z, '0 0 0.1', FREE),
        ('revolute', f'{math.sin(tilt)!r} 0 {math.cos(tilt)!r}', '0.3 0 0', FREE),
        tool='0.2 0 0',
    )
    shoulder = find_shoulder(chain)
    height = 0.1 if parallel else 0.1 - 0.3 / math.tan(tilt)
    assert_allclose(shoulder.positions(np.zeros((1, 2))), [[0, 0, height]], atol=1e-9)
    assert ('parallel' in shoulder.note) == parallel


def test_antiparallel_axes_are_parallel() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0.1', FREE), ('revolute', '0 0 -1', '0.3 0 0', FREE), tool='1 0 0'
    )
    assert_allclose(find_shoulder(chain).positions(np.zeros((1, 2))), [[0, 0, 0.1]])


def test_a_prismatic_base_carries_the_shoulder() -> None:
    chain = arm(
        ('prismatic', Y, '0 0 0', (-1.0, 1.0)),
        ('prismatic', Z, '0 0 0.2', (0.1, 0.6)),
        ('revolute', Z, '0 0 0', FREE),
        ('revolute', Y, '0.05 0 0.3', FREE),
        tool='0.4 0 0',
    )
    shoulder = find_shoulder(chain)
    q = np.random.default_rng(2).uniform(-1.0, 1.0, (30, 4))
    expected = np.stack([np.zeros(30), q[:, 0], 0.5 + q[:, 1]], axis=1)
    assert_allclose(shoulder.positions(q), expected, atol=1e-15)
    assert shoulder.joint == 'q2'
    slope = np.zeros((3, 4))
    slope[1, 0] = slope[2, 1] = 1.0
    assert_allclose(shoulder.jacobian(q), np.tile(slope, (30, 1, 1)), atol=1e-15)


def test_a_slide_between_the_first_two_axes_is_told() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0.1', FREE),
        ('prismatic', Z, '0 0 0', (0.2, 0.6)),
        ('revolute', Y, '0.1 0 0', FREE),
        tool='0.4 0 0',
    )
    shoulder = find_shoulder(chain)
    assert_allclose(shoulder.positions(np.zeros((1, 3))), [[0, 0, 0.3]], atol=1e-15)
    assert 'prismatic joints between them' in shoulder.note


def test_one_turning_joint_is_its_own_shoulder() -> None:
    chain = arm(
        ('revolute', Y, '0.1 0.2 0.3', FREE), ('prismatic', X, '0 0 0', (0, 1)), tool='1 0 0'
    )
    shoulder = find_shoulder(chain)
    assert_allclose(shoulder.positions(np.zeros((2, 2))), [[0.1, 0.2, 0.3]] * 2)
    assert 'the only one that turns' in shoulder.note


def test_a_gantry_needs_a_shoulder_link() -> None:
    chain = arm(
        ('prismatic', X, '0 0 0', (0, 1)), ('prismatic', Y, '0 0 0', (0, 2)), tool='0 0 0'
    )
    with pytest.raises(DescriptionError, match='turns, so the shoulder cannot be found: name'):
        find_shoulder(chain)
    reach = find_reach(chain, find_shoulder(chain, 'l0'))
    assert_allclose(reach.length_m, math.hypot(1.0, 2.0), rtol=1e-12)


def test_backward_chains_find_the_same_point() -> None:
    # From the second link's frame down to the foot: the first axis met is that of q1.
    chain = arm(
        ('revolute', Z, '0 0 0.1', FREE), ('revolute', Y, '0.1 0 0.4', FREE), tool='0.2 0 0',
        base='tip', tip='l0',
    )
    shoulder = find_shoulder(chain)
    assert chain.joint_names == ('q1', 'q0')
    assert shoulder.joint == 'q1'
    q = np.random.default_rng(3).uniform(-3.0, 3.0, (10, 2))
    # The axis of q1 runs along y through (-0.2, 0, 0) of the tip; q0's passes it at y = 0.
    assert_allclose(shoulder.positions(q), np.tile([-0.2, 0, 0], (10, 1)), atol=1e-14)


def test_a_named_link_is_carried_by_the_joints_before_it() -> None:
    chain = arm(
        ('revolute', Z, '0 0 0.5', FREE),
        ('revolute', Y, '0 0.2 0.3', FREE),
        ('revolute', Y, '0.3 0 0', FREE),
        tool='0.2 0 0',
    )
    shoulder = find_shoulder(chain, 'l2')
    q = np.random.default_rng(4).uniform(-3.0, 3.0, (10, 3))
    waist = q[:, 0]
    expected = np.stack([-0.2 * np.sin(waist), 0.2 * np.cos(waist), np.full(10, 0.8)], axis=1)
    assert_allclose(shoulder.positions(q), expected, atol=1e-15)
    assert shoulder.note == "origin of link 'l2', as configured"
    assert_allclose(find_reach(chain, shoulder).length_m, 0.5, rtol=1e-12)
    step = 1e-6
    ahead, behind = shoulder.positions(q + [step, 0, 0]), shoulder.positions(q - [step, 0, 0])
    assert_allclose(
        shoulder.jacobian(q)[:, :, 0], (ahead - behind) / (2.0 * step), atol=1e-9
    )


def test_a_named_link_must_belong_to_the_arm() -> None:
    neck = (
        '<link name="head"/><joint name="neck" type="revolute"><parent link="l0"/>'
        '<child link="head"/><axis xyz="0 0 1"/><limit lower="-1" upper="1"/></joint>'
    )
    chain = arm(('revolute', Z, '0 0 0', FREE), tool='1 0 0', extra=neck)
    with pytest.raises(DescriptionError, match="'head' is moved by joint 'neck', which does not"):
        find_shoulder(chain, 'head')
    with pytest.raises(DescriptionError, match="no link 'hed': did you mean 'head'"):
        find_shoulder(chain, 'hed')
