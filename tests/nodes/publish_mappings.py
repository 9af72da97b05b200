# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
A process that publishes one motion in a way that suits several mappings, for live tests.

Usage: publish_mappings.py URDF SECONDS. The operator moves a leader arm of the robot's own
build, a hand tracked beside a moving shoulder, and a stick, all at once; the robot follows. The
mapping is `reach` in the first third, then `ratchet` with the clutch opened and closed twice,
then `driven`.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import rclpy
from geometry_msgs.msg import PointStamped, PoseStamped
from rclpy.qos import DurabilityPolicy, QoSProfile
from sensor_msgs.msg import JointState, Joy
from std_msgs.msg import Bool, String

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.urdf import parse_urdf

RATE_HZ = 100.0
COMMAND_DELAY_S, ROBOT_DELAY_S = 0.03, 0.08
CENTRE = np.array([0.1, 0.4, -0.9, 0.0, 0.3, 0.0])
FREQUENCIES = np.arange(0.2, 1.7, 0.13)
PHASES = np.random.default_rng(7).uniform(0, 2 * np.pi, (6, len(FREQUENCIES)))
LEADER = 0.7
"""Share of the robot's lengths that the tracked operator has."""
FULL_STICK_MPS = 1.0


def motion(t: float) -> np.ndarray:
    """Return joint angles (6,) of a band-limited motion of 0.2 to 1.6 Hz, rad."""
    return CENTRE + np.sum(
        0.12 / FREQUENCIES / len(FREQUENCIES) ** 0.5
        * np.sin(2 * np.pi * FREQUENCIES * t + PHASES), axis=1)


def body(t: float) -> np.ndarray:
    """Return how far (3,) the operator's trunk has swayed, m."""
    return np.array([0.05 * np.sin(0.9 * t), 0.04 * np.sin(0.7 * t + 1.0), 0.0])


def main() -> None:
    """Publish until the time is over."""
    urdf, seconds = Path(sys.argv[1]).read_text(), float(sys.argv[2])
    chain = SerialChain.from_description(
        parse_urdf(urdf), 'teardown_arm_base', 'teardown_arm_tool')
    rclpy.init()
    node = rclpy.create_node('motion')
    latched = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
    mapping = node.create_publisher(String, 'mapping', latched)
    engaged = node.create_publisher(Bool, 'engaged', latched)
    descriptions = [node.create_publisher(String, name, latched)
                    for name in ('robot_description', 'leader_description')]
    hand = node.create_publisher(PoseStamped, 'hand', 50)
    shoulder = node.create_publisher(PointStamped, 'shoulder', 50)
    stick = node.create_publisher(Joy, 'stick', 50)
    joints = {name: node.create_publisher(JointState, name, 50)
              for name in ('leader', 'command', 'joint_states')}
    noise = np.random.default_rng(1)
    for description in descriptions:
        description.publish(String(data=urdf))
    mapping.publish(String(data='reach'))
    engaged.publish(Bool(data=True))
    while not all(one.get_subscription_count()
                  for one in (hand, shoulder, stick, *joints.values())):
        time.sleep(0.05)
    third = seconds / 3.0
    # What is published once, and when.
    plan = [(third, lambda: mapping.publish(String(data='ratchet'))),
            (1.25 * third, lambda: engaged.publish(Bool(data=False))),
            (1.30 * third, lambda: engaged.publish(Bool(data=True))),
            (1.60 * third, lambda: engaged.publish(Bool(data=False))),
            (1.65 * third, lambda: engaged.publish(Bool(data=True))),
            (2.0 * third, lambda: mapping.publish(String(data='driven')))]
    start, number = time.time(), 0
    while (now := time.time()) < start + seconds:
        # The motion belongs to the moment of the stamp, however late a busy machine is.
        t, stamp = now - start, node.get_clock().now().to_msg()
        while plan and t > plan[0][0]:
            plan.pop(0)[1]()
        for name, delay in (('leader', 0.0), ('command', COMMAND_DELAY_S),
                            ('joint_states', COMMAND_DELAY_S + ROBOT_DELAY_S)):
            message = JointState(name=list(chain.joint_names))
            message.header.stamp = stamp
            values = motion(t - delay)
            if name == 'joint_states':
                values = values + noise.normal(0.0, 2e-5, 6)
            message.position = values.tolist()
            joints[name].publish(message)
        before, place, after = chain.positions(
            np.stack([motion(t - 0.005), motion(t), motion(t + 0.005)]))
        pose, point, joy = PoseStamped(), PointStamped(), Joy()
        for message in (pose, point):
            message.header.stamp, message.header.frame_id = stamp, 'room'
        here = LEADER * place + body(t)
        pose.pose.position.x, pose.pose.position.y, pose.pose.position.z = here.tolist()
        pose.pose.orientation.w = 1.0
        point.point.x, point.point.y, point.point.z = body(t).tolist()
        joy.header.stamp = stamp
        joy.axes = [*((after - before) / 0.01 / FULL_STICK_MPS).tolist(), 0.0, 0.0, 0.0]
        for publisher, message in ((hand, pose), (shoulder, point), (stick, joy)):
            publisher.publish(message)
        number += 1
        time.sleep(max(0.0, start + number / RATE_HZ - time.time()))
        number = max(number, int((time.time() - start) * RATE_HZ) - 1)
    time.sleep(1.0)
    rclpy.shutdown()


if __name__ == '__main__':
    main()
