# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The mapping as a process: operator samples in, commands and clutch state out."""

from __future__ import annotations

import sys
import time
from collections import deque

import numpy as np
from geometry_msgs.msg import PoseStamped
from sensor_msgs.msg import JointState
from std_msgs.msg import Bool, String

from teleop_eval.resources import config_file
from teleop_eval.teardown_cell.arm import arm_chain
from teleop_eval.teardown_cell.cell_node import (
    BEFORE_START_S,
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
from teleop_eval.teardown_cell.commander import Commander
from teleop_eval.teardown_cell.plan import (
    ACTIVE_MAPPING_TOPIC,
    COMMAND_TOPIC,
    ENGAGED_TOPIC,
    HAND_TOPIC,
    OPERATOR_JOINTS_TOPIC,
    Plan,
)


class SamplePairs:
    """Joins hand and joints of one stamp, whichever message arrives first."""

    def __init__(self, limit: int = 100) -> None:
        """Keep at most `limit` halves."""
        self._halves: dict[int, dict[str, object]] = {}
        self._limit = limit

    def add(self, stamp_ns: int, kind: str, message: object) -> dict[str, object] | None:
        """Return both messages by kind when the second one of a stamp arrives."""
        half = self._halves.setdefault(stamp_ns, {})
        half[kind] = message
        if len(half) == 2:
            return self._halves.pop(stamp_ns)
        while len(self._halves) > self._limit:
            del self._halves[next(iter(self._halves))]
        return None


class Mapping:
    """Publishers of the mapping and what is still to be sent."""

    def __init__(self, cell: CellNode, plan: Plan) -> None:
        """Open publishers and subscriptions; the clutch is open."""
        self._cell, self._plan = cell, plan
        self._chain = arm_chain(config_file('teardown_arm.urdf').read_text('utf-8'))
        self._commander = Commander(self._chain, plan)
        node = cell.node
        self._command = node.create_publisher(JointState, COMMAND_TOPIC, SAMPLED)
        self._engaged = node.create_publisher(Bool, ENGAGED_TOPIC, LATCHED)
        self._active = node.create_publisher(String, ACTIVE_MAPPING_TOPIC, LATCHED)
        self._inputs = (('hand', cell.subscribe(PoseStamped, HAND_TOPIC, SAMPLED)),
                        ('joints', cell.subscribe(JointState, OPERATOR_JOINTS_TOPIC, SAMPLED)))
        self._pairs = SamplePairs()
        self._waiting: deque[tuple[int, np.ndarray]] = deque()
        self._engaged_now: bool | None = None
        self._active_now: str | None = None
        self._last_ns = 0
        self._start = StartSignal(cell)
        self.publish_state(BEFORE_START_S)

    def publish_state(self, t: float) -> None:
        """Publish clutch and mapping when they change."""
        engaged, active = self._plan.engaged(t), self._plan.mapping(t)
        if active != self._active_now:
            self._active.publish(String(data=active))
        if engaged != self._engaged_now:
            self._engaged.publish(Bool(data=engaged))
        self._engaged_now, self._active_now = engaged, active

    def work(self) -> None:
        """Turn the samples that wait into commands and send those that are due."""
        for kind, subscription in self._inputs:
            for message in take(subscription):
                stamp_ns = nanoseconds(message.header.stamp)
                pair = self._pairs.add(stamp_ns, kind, message)
                if pair is not None:
                    self._map(stamp_ns, pair)
        now = time.time_ns()
        self.publish_state(self._start.time_at(now))
        while self._waiting and self._waiting[0][0] <= now:
            stamp_ns, positions = self._waiting.popleft()
            message = JointState(name=list(self._chain.joint_names),
                                 position=positions.tolist())
            message.header.stamp = stamp(stamp_ns)
            self._command.publish(message)

    def _map(self, stamp_ns: int, pair: dict) -> None:
        if stamp_ns <= self._last_ns:
            return
        self._last_ns = stamp_ns
        pose = pair['hand'].pose
        positions = self._commander.command(
            self._start.time_at(stamp_ns), joints=pair['joints'].position,
            hand=(pose.position.x, pose.position.y, pose.position.z),
            orientation=(pose.orientation.x, pose.orientation.y, pose.orientation.z,
                         pose.orientation.w))
        # The processing delay stands in the stamp; a busy machine sends later, never other.
        delay_ns = round(self._plan.timing.processing_delay_s * 1e9)
        self._waiting.append((stamp_ns + delay_ns, positions))


def body(cell: CellNode, plan: Plan) -> None:
    """Look around, then map until stopped."""
    cell.look_around()
    mapping = Mapping(cell, plan)
    while not cell.stopped:
        mapping.work()
        cell.watch()
        time.sleep(SLICE_S)


def main(argv: list[str] | None = None) -> int:
    """Run the mapping and return the exit status."""
    return run_node('mapping', 'The mapping of the teardown cell: it commands the simulated '
                    'arm, and refuses to when a foreign node is visible.', body, argv)


if __name__ == '__main__':
    sys.exit(main())
