# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A process that publishes invented motion of operator and robot, for tests of the live node.

Usage: publish_motion.py URDF SECONDS. Joint-space mapping `direct` in the first half,
task-space mapping `reach` in the second, with the clutch open for a second between them.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import rclpy
from geometry_msgs.msg import PoseStamped
from rclpy.qos import DurabilityPolicy, QoSProfile
from sensor_msgs.msg import JointState
from std_msgs.msg import Bool, String

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf

RATE_HZ = 100.0
COMMAND_DELAY_S, ROBOT_DELAY_S = 0.01, 0.08
CENTRE = np.array([0.1, 0.4, -0.9, 0.0, 0.3, 0.0])


def motion(t: float) -> np.ndarray:
    """Return joint angles (6,) of a band-limited motion of 0.2 to 1.6 Hz, rad."""
    rng = np.random.default_rng(7)
    frequencies = np.arange(0.2, 1.7, 0.13)
    phases = rng.uniform(0, 2 * np.pi, (6, len(frequencies)))
    return CENTRE + np.sum(
        0.12 / frequencies / len(frequencies) ** 0.5
        * np.sin(2 * np.pi * frequencies * t + phases), axis=1)


def main() -> None:
    """Publish until the time is over."""
    urdf, seconds = Path(sys.argv[1]).read_text(), float(sys.argv[2])
    chain = SerialChain.from_description(
        parse_urdf(urdf), 'teardown_arm_base', 'teardown_arm_tool')
    rclpy.init()
    node = rclpy.create_node('motion')
    latched = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
    description = node.create_publisher(String, 'robot_description', latched)
    mapping = node.create_publisher(String, 'mapping', latched)
    engaged = node.create_publisher(Bool, 'engaged', latched)
    hand = node.create_publisher(PoseStamped, 'hand', 50)
    operator = node.create_publisher(JointState, 'operator_joints', 50)
    command = node.create_publisher(JointState, 'command', 50)
    robot = node.create_publisher(JointState, 'joint_states', 50)
    noise = np.random.default_rng(1)
    description.publish(String(data=urdf))
    mapping.publish(String(data='direct'))
    engaged.publish(Bool(data=True))
    while hand.get_subscription_count() == 0 or robot.get_subscription_count() == 0:
        time.sleep(0.05)
    start = time.time()
    # What is published once, and when: the clutch opens, the mapping changes, it closes.
    plan = [(seconds / 2 - 0.5, lambda: engaged.publish(Bool(data=False))),
            (seconds / 2, lambda: mapping.publish(String(data='reach'))),
            (seconds / 2 + 0.5, lambda: engaged.publish(Bool(data=True)))]
    for k in range(int(seconds * RATE_HZ)):
        t = k / RATE_HZ
        time.sleep(max(0.0, start + t - time.time()))
        while plan and t > plan[0][0]:
            plan.pop(0)[1]()
        stamp = node.get_clock().now().to_msg()
        for publisher, prefix, delay in ((operator, 'o_', 0.0), (command, '', COMMAND_DELAY_S),
                                         (robot, '', COMMAND_DELAY_S + ROBOT_DELAY_S)):
            message = JointState(name=[prefix + name for name in chain.joint_names])
            message.header.stamp = stamp
            values = motion(t - delay)
            if publisher is robot:
                values = values + noise.normal(0.0, 3e-4, 6)
            message.position = values.tolist()
            publisher.publish(message)
        pose = PoseStamped()
        pose.header.stamp, pose.header.frame_id = stamp, 'operator'
        place = chain.positions(motion(t)[None])[0] * 0.7
        pose.pose.position.x, pose.pose.position.y, pose.pose.position.z = place.tolist()
        pose.pose.orientation.w = 1.0
        hand.publish(pose)
    time.sleep(1.0)
    rclpy.shutdown()


if __name__ == '__main__':
    main()
