# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The middleware's stamps and the simulator's clock as receive time."""

from __future__ import annotations

import time

from live_helpers import PATIENCE_S, FakeRoute, ros, wait_until
from rclpy.duration import Duration
from rclpy.node import Node
from rosgraph_msgs.msg import Clock
from std_msgs.msg import String

from teleop_eval.nodes.live_inputs import LiveInputs
from teleop_eval.nodes.receive_clock import SimulatedReceiveClock
from teleop_eval.nodes.topic_input import NeverExecuted
from teleop_eval.sources.decode import SUPPORTED


def test_receive_time_is_that_of_arriving_not_of_draining(domain: int) -> None:
    """
    The message has arrived when its receipt is confirmed, and only then the wait begins.

    A busy machine makes the wait longer, which can only widen the difference.
    """
    with ros(domain) as context, ros(domain) as publishing:
        inputs = LiveInputs(Node('x', context=context),
                            {'/m': (FakeRoute('right', 'active_mapping'),)}, {}, SUPPORTED,
                            simulated=False)
        mapping = Node('y', context=publishing).create_publisher(String, '/m', 10)
        wait_until(mapping.get_subscription_count, lambda: inputs.poll_graph(1))
        published_ns = time.time_ns()
        mapping.publish(String(data='direct'))
        assert mapping.wait_for_all_acked(Duration(seconds=PATIENCE_S))
        time.sleep(0.1)
        drained_ns = time.time_ns()
        [received] = inputs.drain().messages
        assert published_ns <= received.receive_ns <= drained_ns - 50_000_000
        inputs.close()


def test_a_message_gets_the_last_reading_before_it(domain: int) -> None:
    with ros(domain) as context:
        clock = SimulatedReceiveClock(Node('x', context=context), NeverExecuted())
        assert clock.now_ns() == 0 and clock.at(5) is None
        for received_ns, reading_ns in ((100, 7), (200, 8), (300, 9)):
            clock.add(received_ns, reading_ns)
        assert [clock.at(ns) for ns in (50, 100, 150, 199, 200, 299, 300, 10_000)] == [
            7, 7, 7, 7, 8, 8, 9, 9]
        assert clock.at(0) == 9  # a middleware without receive stamps: the clock as it is
        assert clock.now_ns() == 9


def test_a_reading_of_zero_is_none(domain: int) -> None:
    with ros(domain) as context:
        clock = SimulatedReceiveClock(Node('x', context=context), NeverExecuted())
        clock.add(100, 0)
        assert clock.now_ns() == 0


def test_messages_wait_until_the_simulation_begins(domain: int) -> None:
    with ros(domain) as context, ros(domain) as publishing:
        inputs = LiveInputs(Node('x', context=context),
                            {'/m': (FakeRoute('right', 'active_mapping'),)}, {}, SUPPORTED,
                            simulated=True)
        sender = Node('y', context=publishing)
        clock = sender.create_publisher(Clock, '/clock', 10)
        mapping = sender.create_publisher(String, '/m', 10)
        wait_until(lambda: mapping.get_subscription_count() and clock.get_subscription_count(),
                   lambda: inputs.poll_graph(1))
        mapping.publish(String(data='direct'))
        for _ in range(20):
            assert inputs.drain().messages == []
        reading = Clock()
        reading.clock.sec, reading.clock.nanosec = 12, 34
        clock.publish(reading)
        received = wait_until(lambda: inputs.drain().messages)
        assert [item.receive_ns for item in received] == [12_000_000_034]
        inputs.close()
