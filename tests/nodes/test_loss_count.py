# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Counting lost messages in made-up sequences of publication numbers."""

from __future__ import annotations

import random

import pytest

from teleop_eval.nodes.loss_count import LossCount


def counted(*messages: tuple[bytes | None, int | None], publishers: int = 1) -> LossCount:
    loss = LossCount()
    for publisher, number in messages:
        loss.add(publisher, number, publishers)
    return loss


def test_nothing_received_is_unobservable() -> None:
    loss = LossCount()
    assert loss.lost is None and loss.reason == 'no message yet'


def test_counting_starts_at_the_first_number_seen() -> None:
    assert counted((b'a', 41), (b'a', 42)).lost == 0


def test_gaps_are_lost_messages() -> None:
    assert counted((b'a', 1), (b'a', 2), (b'a', 5), (b'a', 7)).lost == 3


def test_a_session_begins_with_none_lost() -> None:
    loss = counted((b'a', 1), (b'a', 5))
    loss.begin()
    assert (loss.lost, loss.reason) == (0, '')
    loss.add(b'a', 8, 1)  # what was lost since the last message belongs to the new session
    assert loss.lost == 2
    unknown = counted((None, 1), publishers=2)
    unknown.begin()
    assert (unknown.lost, unknown.reason) == (None, 'no message yet')
    unknown.add(None, 7, 1)
    assert unknown.lost == 0


def test_interleaved_publishers_are_counted_apart() -> None:
    assert counted((b'a', 1), (b'b', 100), (b'a', 2), (b'b', 103), publishers=2).lost == 2


def test_a_publisher_that_starts_anew_loses_nothing() -> None:
    assert counted((b'a', 100), (b'a', 1), (b'a', 2), (b'a', 4)).lost == 1


def test_a_single_publisher_is_counted_without_identity() -> None:
    assert counted((None, 1), (None, 4)).lost == 2


def test_several_publishers_without_identity_are_unobservable() -> None:
    loss = counted((None, 1), (None, 1), publishers=2)
    assert loss.lost is None
    assert '2 publishers' in loss.reason


def test_once_unobservable_stays_so() -> None:
    """What was lost while two publishers could not be told apart is not known later either."""
    loss = counted((None, 1), publishers=2)
    loss.add(None, 2, 1)
    assert loss.lost is None


def test_no_numbers_are_unobservable() -> None:
    loss = counted((b'a', None))
    assert loss.lost is None and 'numbers no messages' in loss.reason


@pytest.mark.parametrize('seed', range(5))
def test_random_loss_of_two_publishers_is_counted_exactly(seed: int) -> None:
    random_ = random.Random(seed)
    sent = {publisher: list(range(1, 301)) for publisher in (b'a', b'b')}
    kept = {publisher: [number for number in numbers
                        if number in (1, 300) or random_.random() > 0.2]
            for publisher, numbers in sent.items()}
    queues = {publisher: list(numbers) for publisher, numbers in kept.items()}
    loss = LossCount()
    while any(queues.values()):
        publisher = random_.choice([name for name, queue in queues.items() if queue])
        loss.add(publisher, queues[publisher].pop(0), 2)
    assert loss.lost == sum(len(sent[name]) - len(kept[name]) for name in sent) > 0
