# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The cell's mappings: what they ask for, ramps without jumps, and the evaluator's settings."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.core import rotations
from teleop_eval.core.settings import from_parameters
from teleop_eval.resources import config_file
from teleop_eval.sources.parameter_file import load_parameters
from teleop_eval.teardown_cell import plan as names
from teleop_eval.teardown_cell.arm import BASE_LINK, HOME, TIP_LINK, arm_chain
from teleop_eval.teardown_cell.commander import Commander
from teleop_eval.teardown_cell.human_arm import SHOULDER_M, HumanArm
from teleop_eval.teardown_cell.mappings import FOLLOWS, Mirror, Reach
from teleop_eval.teardown_cell.operator_motion import OperatorMotion
from teleop_eval.teardown_cell.plan import Plan

PLAN = Plan(seconds=20.0, seed=3)


@pytest.fixture(scope='module')
def chain():
    return arm_chain(config_file('teardown_arm.urdf').read_text('utf-8'))


@pytest.fixture(scope='module')
def run(chain):
    times = np.arange(-100, 2100) / 100.0
    state = OperatorMotion(PLAN.seed, PLAN.seconds).at(np.maximum(times, 0.0))
    commander = Commander(chain, PLAN)
    commands = np.array([
        commander.command(t, joints=joints, hand=hand, orientation=turn)
        for t, joints, hand, turn in zip(
            times, state.joints, state.hand, state.orientation, strict=True)])
    return times, state, commands, commander


def test_the_command_never_jumps(run, chain):
    _, _, commands, commander = run
    speed = np.abs(np.diff(commands, axis=0)) * 100.0
    assert np.all(speed <= chain.velocity_limits)
    assert commander.limited == 0, 'the ramps are slow enough by themselves'


def test_the_command_rests_before_the_start_and_from_disengagement_to_the_switch(run):
    times, _, commands, _ = run
    assert np.all(commands[times < 0.0] == HOME)
    still = commands[(times >= PLAN.disengage_s) & (times < PLAN.switch_s)]
    assert len(still) == 100
    assert np.all(still == still[0])
    after = commands[times >= PLAN.seconds]
    assert np.all(after == after[0])


def test_mirror_is_in_force_in_the_first_engagement(run):
    times, state, commands, _ = run
    inside = (times >= PLAN.first_engagement_s) & (times < PLAN.disengage_s)
    assert_allclose(commands[inside], Mirror().joints(state.joints)[inside], atol=1e-12)


def test_reach_is_in_force_in_the_second_engagement(run, chain):
    times, state, commands, _ = run
    inside = (times >= PLAN.reengage_s) & (times < PLAN.seconds)
    pose = chain.forward(commands[inside])
    ratio = 0.9 / 0.77
    wanted = np.array([0.0, 0.0, 0.34]) + ratio * (state.hand[inside] - SHOULDER_M)
    assert_allclose(pose.positions, wanted, atol=1e-5)
    turned = rotations.angle_between(
        rotations.from_matrix(pose.rotations), state.orientation[inside])
    assert turned.max() < 1e-4


def test_a_hand_that_jumps_does_not_throw_the_arm(chain):
    commander = Commander(chain, PLAN)
    motion = OperatorMotion(1, 20.0, noise=False)
    last = HOME
    for index in range(300):
        state = motion.at([index / 100.0])
        joints = state.joints[0] + (1.5 if index >= 200 else 0.0)
        command = commander.command(index / 100.0, joints=joints, hand=state.hand[0],
                                    orientation=state.orientation[0])
        assert np.all(np.abs(command - last) * 100.0 <= chain.velocity_limits)
        last = command
    assert commander.limited > 0


def test_out_of_reach_stays_calm_and_within_limits(chain):
    reach = Reach.of(chain)
    far = SHOULDER_M + np.array([2.0, 0.0, 0.0])
    solution = reach.joints(far, [0.0, 0.0, 0.0, 1.0], HOME)
    assert np.all(np.isfinite(solution))
    assert np.all((chain.lower <= solution) & (solution <= chain.upper))


def test_the_evaluator_is_told_the_same_mappings():
    settings = from_parameters(load_parameters(config_file('teardown_cell.yaml')))
    arm = settings.arms[names.ARM_NAME]
    told = {joint: (of.source, of.sign, of.scale, of.offset)
            for joint, of in arm.mappings[names.MIRROR].joints.items()}
    assert told == {joint: (of.source, of.sign, of.scale, of.offset)
                    for joint, of in FOLLOWS.items()}
    assert (arm.mappings[names.REACH].kind, arm.mappings[names.REACH].scaling) == (
        'task_space', 'normalized')
    assert set(arm.mappings) == {names.MIRROR, names.REACH}


def test_the_evaluator_is_told_the_same_cell():
    settings = from_parameters(load_parameters(config_file('teardown_cell.yaml')))
    arm = settings.arms[names.ARM_NAME]
    assert_allclose(arm.operator.shoulder_m, SHOULDER_M)
    assert_allclose(arm.operator.arm_length_m, HumanArm().length_m)
    assert (arm.robot.base_link, arm.robot.tip_link) == (BASE_LINK, TIP_LINK)
    assert settings.session.operator == names.OPERATOR_PSEUDONYM
    topics = [arm.operator.hand_topic, arm.operator.joints_topic, arm.robot.joints_topic,
              arm.robot.description_topic, arm.command.topic, arm.engaged.topic,
              arm.active_mapping.topic]
    assert topics == [names.HAND_TOPIC, names.OPERATOR_JOINTS_TOPIC, names.JOINT_STATES_TOPIC,
                      names.DESCRIPTION_TOPIC, names.COMMAND_TOPIC, names.ENGAGED_TOPIC,
                      names.ACTIVE_MAPPING_TOPIC]
