# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the URDF reader understands and what it refuses, in one sentence each."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation

from teleop_eval.core import urdf
from teleop_eval.core.errors import DescriptionError

LIMIT = '<limit lower="-1" upper="2" velocity="3" effort="1"/>'


def joint(
    name: str, parent: str, child: str, *, kind: str = 'revolute', inside: str = LIMIT
) -> str:
    return (
        f'<joint name="{name}" type="{kind}"><parent link="{parent}"/>'
        f'<child link="{child}"/>{inside}</joint>'
    )


def robot(*joints: str, links: str = 'abcd') -> str:
    names = ''.join(f'<link name="{link}"/>' for link in links)
    return f'<?xml version="1.0"?><robot name="r">{names}{"".join(joints)}</robot>'


def test_a_joint_is_read_in_full() -> None:
    text = robot(
        joint('free', 'a', 'b'),
        joint(
            'led',
            'b',
            'c',
            kind='prismatic',
            inside='<origin xyz="1 -2 3e-1" rpy="0.1 0.2 0.3"/><axis xyz="0 0 -2"/>'
            '<mimic joint="free" multiplier="-0.5" offset="0.25"/>' + LIMIT,
        ),
    )
    description = urdf.parse_urdf(text)
    led = description.joints['led']
    assert description.name == 'r'
    assert description.links == set('abcd')
    assert list(description.joints) == ['free', 'led']
    assert (led.kind, led.parent, led.child) == ('prismatic', 'b', 'c')
    assert_allclose(led.origin_xyz, [1.0, -2.0, 0.3])
    expected = Rotation.from_euler('xyz', [0.1, 0.2, 0.3]).as_matrix()
    assert_allclose(led.origin_rotation, expected, atol=1e-15)
    assert_allclose(led.axis, [0.0, 0.0, -1.0])
    assert (led.lower, led.upper, led.velocity) == (-1.0, 2.0, 3.0)
    assert led.mimic == ('free', -0.5, 0.25)


def test_defaults_are_those_of_the_urdf_specification() -> None:
    text = robot(
        joint('j', 'a', 'b', inside='<limit upper="1"/>'),
        joint('k', 'b', 'c', kind='fixed', inside=''),
    )
    joints = urdf.parse_urdf(text).joints
    assert_allclose(joints['j'].axis, [1.0, 0.0, 0.0])
    assert_allclose(joints['j'].origin_xyz, np.zeros(3))
    assert_allclose(joints['j'].origin_rotation, np.eye(3))
    assert (joints['j'].lower, joints['j'].upper) == (0.0, 1.0)
    assert joints['j'].velocity == math.inf
    assert joints['j'].mimic is None
    assert joints['k'].lower == -math.inf


def test_limits_of_a_continuous_joint_are_ignored() -> None:
    inside = '<limit lower="-6.28" upper="6.28" velocity="1"/>'
    text = robot(joint('j', 'a', 'b', kind='continuous', inside=inside))
    read = urdf.parse_urdf(text).joints['j']
    assert (read.lower, read.upper, read.velocity) == (-math.inf, math.inf, 1.0)


def test_what_is_no_joint_of_the_robot_is_skipped() -> None:
    text = robot(
        '<transmission><joint name="ghost"/></transmission>',
        '<gazebo><joint name="ghost" type="screw"/></gazebo>',
        joint('j', 'a', 'b'),
        # Real files write a zero axis on fixed joints.
        joint('k', 'b', 'c', kind='fixed', inside='<axis xyz="0 0 0"/>'),
        joint('l', 'a', 'd', kind='floating', inside=''),
    )
    assert list(urdf.parse_urdf(text).joints) == ['j', 'k', 'l']


def test_a_default_namespace_and_a_declared_encoding_do_no_harm() -> None:
    text = robot(joint('j', 'a', 'b')).replace('<robot', '<robot xmlns="http://x/urdf"')
    text = text.replace('version="1.0"', 'version="1.0" encoding="utf-16"')
    assert list(urdf.parse_urdf(text).joints) == ['j']


def test_results_cannot_be_changed_by_a_caller() -> None:
    description = urdf.parse_urdf(robot(joint('j', 'a', 'b')))
    with pytest.raises(ValueError, match='read-only'):
        description.joints['j'].axis[0] = 5.0
    with pytest.raises(TypeError):
        description.joints['j'] = None  # type: ignore[index]


FAULTS = [
    ('', 'text is empty'),
    ('  \n ', 'text is empty'),
    ('hello', 'is not XML'),
    ('<robot name="r"><link name="a"></robot>', 'is not XML'),
    ('<robot><link name="a\x00"/></robot>', 'is not XML'),
    ('<robot><link name="\ud800"/></robot>', 'is not XML'),
    ('<robot><xacro:include filename="x"/></robot>', 'is not XML'),
    ('<sdf version="1.7"/>', 'root element is <sdf>, not <robot>'),
    ('<robot/>', 'has no links'),
    (
        '<robot xmlns:xacro="http://www.ros.org/wiki/xacro"><xacro:arg name="x"/></robot>',
        'this is a xacro file: expand it first',
    ),
    (robot('<link/>'), 'a link has no name'),
    (robot('<link name="a"/>'), "two links are named 'a'"),
    (robot('<joint type="fixed"/>'), 'a joint has no name'),
    (robot(joint('j', 'a', 'b'), joint('j', 'b', 'c')), "two joints are named 'j'"),
    (robot(joint('j', 'a', 'b', kind='screw')), "joint 'j' has the unknown type 'screw'"),
    (robot(joint('j', 'a', 'b', kind='Revolute')), "unknown type 'Revolute'"),
    (robot('<joint name="j"/>'), 'unknown type None'),
    (robot(joint('j', 'x', 'b')), "the parent link 'x', which does not exist"),
    (robot(joint('j', 'a', 'x')), "the child link 'x', which does not exist"),
    (robot('<joint name="j" type="fixed"><child link="b"/></joint>'), 'names no parent link'),
    (robot('<joint name="j" type="fixed"><parent link="b"/></joint>'), 'names no child link'),
    (robot(joint('j', 'a', 'c'), joint('k', 'b', 'c')), "'c' has two parents, joints 'j' and"),
    (robot(joint('j', 'a', 'a')), "cycle through link 'a'"),
    (robot(joint('j', 'a', 'b'), joint('k', 'b', 'c'), joint('l', 'c', 'a')), 'form a cycle'),
    (robot(joint('j', 'a', 'b', inside='')), "'j' is revolute but has no limits"),
    (robot(joint('j', 'a', 'b', kind='prismatic', inside='')), 'is prismatic but has no limits'),
    (robot(joint('j', 'a', 'b', inside='<limit lower="2" upper="1"/>')), 'lower 2 above upper 1'),
    (robot(joint('j', 'a', 'b', inside='<limit lower="nan"/>')), 'has limit lower NaN'),
    (robot(joint('j', 'a', 'b', inside='<limit upper="inf"/>')), "has limit upper 'inf', beyond"),
    (robot(joint('j', 'a', 'b', inside='<limit velocity="-1"/>')), 'must not be negative'),
    (robot(joint('j', 'a', 'b', inside='<axis xyz="0 0 0"/>' + LIMIT)), 'has a zero axis'),
    (robot(joint('j', 'a', 'b', inside='<axis xyz="0 1"/>' + LIMIT)), 'give three numbers'),
    (
        robot(joint('j', 'a', 'b', inside='<origin rpy="1.57, 0, 0"/>' + LIMIT)),
        "has rpy '1.57,', which is not a number",
    ),
    (
        robot(joint('j', 'a', 'b', inside='<origin xyz="${x} 0 0"/>' + LIMIT)),
        'which is not a number',
    ),
    (robot(joint('j', 'a', 'b', inside='<origin xyz="1_0 0 0"/>' + LIMIT)), 'not a number'),
    (robot(joint('j', 'a', 'b', inside='<origin xyz="nan 0 0"/>' + LIMIT)), 'has xyz NaN'),
    (robot(joint('j', 'a', 'b', inside='<origin xyz="1e300 0 0"/>' + LIMIT)), 'beyond'),
    (robot(joint('j', 'a', 'b', inside='<mimic/>' + LIMIT)), 'mimics no joint'),
    (
        robot(joint('j', 'a', 'b', inside='<mimic joint="x"/>' + LIMIT)),
        "'j' mimics 'x', which does not exist",
    ),
    (
        robot(joint('j', 'a', 'b', inside='<mimic joint="j"/>' + LIMIT)),
        "'j' mimics itself through a loop",
    ),
    (
        robot(
            joint('j', 'a', 'b', inside='<mimic joint="k"/>' + LIMIT),
            joint('k', 'b', 'c', inside='<mimic joint="j"/>' + LIMIT),
        ),
        'mimics itself through a loop',
    ),
    (
        robot(joint('j', 'a', 'b', inside='<mimic joint="j" multiplier="two"/>' + LIMIT)),
        "mimic multiplier 'two', which is not a number",
    ),
]


@pytest.mark.parametrize(('text', 'words'), FAULTS)
def test_each_fault_is_told_in_one_sentence(text: str, words: str) -> None:
    with pytest.raises(DescriptionError, match=words) as caught:
        urdf.parse_urdf(text, source='left.urdf')
    message = str(caught.value)
    assert message.startswith('left.urdf: ')
    assert '\n' not in message
    assert len(message) < 250


BILLION_LAUGHS = (
    '<?xml version="1.0"?><!DOCTYPE lolz [<!ENTITY a "ha">'
    + ''.join(
        f'<!ENTITY {chr(98 + i)} "{f"&{chr(97 + i)};" * 10}">' for i in range(9)
    )
    + ']><robot name="&j;"><link name="a"/></robot>'
)


@pytest.mark.parametrize(
    'text',
    [
        BILLION_LAUGHS,
        '<!DOCTYPE robot [<!ENTITY x SYSTEM "file:///etc/passwd">]><robot name="&x;"/>',
        '<!DOCTYPE robot SYSTEM "http://127.0.0.1:9/x.dtd"><robot/>',
        '<!DOCTYPE robot [<!ENTITY % p SYSTEM "file:///etc/passwd"> %p;]><robot/>',
        '<!DOCTYPE robot><robot><link name="a"/></robot>',
    ],
    ids=['billion_laughs', 'external_entity', 'external_dtd', 'parameter_entity', 'bare_dtd'],
)
def test_entities_and_document_types_are_refused(text: str) -> None:
    with pytest.raises(DescriptionError, match='entity or external reference is not allowed'):
        urdf.parse_urdf(text)


def test_enormous_nesting_is_refused() -> None:
    depth = 300_000
    text = f'<robot>{"<a>" * depth}{"</a>" * depth}</robot>'
    with pytest.raises(DescriptionError, match='nested deeper than 64 levels'):
        urdf.parse_urdf(text)


def test_an_enormous_number_of_elements_is_refused() -> None:
    with pytest.raises(DescriptionError, match='more than 100000 elements'):
        urdf.parse_urdf(f'<robot>{"<a/>" * 200_000}</robot>')


def test_nesting_of_a_usual_file_is_accepted() -> None:
    inside = '<visual>' * 40 + '</visual>' * 40
    text = robot(joint('j', 'a', 'b'), f'<link name="e">{inside}</link>')
    assert 'j' in urdf.parse_urdf(text).joints


def test_an_enormous_text_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(urdf, 'MAX_CHARACTERS', 1000)
    text = robot(joint('j', 'a', 'b')).replace('<link', ' ' * 1000 + '<link')
    with pytest.raises(DescriptionError, match='more than the 1000 allowed'):
        urdf.parse_urdf(text)


def test_a_name_without_end_does_not_fill_the_message() -> None:
    text = robot(joint('j' * 5000, 'a', 'x' * 5000, kind='fixed', inside=''))
    with pytest.raises(DescriptionError, match=r'xxx\.\.\.') as caught:
        urdf.parse_urdf(text)
    assert len(str(caught.value)) < 300


def test_a_chain_longer_than_any_recursion_is_read() -> None:
    count = 15_000
    links = ''.join(f'<link name="l{i}"/>' for i in range(count + 1))
    fixed = [
        joint(f'j{i}', f'l{i}', f'l{i + 1}', kind='fixed', inside='') for i in range(count)
    ]
    text = f'<robot name="r">{links}{"".join(fixed)}</robot>'
    assert len(urdf.parse_urdf(text).joints) == count
    closing = joint('last', f'l{count}', 'l0', kind='fixed', inside='')
    with pytest.raises(DescriptionError, match='form a cycle'):
        urdf.parse_urdf(text.replace('</robot>', closing + '</robot>'))
