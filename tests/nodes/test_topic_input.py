# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Draining with the message information of other ROS distributions and middlewares.

rclpy 9.1 (Kilted) gives a publisher's identity with each message, rclpy 7.1 (Jazzy) does not;
a middleware may give no numbers and no stamps (rmw: RMW_MESSAGE_INFO_SEQUENCE_NUMBER_UNSUPPORTED,
time stamps of 0).
"""

from __future__ import annotations

from typing import Any

from teleop_eval.nodes.qos import Offer
from teleop_eval.nodes.topic_input import MAX_PER_DRAIN, NeverExecuted, TopicInput
from teleop_eval.nodes.topic_match import Wanted
from teleop_eval.sources.feed_order import Received

TYPE = 'std_msgs/msg/String'
OVERLAP_END_NS = 10_000_000_000


class FakeHandle:
    """A queue that is taken from as rclpy's subscription handle is."""

    def __init__(self) -> None:
        self.queue: list[tuple[bytes, dict[str, Any]]] = []

    def __enter__(self) -> FakeHandle:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def take_message(self, _: type, raw: bool) -> Any:
        assert raw
        return self.queue.pop(0) if self.queue else None


class FakeSubscription:
    def __init__(self) -> None:
        self.handle = FakeHandle()


class FakeNode:
    """Keeps the subscriptions that it makes."""

    def __init__(self) -> None:
        self.made: list[FakeSubscription] = []
        self.destroyed: list[FakeSubscription] = []

    def create_subscription(self, *_: Any, **__: Any) -> FakeSubscription:
        self.made.append(FakeSubscription())
        return self.made[-1]

    def destroy_subscription(self, subscription: FakeSubscription) -> None:
        self.destroyed.append(subscription)


def jazzy(number: int | None, *, sent_ns: int = 5, received_ns: int = 7) -> dict[str, Any]:
    return {'source_timestamp': sent_ns, 'received_timestamp': received_ns,
            'publication_sequence_number': number, 'reception_sequence_number': None}


class Bench:
    def __init__(self, *, latched: bool = False) -> None:
        self.node = FakeNode()
        wanted = Wanted('/t', ('x',), {TYPE}, latched=latched)
        self.input = TopicInput(
            self.node, '/t', wanted, NeverExecuted())  # type: ignore[arg-type]

    def match(self, *reliable: bool, now_ns: int = 1) -> bool:
        return self.input.rematch([Offer(TYPE, each, False) for each in reliable], now_ns)

    def arrive(self, info: dict[str, Any], data: bytes = b'x', place: int = -1) -> None:
        self.node.made[place].handle.queue.append((data, info))

    def take(self) -> list[Received]:
        batch: list[Received] = []
        self.more = self.input.take(batch, lambda received_ns: received_ns)
        return batch


def test_one_publisher_is_counted_without_identity() -> None:
    bench = Bench()
    assert bench.match(True)
    for number in (1, 2, 5):
        bench.arrive(jazzy(number))
    assert bench.take() == [Received(7, '/t', number, b'x') for number in (1, 2, 5)]
    assert bench.input.loss.lost == 2


def test_two_publishers_without_identity_are_unobservable() -> None:
    bench = Bench()
    bench.match(True, True)
    bench.arrive(jazzy(1))
    bench.take()
    assert bench.input.loss.lost is None


def test_identity_is_used_where_there_is_one() -> None:
    bench = Bench()
    bench.match(True, True)
    for publisher, number in ((b'a', 1), (b'b', 9), (b'a', 2), (b'b', 12)):
        bench.arrive({**jazzy(number), 'publisher_gid': {'data': publisher}})
    bench.take()
    assert bench.input.loss.lost == 2


def test_an_identity_of_none_is_no_identity() -> None:
    bench = Bench()
    bench.match(True)
    bench.arrive({**jazzy(1), 'publisher_gid': None})
    bench.arrive({**jazzy(3), 'publisher_gid': None})
    bench.take()
    assert bench.input.loss.lost == 1


def test_no_numbers_and_no_stamps_lose_no_message() -> None:
    bench = Bench(latched=True)
    bench.match(True)
    for _ in range(2):
        bench.arrive(jazzy(None, sent_ns=0))
    assert [item.number for item in bench.take()] == [0, 0]
    assert bench.input.loss.lost is None


def test_both_subscriptions_are_read_once_while_they_overlap() -> None:
    bench = Bench()
    bench.match(True)
    assert bench.match(True, False, now_ns=2)
    assert not bench.match(True, False, now_ns=3)
    for place, numbers in ((0, (1, 2)), (1, (2, 3))):
        for number in numbers:
            bench.arrive(jazzy(number, sent_ns=100 + number), place=place)
    assert [item.number for item in bench.take()] == [1, 2, 3]
    bench.match(True, False, now_ns=OVERLAP_END_NS)
    assert bench.node.destroyed == [bench.node.made[0]]


def test_a_long_queue_is_taken_in_parts() -> None:
    bench = Bench()
    bench.match(True)
    for number in range(MAX_PER_DRAIN + 5):
        bench.arrive(jazzy(number + 1))
    assert len(bench.take()) == MAX_PER_DRAIN and bench.more
    assert len(bench.take()) == 5 and not bench.more


def test_a_queue_too_short_for_its_rate_is_made_anew() -> None:
    bench = Bench()
    bench.match(True, now_ns=1_000_000_000)
    for number in range(2000):
        bench.arrive(jazzy(number + 1))
    bench.take()
    assert bench.match(True, now_ns=2_000_000_000)
    assert bench.input.request is not None and bench.input.request.depth == 2000
    assert bench.input.loss.lost == 0


def test_a_type_that_is_not_installed_is_said() -> None:
    bench = Bench()
    wanted = Wanted('/t', ('x',), {'missing_msgs/msg/Thing'}, latched=False)
    topic = TopicInput(bench.node, '/t', wanted, NeverExecuted())  # type: ignore[arg-type]
    assert not topic.rematch([Offer('missing_msgs/msg/Thing', True, False)], 1)
    assert topic.problems == (
        'The message type missing_msgs/msg/Thing is not installed here; install the ROS package '
        'missing_msgs.',)
