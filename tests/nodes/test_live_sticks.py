# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Joy and TwistStamped over the real middleware: one joystick as rate input and clutch."""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from geometry_msgs.msg import TwistStamped
from live_helpers import FakeRoute, ros, wait_until
from rclpy.node import Node
from sensor_msgs.msg import Joy

from teleop_eval.core.samples import JoySample, TwistSample
from teleop_eval.nodes.live_inputs import LiveInputs
from teleop_eval.sources.decode import SUPPORTED, make_decoder

ROUTES = {'/stick': (FakeRoute('right', 'rate_input'), FakeRoute('right', 'engaged')),
          '/command': (FakeRoute('right', 'command'),)}


@pytest.fixture
def nodes(domain: int) -> Iterator[tuple[LiveInputs, Node]]:
    """Return inputs under test and a node that publishes to them."""
    with ros(domain) as context, ros(domain) as publishing:
        under_test = Node('under_test', context=context)
        inputs = LiveInputs(under_test, ROUTES, {}, SUPPORTED, simulated=False)
        yield inputs, Node('publishing', context=publishing)
        inputs.close()


def test_their_bytes_are_received_and_decoded(nodes: tuple[LiveInputs, Node]) -> None:
    inputs, publishing = nodes
    stick, twist = Joy(), TwistStamped()
    stick.header.stamp.sec, stick.axes, stick.buttons = 7, [0.5, -1.0], [0, 1, 0]
    twist.header.stamp.nanosec, twist.header.frame_id = 9, 'base'
    twist.twist.linear.y, twist.twist.angular.z = 0.25, -0.5
    publishers = {'/stick': publishing.create_publisher(Joy, '/stick', 10),
                  '/command': publishing.create_publisher(TwistStamped, '/command', 10)}
    got: dict[str, Any] = {}

    def step() -> None:
        inputs.poll_graph(time.monotonic_ns())
        for topic, message in (('/stick', stick), ('/command', twist)):
            if publishers[topic].get_subscription_count():
                publishers[topic].publish(message)
        for item in inputs.drain().messages:
            decode = make_decoder(inputs.type_name(item.topic))
            got[item.topic] = decode(item.data)
    wait_until(lambda: len(got) == 2, step)
    joy, command = got['/stick'], got['/command']
    assert isinstance(joy, JoySample) and isinstance(command, TwistSample)
    assert joy.stamp_ns == 7 * 10 ** 9
    np.testing.assert_array_equal(joy.axes, [0.5, -1.0])
    np.testing.assert_array_equal(joy.buttons, [0, 1, 0])
    assert (command.stamp_ns, command.frame_id) == (9, 'base')
    np.testing.assert_array_equal(command.linear, [0.0, 0.25, 0.0])
    np.testing.assert_array_equal(command.angular, [0.0, 0.0, -0.5])
