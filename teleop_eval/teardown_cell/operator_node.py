# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated operator as a process: publishes hand and joints, commands nothing."""

from __future__ import annotations

import sys
import time

from geometry_msgs.msg import PoseStamped
from sensor_msgs.msg import JointState

from teleop_eval.teardown_cell.cell_node import (
    SAMPLED,
    CellNode,
    StartSignal,
    run_node,
    sleep_until,
    stamp,
)
from teleop_eval.teardown_cell.human_arm import JOINT_NAMES
from teleop_eval.teardown_cell.operator_motion import OperatorMotion, OperatorState
from teleop_eval.teardown_cell.plan import (
    HAND_TOPIC,
    OPERATOR_FRAME,
    OPERATOR_JOINTS_TOPIC,
    Plan,
)

# Further behind than this, samples are left out, as a tracker would.
CATCH_UP_NS = 500_000_000


def hand_message(stamp_ns: int, state: OperatorState) -> PoseStamped:
    """Return the pose of the hand as a message."""
    message = PoseStamped()
    message.header.stamp = stamp(stamp_ns)
    message.header.frame_id = OPERATOR_FRAME
    position, orientation = message.pose.position, message.pose.orientation
    position.x, position.y, position.z = map(float, state.hand[0])
    orientation.x, orientation.y, orientation.z, orientation.w = map(
        float, state.orientation[0])
    return message


def joints_message(stamp_ns: int, state: OperatorState) -> JointState:
    """Return the operator's joints as a message."""
    message = JointState(name=list(JOINT_NAMES), position=state.joints[0].tolist())
    message.header.stamp = stamp(stamp_ns)
    message.header.frame_id = OPERATOR_FRAME
    return message


def body(cell: CellNode, plan: Plan) -> None:
    """Publish samples taken at, and stamped with, the exact deadlines; first at rest."""
    hand = cell.node.create_publisher(PoseStamped, HAND_TOPIC, SAMPLED)
    joints = cell.node.create_publisher(JointState, OPERATOR_JOINTS_TOPIC, SAMPLED)
    motion = OperatorMotion(plan.seed, plan.seconds)
    start = StartSignal(cell)
    period = round(1e9 / plan.timing.operator_rate_hz)
    due = time.time_ns()
    while not cell.stopped:
        now = time.time_ns()
        if now < due:
            sleep_until(due)
            continue
        if now - due > CATCH_UP_NS:
            due += (now - due) // period * period
        state = motion.at([max(start.time_at(due), 0.0)])
        hand.publish(hand_message(due, state))
        joints.publish(joints_message(due, state))
        due += period
        cell.watch()


def main(argv: list[str] | None = None) -> int:
    """Run the operator and return the exit status."""
    return run_node('operator', 'The simulated operator of the teardown cell.', body, argv)


if __name__ == '__main__':
    sys.exit(main())
