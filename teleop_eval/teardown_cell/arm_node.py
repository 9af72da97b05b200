# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated arm as a process: commands in, joint states and description out."""

from __future__ import annotations

import sys
import time
from typing import Any

from sensor_msgs.msg import JointState
from std_msgs.msg import Float64, String

from teleop_eval.resources import config_file
from teleop_eval.teardown_cell.arm import HOME, ArmState, SimulatedArm, arm_chain
from teleop_eval.teardown_cell.cell_node import (
    LATCHED,
    SAMPLED,
    SLICE_S,
    CellNode,
    StartSignal,
    nanoseconds,
    run_node,
    stamp,
    take,
)
from teleop_eval.teardown_cell.plan import (
    COMMAND_TOPIC,
    DESCRIPTION_TOPIC,
    GRACE_S,
    JOINT_STATES_TOPIC,
    LATENESS_TOPIC,
    Plan,
)


class Arm:
    """The simulated arm with its topics."""

    def __init__(self, cell: CellNode, plan: Plan) -> None:
        """Publish the description and rest in the home posture."""
        text = config_file('teardown_arm.urdf').read_text('utf-8')
        chain = arm_chain(text)
        self._names = list(chain.joint_names)
        self._arm = SimulatedArm(chain.lower, chain.upper, chain.velocity_limits, home=HOME,
                                 start_ns=time.time_ns(), timing=plan.timing)
        self._states = cell.node.create_publisher(JointState, JOINT_STATES_TOPIC, SAMPLED)
        self._description = cell.node.create_publisher(String, DESCRIPTION_TOPIC, LATCHED)
        self._description.publish(String(data=text))
        self._commands = cell.subscribe(JointState, COMMAND_TOPIC, SAMPLED)
        self._lateness = cell.node.create_publisher(Float64, LATENESS_TOPIC, LATCHED)
        self._start = StartSignal(cell)
        self._latest_ns = 0

    def work(self) -> None:
        """Take the commands that wait and publish the states that are due."""
        for message in take(self._commands):
            self._accept(message)
        now = time.time_ns()
        while self._arm.next_ns <= now and (
                self._arm.ready() or now - self._arm.next_ns > GRACE_S * 1e9):
            self._states.publish(self._message(self._arm.advance()))

    def _accept(self, message: Any) -> None:
        by_name = dict(zip(message.name, message.position, strict=False))
        if all(name in by_name for name in self._names):
            stamp_ns = nanoseconds(message.header.stamp)
            self._arm.add_command(stamp_ns, [by_name[name] for name in self._names])
            if self._start.time_at(stamp_ns) >= 0.0:
                self._note_lateness(time.time_ns() - stamp_ns)

    def _note_lateness(self, late_ns: int) -> None:
        """Publish how late the latest command came: beyond the grace, the truth is void."""
        if late_ns > self._latest_ns:
            self._latest_ns = late_ns
            self._lateness.publish(Float64(data=late_ns * 1e-9))

    def _message(self, state: ArmState) -> JointState:
        message = JointState(name=self._names, position=state.positions.tolist(),
                             velocity=state.velocities.tolist())
        message.header.stamp = stamp(state.stamp_ns)
        return message


def body(cell: CellNode, plan: Plan) -> None:
    """Look around, then be an arm until stopped."""
    cell.look_around()
    arm = Arm(cell, plan)
    while not cell.stopped:
        arm.work()
        cell.watch()
        time.sleep(SLICE_S)


def main(argv: list[str] | None = None) -> int:
    """Run the arm and return the exit status."""
    return run_node('arm', 'The simulated arm of the teardown cell; it refuses to start when '
                    'a foreign node is visible.', body, argv)


if __name__ == '__main__':
    sys.exit(main())
