# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Inputs over the real middleware: discovery, matching, draining, counting losses."""

from __future__ import annotations

import time
from collections.abc import Iterator
from typing import Any

import pytest
from live_helpers import FakeRoute, ros, wait_until
from rclpy.context import Context
from rclpy.node import Node
from rclpy.publisher import Publisher
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.serialization import deserialize_message, serialize_message
from sensor_msgs.msg import JointState
from std_msgs.msg import Bool, String

from teleop_eval.nodes.live_inputs import LiveInputs
from teleop_eval.sources.decode import SUPPORTED
from teleop_eval.sources.feed_order import Received

ROUTES = {'/joints': (FakeRoute('right', 'robot_joints'),),
          '/mapping': (FakeRoute('right', 'active_mapping'),)}


def profile(reliable: bool, lasting: bool) -> QoSProfile:
    return QoSProfile(
        depth=50,
        reliability=ReliabilityPolicy.RELIABLE if reliable else ReliabilityPolicy.BEST_EFFORT,
        durability=DurabilityPolicy.TRANSIENT_LOCAL if lasting else DurabilityPolicy.VOLATILE)


class Bench:
    """Inputs under test and a node that publishes to them."""

    def __init__(self, context: Context, publishing: Context) -> None:
        self.node = Node('under_test', context=context)
        self.publishing = Node('publishing', context=publishing)
        self.inputs = LiveInputs(self.node, ROUTES, {}, SUPPORTED, simulated=False)
        self.got: list[Received] = []

    def step(self) -> None:
        self.inputs.poll_graph(time.monotonic_ns())
        self.got += self.inputs.drain().messages

    def texts(self) -> list[bytes]:
        return [item.data for item in self.got if item.topic == '/mapping']

    def matched(self, topic: str, publishers: int = 1) -> None:
        """Wait until the topic's publishers and the subscription know each other."""
        found = self.inputs.topics[topic]
        wait_until(lambda: found.request is not None and found.publishers == publishers,
                   self.step)

    def send(self, publisher: Publisher, message: Any) -> None:
        """Publish when the subscription is known to the publisher."""
        wait_until(lambda: publisher.get_subscription_count(), self.step)
        publisher.publish(message)

    def receive(self, count: int) -> list[Received]:
        wait_until(lambda: len(self.got) >= count, self.step)
        return self.got


@pytest.fixture
def bench(domain: int) -> Iterator[Bench]:
    with ros(domain) as context, ros(domain) as publishing:
        made = Bench(context, publishing)
        yield made
        made.inputs.close()
        made.node.destroy_node()
        made.publishing.destroy_node()


@pytest.fixture
def other_context(domain: int) -> Iterator[Context]:
    with ros(domain) as context:
        yield context


def test_bytes_and_stamps_are_those_of_the_message(bench: Bench) -> None:
    publisher = bench.publishing.create_publisher(JointState, '/joints', 10)
    bench.matched('/joints')
    message = JointState(name=['a', 'b'], position=[1.0, -2.0])
    before = time.time_ns()
    bench.send(publisher, message)
    received = bench.receive(1)[0]
    # Not compared byte by byte: the middleware leaves padding undefined when it serializes.
    assert deserialize_message(received.data, JointState) == message
    assert (received.topic, received.number) == ('/joints', 1)
    assert before <= received.receive_ns <= time.time_ns()


@pytest.mark.parametrize(('reliable', 'lasting'), [
    (True, True), (True, False), (False, True), (False, False)])
def test_any_publisher_of_a_latched_topic_is_matched(
        bench: Bench, reliable: bool, lasting: bool) -> None:
    publisher = bench.publishing.create_publisher(String, '/mapping', profile(reliable, lasting))
    bench.matched('/mapping')
    request = bench.inputs.topics['/mapping'].request
    assert request is not None
    assert (request.reliable, request.transient_local) == (reliable, lasting)
    bench.send(publisher, String(data='direct'))
    bench.receive(1)
    assert bench.texts() == [serialize_message(String(data='direct'))]


def test_what_was_latched_before_is_received_and_kept(bench: Bench) -> None:
    publisher = bench.publishing.create_publisher(String, '/mapping', profile(True, True))
    publisher.publish(String(data='direct'))
    bench.receive(1)
    assert [item.data for item in bench.inputs.latched_messages()] == [
        serialize_message(String(data='direct'))]


def test_a_weaker_publisher_is_matched_anew_without_repeating_messages(bench: Bench) -> None:
    strong = bench.publishing.create_publisher(String, '/mapping', profile(True, True))
    strong.publish(String(data='first'))
    bench.receive(1)
    weak = bench.publishing.create_publisher(String, '/mapping', profile(False, False))
    bench.matched('/mapping', publishers=2)
    request = bench.inputs.topics['/mapping'].request
    assert request is not None and not request.reliable and not request.transient_local
    bench.send(weak, String(data='second'))
    bench.receive(2)
    bench.send(strong, String(data='third'))
    bench.receive(3)
    assert bench.texts() == [serialize_message(String(data=text))
                             for text in ('first', 'second', 'third')]
    assert '1 keep no message' in bench.inputs.problems('right')[0]
    weak.publish(String(data='fourth'))
    assert len(bench.receive(4)) == 4


def test_a_stream_goes_on_through_a_rematch_without_loss(bench: Bench) -> None:
    steady = bench.publishing.create_publisher(JointState, '/joints', profile(True, False))
    bench.matched('/joints')
    wait_until(lambda: steady.get_subscription_count(), bench.step)
    sent = 0

    def send_and_step() -> bool:
        nonlocal sent
        sent += 1
        steady.publish(JointState(position=[float(sent)]))
        bench.step()
        return False

    for _ in range(20):
        send_and_step()
    other = bench.publishing.create_publisher(JointState, '/joints', profile(False, False))
    joints = bench.inputs.topics['/joints']
    wait_until(lambda: joints.publishers == 2, send_and_step)
    wait_until(lambda: steady.get_subscription_count() == 1 and other.get_subscription_count(),
               send_and_step)
    wait_until(lambda: len(bench.got) == sent, bench.step)
    assert [item.number for item in bench.got] == list(range(1, sent + 1))
    assert joints.loss.lost == 0
    assert joints.request is not None and not joints.request.reliable


def test_a_late_publisher_is_found(bench: Bench) -> None:
    bench.step()
    assert bench.inputs.absent() == [
        "/joints: absent, waiting for the robot's joints of arm 'right'.",
        "/mapping: absent, waiting for the active mapping of arm 'right'."]
    publisher = bench.publishing.create_publisher(JointState, '/joints', 10)
    bench.matched('/joints')
    bench.send(publisher, JointState())
    assert bench.receive(1)[0].topic == '/joints'
    assert [sentence.split(':')[0] for sentence in bench.inputs.absent()] == ['/mapping']


def test_an_absent_topic_names_what_is_near(bench: Bench) -> None:
    bench.publishing.create_publisher(JointState, '/arm/joints', 10)
    bench.publishing.create_publisher(JointState, '/joint', 10)
    wait_until(lambda: 'did you mean /joint or /arm/joints?' in bench.inputs.absent()[0])


def test_a_restarted_publisher_loses_nothing(bench: Bench) -> None:
    first = bench.publishing.create_publisher(JointState, '/joints', 10)
    bench.matched('/joints')
    for _ in range(3):
        bench.send(first, JointState())
    bench.receive(3)
    bench.publishing.destroy_publisher(first)
    bench.matched('/joints', publishers=0)
    second = bench.publishing.create_publisher(JointState, '/joints', 10)
    bench.matched('/joints')
    for _ in range(2):
        bench.send(second, JointState())
    assert [item.number for item in bench.receive(5)] == [1, 2, 3, 1, 2]
    assert bench.inputs.lost('/joints') == (0, '')
    assert bench.inputs.values('right')['robot_joints lost messages'] == '0'


def test_an_overrun_queue_counts_as_lost(bench: Bench) -> None:
    """Fast DDS keeps the newest messages of a best-effort queue; the numbers show the rest."""
    publisher = bench.publishing.create_publisher(JointState, '/joints', profile(False, False))
    bench.matched('/joints')
    bench.send(publisher, JointState())
    bench.receive(1)
    request = bench.inputs.topics['/joints'].request
    assert request is not None
    extra = 50
    for _ in range(request.depth + extra):
        publisher.publish(JointState())
    last = request.depth + extra + 1
    wait_until(lambda: bench.got[-1].number == last, bench.step)
    lost, _ = bench.inputs.lost('/joints')
    assert lost == last - len(bench.got) > 0


def test_a_thread_reads_what_no_queue_would_hold(bench: Bench) -> None:
    """As many messages as overran the queue above, while nothing drains."""
    publisher = bench.publishing.create_publisher(JointState, '/joints', profile(False, False))
    bench.matched('/joints')
    bench.send(publisher, JointState())
    bench.receive(1)
    joints = bench.inputs.topics['/joints']
    assert joints.request is not None
    sent = 1
    with bench.inputs.reading():
        while sent < joints.request.depth + 50:
            for _ in range(50):
                publisher.publish(JointState())
            sent += 50
            wait_until(lambda sent=sent: joints.messages == sent)
    bench.got += bench.inputs.drain().messages
    assert [item.number for item in bench.got] == list(range(1, sent + 1))
    assert bench.inputs.lost('/joints') == (0, '')


def test_a_wrong_type_is_said_and_harmless(
        bench: Bench, other_context: Context) -> None:
    # One participant cannot have two types on one topic, so the wrong one needs its own.
    wrong = Node('wrong', context=other_context)
    wrong.create_publisher(Bool, '/joints', 10)
    problem = wait_until(lambda: bench.inputs.problems('right'), bench.step)
    assert problem == [
        "/joints has the type std_msgs/msg/Bool, but the robot's joints of arm 'right' needs one "
        'of sensor_msgs/msg/JointState; name another topic or restart its publisher with that '
        'type.']
    publisher = bench.publishing.create_publisher(JointState, '/joints', 10)
    bench.matched('/joints')
    bench.send(publisher, JointState())
    assert bench.receive(1)[0].topic == '/joints'
    assert 'several types' in bench.inputs.problems('right')[0]
    assert len(bench.inputs.problems_so_far()) == 2
