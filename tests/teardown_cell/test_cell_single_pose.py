# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The fast chain of the mapping against the evaluator's own kinematics."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf
from teleop_eval.resources import config_file
from teleop_eval.teardown_cell.arm import arm_chain
from teleop_eval.teardown_cell.single_pose import SingleChain

TURNED = """<robot name="r"><link name="a"/><link name="b"/><link name="c"/><link name="d"/>
<joint name="one" type="revolute"><parent link="a"/><child link="b"/>
<origin xyz="0.1 -0.2 0.3" rpy="0.4 -0.5 0.6"/><axis xyz="1 2 -1"/>
<limit lower="-2" upper="2" velocity="1"/></joint>
<joint name="two" type="continuous"><parent link="b"/><child link="c"/>
<origin xyz="-0.3 0.1 0.2" rpy="-1 0.2 2"/><axis xyz="0 -1 0"/></joint>
<joint name="end" type="fixed"><parent link="c"/><child link="d"/>
<origin xyz="0.2 0.05 -0.1" rpy="0.3 0.2 0.1"/></joint></robot>"""
SLIDING = TURNED.replace('type="revolute"', 'type="prismatic"')


@pytest.mark.parametrize('links', [('a', 'd'), ('d', 'a')])
def test_pose_and_jacobian_of_a_turned_chain(links):
    chain = SerialChain.from_description(parse_urdf(TURNED), *links)
    _compare(chain)


def test_pose_and_jacobian_of_the_cells_arm():
    _compare(arm_chain(config_file('teardown_arm.urdf').read_text('utf-8')))


def test_a_chain_that_slides_is_refused():
    with pytest.raises(ValueError, match='revolute'):
        SingleChain(SerialChain.from_description(parse_urdf(SLIDING), 'a', 'd'))


def _compare(chain):
    single = SingleChain(chain)
    for q in np.random.default_rng(3).uniform(-2.0, 2.0, (50, chain.size)):
        expected, found = chain.forward(q[None]), single.pose(q.tolist())
        assert_allclose(found.position, expected.positions[0], atol=1e-12)
        assert_allclose(found.rotation, expected.rotations[0], atol=1e-12)
        assert_allclose(found.jacobian, chain.jacobian(q[None])[0], atol=1e-12)
