# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The simulated operator as a process: publishes hand and joints, commands nothing."""

from __future__ import annotations

import sys
import time
from collections import deque

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
# Samples computed ahead of time: fewer than between the start signal and the start.
AHEAD = 20


def hand_message(stamp_ns: int, states: OperatorState, index: int) -> PoseStamped:
    """Return the pose of the hand as a message."""
    message = PoseStamped()
    message.header.stamp = stamp(stamp_ns)
    message.header.frame_id = OPERATOR_FRAME
    position, orientation = message.pose.position, message.pose.orientation
    position.x, position.y, position.z = map(float, states.hand[index])
    orientation.x, orientation.y, orientation.z, orientation.w = map(
        float, states.orientation[index])
    return message


def joints_message(stamp_ns: int, states: OperatorState, index: int) -> JointState:
    """Return the operator's joints as a message."""
    message = JointState(name=list(JOINT_NAMES), position=states.joints[index].tolist())
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
    ahead: deque[tuple[PoseStamped, JointState]] = deque()
    while not cell.stopped:
        now = time.time_ns()
        if now - due > CATCH_UP_NS:
            due += (now - due) // period * period
            ahead.clear()
        if not ahead:
            ahead.extend(_messages(motion, start, due, period))
        if now < due:
            sleep_until(due)
            continue
        pose, state = ahead.popleft()
        hand.publish(pose)
        joints.publish(state)
        due += period
        cell.watch()


def _messages(motion: OperatorMotion, start: StartSignal, due: int,
              period: int) -> list[tuple[PoseStamped, JointState]]:
    """Return the messages of the next samples: computed together, they cost a tenth."""
    stamps = [due + index * period for index in range(AHEAD)]
    states = motion.at([max(start.time_at(stamp_ns), 0.0) for stamp_ns in stamps])
    return [(hand_message(stamp_ns, states, index), joints_message(stamp_ns, states, index))
            for index, stamp_ns in enumerate(stamps)]


def main(argv: list[str] | None = None) -> int:
    """Run the operator and return the exit status."""
    return run_node('operator', 'The simulated operator of the teardown cell.', body, argv)


if __name__ == '__main__':
    sys.exit(main())
