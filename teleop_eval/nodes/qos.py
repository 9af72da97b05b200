# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which quality of service to ask for and to offer, with the reason for each."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from rclpy.qos import DurabilityPolicy, HistoryPolicy, QoSProfile, ReliabilityPolicy

# A queue holds a second of messages: the longest pause of this process that loses nothing.
QUEUE_S = 1.0
UNKNOWN_RATE_DEPTH = 1000
MIN_DEPTH, MAX_DEPTH = 100, 10_000

# Latched: whoever comes later, or after the end, still gets the last summary.
LATCHED = QoSProfile(
    depth=1, history=HistoryPolicy.KEEP_LAST, reliability=ReliabilityPolicy.RELIABLE,
    durability=DurabilityPolicy.TRANSIENT_LOCAL)
# A value every window: none may get lost, old ones are of no use.
METRICS = QoSProfile(
    depth=10, history=HistoryPolicy.KEEP_LAST, reliability=ReliabilityPolicy.RELIABLE,
    durability=DurabilityPolicy.VOLATILE)
# What diagnostic aggregators ask for.
DIAGNOSTICS = METRICS
# The simulator's clock: best effort matches every publisher.
CLOCK = QoSProfile(
    depth=UNKNOWN_RATE_DEPTH, history=HistoryPolicy.KEEP_LAST,
    reliability=ReliabilityPolicy.BEST_EFFORT, durability=DurabilityPolicy.VOLATILE)


@dataclass(frozen=True)
class Offer:
    """What one publisher offers."""

    type_name: str
    reliable: bool
    transient_local: bool


@dataclass(frozen=True)
class Request:
    """What a subscription asks for."""

    reliable: bool
    transient_local: bool
    depth: int

    def profile(self) -> QoSProfile:
        """Return the request as ROS knows it."""
        return QoSProfile(
            history=HistoryPolicy.KEEP_LAST, depth=self.depth,
            reliability=(ReliabilityPolicy.RELIABLE if self.reliable
                         else ReliabilityPolicy.BEST_EFFORT),
            durability=(DurabilityPolicy.TRANSIENT_LOCAL if self.transient_local
                        else DurabilityPolicy.VOLATILE))

    def same_match(self, other: Request) -> bool:
        """Return whether both match the same publishers in the same way."""
        return (self.reliable, self.transient_local) == (other.reliable, other.transient_local)


def offer_of(type_name: str, profile: QoSProfile) -> Offer:
    """Return what a publisher's profile, as the graph shows it, offers."""
    return Offer(type_name, profile.reliability == ReliabilityPolicy.RELIABLE,
                 profile.durability == DurabilityPolicy.TRANSIENT_LOCAL)


def request_for(offers: Iterable[Offer], *, latched: bool, rate_hz: float | None) -> Request:
    """
    Return the strongest request that every publisher matches.

    Parameters
    ----------
    offers
        One or more publishers of the topic.
    latched
        Whether the topic's last message stays valid. A sampled stream is never asked for its
        past: old samples would come in one burst and spoil the receive times.
    rate_hz
        The topic's rate, None when not known yet.

    """
    known = list(offers)
    return Request(
        reliable=all(offer.reliable for offer in known),
        transient_local=latched and all(offer.transient_local for offer in known),
        depth=depth_for(rate_hz))


def depth_for(rate_hz: float | None) -> int:
    """Return the queue's depth: one second at the topic's rate, bounded."""
    if rate_hz is None:
        return UNKNOWN_RATE_DEPTH
    return min(MAX_DEPTH, max(MIN_DEPTH, math.ceil(rate_hz * QUEUE_S)))
