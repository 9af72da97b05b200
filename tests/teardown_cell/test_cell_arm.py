# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated arm: its description, and states that follow from stamps alone."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from teleop_eval.resources import config_file
from teleop_eval.teardown_cell.arm import HOME, SimulatedArm, arm_chain
from teleop_eval.teardown_cell.human_arm import HumanArm
from teleop_eval.teardown_cell.mappings import shoulder_and_reach
from teleop_eval.teardown_cell.plan import CellTiming

TIMING = CellTiming()
MS = 1_000_000


@pytest.fixture(scope='module')
def chain():
    return arm_chain(config_file('teardown_arm.urdf').read_text('utf-8'))


def make(start_ns=0, rates=100.0, timing=TIMING):
    return SimulatedArm(np.full(6, -3.0), np.full(6, 3.0), np.full(6, rates),
                        home=np.zeros(6), start_ns=start_ns, timing=timing)


def test_the_description_is_an_arm_of_six_joints_and_0_9_m(chain):
    shoulder, reach = shoulder_and_reach(chain)
    assert chain.size == 6
    assert_allclose(reach, 0.9, rtol=1e-9)
    assert np.all((chain.lower < HOME) & (HOME < chain.upper))
    assert np.all((chain.lower < 0.0) & (chain.upper > 0.0)), 'stretched within the limits'
    random = np.random.default_rng(1)
    tips = chain.positions(random.uniform(chain.lower, chain.upper, (20000, 6)))
    distance = np.linalg.norm(tips - shoulder, axis=1)
    assert 0.85 < distance.max() <= reach + 1e-9


def test_the_link_ratio_is_unlike_a_humans(chain):
    zero = chain.joint_axes(np.zeros((1, 6))).points[0]
    upper_arm = np.linalg.norm(zero[2] - zero[1])
    forearm = np.linalg.norm(zero[4] - zero[2])
    human = HumanArm()
    assert human.upper_arm_m / human.forearm_m > 1.2
    assert upper_arm / forearm < 0.8


def test_a_command_acts_after_the_transport_delay_from_its_stamp():
    arm = make()
    for index in range(200):
        arm.add_command(index * 10 * MS, np.full(6, 0.01 * max(index - 50, 0)))
    states = [arm.advance() for _ in range(200)]
    moved = next(state.stamp_ns for state in states if np.abs(state.positions).max() > 1e-9)
    assert 560 * MS < moved <= 568 * MS
    # A ramp of 1 rad/s is followed with the sum of both delays.
    last = states[-1]
    lag = (last.stamp_ns * 1e-9 - 0.5) * 1.0 - last.positions[0]
    assert_allclose(lag, TIMING.transport_delay_s + TIMING.servo_lag_s, rtol=1e-6)


def test_states_do_not_depend_on_when_the_messages_arrive():
    commands = [(index * 10 * MS, np.sin(0.1 * index) * np.ones(6)) for index in range(100)]
    early, late = make(), make()
    for command in commands:
        early.add_command(*command)
    expected = [early.advance().positions for _ in range(100)]
    found = []
    while len(found) < 100:
        if commands and not (late._stamps and late.ready()):
            late.add_command(*commands.pop(0))
        else:
            found.append(late.advance().positions)
    assert_allclose(found, expected, atol=1e-15)


def test_a_state_waits_for_the_commands_it_needs():
    arm = make()
    assert arm.ready(), 'at rest before the first command'
    arm.add_command(0, np.zeros(6))
    for _ in range(7):
        assert arm.ready()
        arm.advance()
    assert not arm.ready(), 'the state at 64 ms needs the command of 4 ms'
    arm.add_command(10 * MS, np.zeros(6))
    assert arm.ready()


def test_without_further_commands_the_last_one_is_held():
    arm = make()
    arm.add_command(0, np.zeros(6))
    arm.add_command(10 * MS, np.full(6, 0.3))
    for _ in range(300):
        state = arm.advance()
    assert_allclose(state.positions, 0.3, rtol=1e-9)


def test_limits_of_position_and_rate_hold():
    arm = make(rates=2.0)
    arm.add_command(0, np.zeros(6))
    arm.add_command(10 * MS, np.full(6, 9.0))
    states = [arm.advance() for _ in range(400)]
    positions = np.array([state.positions for state in states])
    speeds = np.array([state.velocities for state in states])
    assert positions.max() <= 3.0
    assert speeds.max() <= 2.0 * 1.01  # the servo overshoots a ramp's slope by 0.15 %
    assert arm.saturated > 0


@pytest.mark.parametrize('bad', [np.full(6, np.nan), np.full(6, np.inf), np.zeros(5)])
def test_a_command_that_is_none_is_refused(bad):
    arm = make()
    arm.add_command(5 * MS, bad)
    assert arm.refused == 1
    assert np.all(arm.advance().positions == 0.0)


def test_a_command_from_the_past_is_refused():
    arm = make()
    arm.add_command(20 * MS, np.ones(6))
    arm.add_command(20 * MS, np.zeros(6))
    arm.add_command(10 * MS, np.zeros(6))
    assert arm.refused == 2


def test_old_commands_are_forgotten():
    arm = make()
    for index in range(2000):
        arm.add_command(index * 10 * MS, np.zeros(6))
        while arm.ready() and arm.next_ns <= index * 10 * MS:
            arm.advance()
    assert len(arm._stamps) < 300
