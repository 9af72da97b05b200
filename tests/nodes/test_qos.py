# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Requests match what is offered: checked against ROS's own rule of compatibility."""

from __future__ import annotations

import itertools

import pytest
from rclpy.qos import (
    DurabilityPolicy,
    QoSCompatibility,
    QoSProfile,
    ReliabilityPolicy,
    qos_check_compatible,
)

from teleop_eval.nodes.qos import Offer, Request, depth_for, offer_of, request_for
from teleop_eval.nodes.topic_match import Wanted, match

TYPE = 'std_msgs/msg/String'
OFFERS = [Offer(TYPE, reliable, lasting)
          for reliable, lasting in itertools.product([True, False], repeat=2)]


def profile_of(offer: Offer) -> QoSProfile:
    return QoSProfile(
        depth=10,
        reliability=(ReliabilityPolicy.RELIABLE if offer.reliable
                     else ReliabilityPolicy.BEST_EFFORT),
        durability=(DurabilityPolicy.TRANSIENT_LOCAL if offer.transient_local
                    else DurabilityPolicy.VOLATILE))


def compatible(offer: Offer, request: Request) -> bool:
    """Ask rclpy 9.1.2 (qos_check_compatible), which asks the middleware."""
    verdict, _ = qos_check_compatible(profile_of(offer), request.profile())
    return verdict != QoSCompatibility.ERROR


@pytest.mark.parametrize('latched', [True, False])
@pytest.mark.parametrize('offers', [
    *itertools.combinations(OFFERS, 1), *itertools.combinations(OFFERS, 2), tuple(OFFERS)])
def test_a_request_matches_every_publisher_and_is_the_strongest(
        offers: tuple[Offer, ...], latched: bool) -> None:
    request = request_for(offers, latched=latched, rate_hz=None)
    assert all(compatible(offer, request) for offer in offers)
    if not request.reliable:
        stronger = Request(True, request.transient_local, 1)
        assert not all(compatible(offer, stronger) for offer in offers)
    if not request.transient_local and latched:
        stronger = Request(request.reliable, True, 1)
        assert not all(compatible(offer, stronger) for offer in offers)
    if not latched:
        assert not request.transient_local


@pytest.mark.parametrize('offer', OFFERS)
def test_an_offer_is_read_from_a_profile(offer: Offer) -> None:
    assert offer_of(TYPE, profile_of(offer)) == offer


def test_the_queue_holds_a_second_within_bounds() -> None:
    assert depth_for(None) == 1000
    assert depth_for(250.5) == 251
    assert depth_for(3.0) == 100
    assert depth_for(1e6) == 10_000


WANTED = Wanted('/t', ("the command of arm 'right'",), {'a/msg/A', 'b/msg/B'}, latched=False)


def test_a_wrong_type_is_named_with_what_is_expected() -> None:
    found = match(WANTED, [Offer('c/msg/C', True, False)])
    assert found.type_name is None and found.request is None
    assert found.problems == (
        "/t has the type c/msg/C, but the command of arm 'right' needs one of a/msg/A, b/msg/B; "
        'name another topic or restart its publisher with that type.',)


def test_several_types_are_said_and_the_usable_one_is_taken() -> None:
    found = match(WANTED, [Offer('c/msg/C', True, False), Offer('b/msg/B', False, False)])
    assert (found.type_name, found.publishers) == ('b/msg/B', 1)
    assert found.request is not None and not found.request.reliable
    assert 'several types (b/msg/B, c/msg/C); only b/msg/B is used' in found.problems[0]


def test_the_type_of_a_session_stays() -> None:
    kept = Wanted('/t', ('x',), {'a/msg/A', 'b/msg/B'}, latched=False, kept_type='b/msg/B')
    assert match(kept, [Offer('a/msg/A', True, True), Offer('b/msg/B', True, True)]
                 ).type_name == 'b/msg/B'
    lost = match(kept, [Offer('a/msg/A', True, True)])
    assert lost.type_name is None and 'needs b/msg/B as before' in lost.problems[0]


def test_a_latched_topic_with_a_forgetful_publisher_is_said() -> None:
    wanted = Wanted('/t', ('x',), {TYPE}, latched=True)
    found = match(wanted, [Offer(TYPE, True, True), Offer(TYPE, True, False)])
    assert found.request is not None and not found.request.transient_local
    assert 'of which 1 keep no message for late subscribers' in found.problems[0]


def test_no_publisher_is_no_problem_yet() -> None:
    found = match(WANTED, [])
    assert (found.type_name, found.publishers, found.problems) == (None, 0, ())
