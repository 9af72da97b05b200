# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The order of the feed: expectations are written out by hand or follow from the contract."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from teleop_eval.sources.feed_order import FeedOrder, Received

SECOND = 1_000_000_000
EVENT = '/event'


def new_order() -> FeedOrder:
    return FeedOrder(EVENT, b'segment')


def message(time_ns: int, topic: str = '/a', number: int = 0, data: bytes = b'') -> Received:
    return Received(time_ns, topic, number, data)


def test_a_batch_is_sorted_by_time_then_topic_then_number() -> None:
    batch = [message(30, '/a'), message(10, '/b', 2), message(10, '/b', 1), message(10, '/a', 9)]
    given_out = new_order().order(batch)
    assert [(item.topic, item.number) for item in given_out] == [
        ('/a', 9), ('/b', 1), ('/b', 2), ('/a', 0)]


def test_equal_times_become_strictly_increasing() -> None:
    given_out = new_order().order([message(10, '/a'), message(10, '/b'), message(11, '/a')])
    assert [item.receive_ns for item in given_out] == [10, 11, 12]


def test_a_later_batch_never_goes_back() -> None:
    order = new_order()
    order.order([message(100)])
    assert [item.receive_ns for item in order.order([message(90), message(200)])] == [101, 200]
    assert order.segments == 0


def test_a_message_after_the_cut_waits_for_earlier_ones_of_other_topics() -> None:
    order = new_order()
    first = order.order([message(10, '/a'), message(25, '/b')], cut_ns=20)
    second = order.order([message(22, '/a')], cut_ns=40)
    assert [item.receive_ns for item in first] == [10]
    assert [(item.receive_ns, item.topic) for item in second] == [(22, '/a'), (25, '/b')]


def test_nothing_waits_twice() -> None:
    order = new_order()
    assert order.order([message(25)], cut_ns=20) == []
    assert [item.receive_ns for item in order.order([], cut_ns=20)] == [25]


def test_no_cut_gives_out_what_waited() -> None:
    order = new_order()
    order.order([message(25)], cut_ns=20)
    assert [item.receive_ns for item in order.order([])] == [25]


def test_a_step_back_starts_a_segment_and_time_goes_on() -> None:
    order = new_order()
    order.order([message(100 * SECOND)])
    given_out = order.order([message(50 * SECOND), message(51 * SECOND)])
    assert [(item.topic, item.receive_ns) for item in given_out] == [
        (EVENT, 100 * SECOND + 1), ('/a', 100 * SECOND + 2), ('/a', 101 * SECOND + 2)]
    assert given_out[0].data == b'segment'
    assert order.segments == 1
    assert order.offset_ns == 50 * SECOND + 2
    later = order.order([message(52 * SECOND)])
    assert later[0].receive_ns == 102 * SECOND + 2


def test_a_step_of_exactly_one_second_is_no_step() -> None:
    order = new_order()
    order.order([message(100 * SECOND)])
    assert len(order.order([message(99 * SECOND)])) == 1
    assert order.segments == 0
    assert order.order([message(99 * SECOND - 1)])[0].topic == EVENT


def test_a_step_inside_one_batch_keeps_the_order_of_arrival() -> None:
    """Both topics were drained across the step; what came before it must stay before it."""
    order = new_order()
    order.order([message(100 * SECOND)])
    batch = [message(100 * SECOND + 5, '/a', data=b'1'), message(50 * SECOND, '/a', data=b'4'),
             message(100 * SECOND + 6, '/b', data=b'2'), message(50 * SECOND - 1, '/b', data=b'3')]
    given_out = order.order(batch, cut_ns=100 * SECOND)
    assert [item.data for item in given_out] == [b'1', b'2', b'segment', b'3', b'4']
    assert given_out[-1].receive_ns - given_out[-2].receive_ns == 1
    assert order.segments == 1


def test_a_message_held_before_a_step_stays_before_it() -> None:
    order = new_order()
    order.order([message(100 * SECOND), message(100 * SECOND + 9, data=b'held')],
                cut_ns=100 * SECOND + 1)
    given_out = order.order([message(50 * SECOND, data=b'after')], cut_ns=50 * SECOND)
    assert [item.data for item in given_out] == [b'held', b'segment', b'after']


def test_a_jump_forward_is_left_as_it_is() -> None:
    order = new_order()
    order.order([message(SECOND)])
    assert order.order([message(90 * SECOND)])[0].receive_ns == 90 * SECOND
    assert order.segments == 0


def test_feed_time_follows_the_offset_and_never_falls() -> None:
    order = new_order()
    assert order.feed_time_ns(7) == 7
    order.order([message(100 * SECOND)])
    assert order.feed_time_ns(60 * SECOND) == 100 * SECOND
    order.order([message(50 * SECOND)])
    assert order.feed_time_ns(55 * SECOND) == 105 * SECOND + 2


messages = st.builds(
    message, st.integers(0, 20 * SECOND), st.sampled_from(['/a', '/b', '/c']),
    st.integers(0, 3), st.binary(max_size=2))
batches = st.lists(st.tuples(st.lists(messages, max_size=6),
                             st.one_of(st.none(), st.integers(0, 20 * SECOND))), max_size=8)


@given(batches)
def test_times_strictly_increase_and_nothing_is_lost(
        parts: list[tuple[list[Received], int | None]]) -> None:
    order = new_order()
    given_out: list[Received] = []
    for batch, cut_ns in parts:
        given_out += order.order(batch, cut_ns=cut_ns)
    given_out += order.order([])
    times = [item.receive_ns for item in given_out]
    assert all(late > early for early, late in zip(times, times[1:], strict=False))
    events = [item for item in given_out if item.topic == EVENT]
    assert len(events) == order.segments
    sent = sorted((item.topic, item.number, item.data) for batch, _ in parts for item in batch)
    assert sorted((item.topic, item.number, item.data)
                  for item in given_out if item.topic != EVENT) == sent


@given(batches)
def test_feeding_the_output_again_changes_nothing(
        parts: list[tuple[list[Received], int | None]]) -> None:
    """The recorded inputs, read back one by one, give the same sequence: live = post-run."""
    order = new_order()
    given_out: list[Received] = []
    for batch, cut_ns in parts:
        given_out += order.order(batch, cut_ns=cut_ns)
    again = new_order()
    replayed = [item for sent in given_out for item in again.order([sent._replace(number=0)])]
    assert [(item.receive_ns, item.topic, item.data) for item in replayed] == [
        (item.receive_ns, item.topic, item.data) for item in given_out]
    assert again.segments == 0
