# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
One input topic: its subscription, drained by the node's own loop.

Messages are taken serialized, many at a time, with no callback each: measured the cheapest
way, and the bytes are needed for the recording anyway.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable, Sequence
from typing import Any

from rclpy.callback_groups import CallbackGroup
from rclpy.event_handler import SubscriptionEventCallbacks
from rclpy.node import Node
from rclpy.subscription import Subscription

from teleop_eval.core.errors import InputError
from teleop_eval.nodes.loss_count import LossCount
from teleop_eval.nodes.qos import Offer, Request
from teleop_eval.nodes.topic_match import Wanted, match
from teleop_eval.sources.feed_order import Received

# A rematched topic is read through both subscriptions until the publishers know the new one.
OVERLAP_NS = 2_000_000_000
# One topic must not keep the others, or the diagnostics, waiting.
MAX_PER_DRAIN = 2000
# A queue is made anew only when it is clearly too short for the topic's rate.
DEPTH_MARGIN = 1.5
# Messages of a latched topic that are remembered, so that none is taken twice.
MAX_SEEN = 10_000


class NeverExecuted(CallbackGroup):
    """Keeps subscriptions out of the executor, which would take their messages itself."""

    def can_execute(self, entity: object) -> bool:
        """Return False: the node's loop drains."""
        return False

    def beginning_execution(self, entity: object) -> bool:
        """Return False: nothing is ever executed."""
        return False

    def ending_execution(self, entity: object) -> None:
        """Do nothing."""


def message_class(type_name: str) -> type:
    """
    Return the Python class of a message type.

    Raises
    ------
    InputError
        When its package is not installed.

    """
    package, _, name = type_name.partition('/msg/')
    try:
        return getattr(importlib.import_module(f'{package}.msg'), name)
    except (ImportError, AttributeError) as error:
        raise InputError(f'The message type {type_name} is not installed here; install the '
                         f'ROS package {package}.') from error


class TopicInput:
    """
    One topic that the evaluator reads.

    Parameters
    ----------
    node
        The node that subscribes.
    configured
        The topic's name before remapping, which ROS remaps itself.
    wanted
        Full name, uses, types.
    group
        The callback group that keeps subscriptions out of the executor.

    """

    def __init__(self, node: Node, configured: str, wanted: Wanted,
                 group: CallbackGroup) -> None:
        self.topic = wanted.topic
        self.loss = LossCount()
        self.publishers = 0
        self.messages = 0
        self.problems: tuple[str, ...] = ()
        self.rate_hz: float | None = None
        self.request: Request | None = None
        self._node = node
        self._configured = configured
        self._wanted = wanted
        self._group = group
        self._class: Any = None
        self._type_name: str | None = None
        self._current: Subscription | None = None
        self._retiring: list[tuple[int, Subscription]] = []
        self._seen: set[tuple[int, int | None]] | None = None
        self._counted = (0, 0)

    @property
    def type_name(self) -> str | None:
        """Return the type subscribed to, None before a publisher was found."""
        return self._type_name

    @property
    def latched(self) -> bool:
        """Return whether the last message stays valid."""
        return self._wanted.latched

    def rematch(self, offers: Sequence[Offer], now_ns: int) -> bool:
        """
        Subscribe, or subscribe anew, to what the publishers offer now.

        Parameters
        ----------
        offers
            The topic's publishers.
        now_ns
            Reading of a steady clock.

        Returns
        -------
        bool
            Whether the topic's subscription is new.

        """
        self._measure_rate(now_ns)
        self._retire(now_ns)
        wanted = Wanted(self.topic, self._wanted.uses, self._wanted.types, self._wanted.latched,
                        self._type_name, self.rate_hz)
        found = match(wanted, offers)
        self.publishers = found.publishers
        self.problems = found.problems
        if found.type_name is None or found.request is None:
            return False
        if self.request is not None and found.request.same_match(self.request) and (
                found.request.depth <= DEPTH_MARGIN * self.request.depth):
            return False
        try:
            self._subscribe(found.type_name, found.request, now_ns)
        except InputError as error:
            self.problems += (str(error),)
            return False
        return True

    def take(self, batch: list[Received], clock: Callable[[int], int | None]) -> bool:
        """
        Move what has arrived into a batch.

        Parameters
        ----------
        batch
            Receives the messages in their order of arrival.
        clock
            Turns the middleware's receive time into the feed's clock; None leaves out.

        Returns
        -------
        bool
            Whether more may be waiting.

        """
        more = False
        for _, subscription in self._retiring:
            more |= self._take_from(subscription, batch, clock)
        if self._current is not None:
            more |= self._take_from(self._current, batch, clock)
        return more

    def close(self) -> None:
        """Give the subscriptions back."""
        for _, subscription in self._retiring:
            self._node.destroy_subscription(subscription)
        self._retiring = []
        if self._current is not None:
            self._node.destroy_subscription(self._current)
            self._current = None

    def _take_from(self, subscription: Subscription, batch: list[Received],
                   clock: Callable[[int], int | None]) -> bool:
        handle, message_type, topic = subscription.handle, self._class, self.topic
        add_loss, publishers, seen = self.loss.add, self.publishers, self._seen
        with handle:
            for _ in range(MAX_PER_DRAIN):
                taken = handle.take_message(message_type, True)
                if taken is None:
                    return False
                data, info = taken
                number = info.get('publication_sequence_number')
                sent_ns = info['source_timestamp']
                if seen is not None and sent_ns:
                    key = (sent_ns, number)
                    if key in seen:
                        continue
                    seen.add(key)
                publisher = info.get('publisher_gid')  # since Kilted
                add_loss(publisher['data'] if publisher else None, number, publishers)
                self.messages += 1
                receive_ns = clock(info['received_timestamp'])
                if receive_ns is not None:
                    batch.append(Received(receive_ns, topic, number or 0, data))
        return True

    def _subscribe(self, type_name: str, request: Request, now_ns: int) -> None:
        self._class = message_class(type_name)
        subscription = self._node.create_subscription(
            self._class, self._configured, _never_called, request.profile(),
            callback_group=self._group,
            event_callbacks=SubscriptionEventCallbacks(use_default_callbacks=False))
        if self._current is not None:
            # Both get the same messages for a while: what was taken from one is left out
            # from the other.
            self._retiring.append((now_ns + OVERLAP_NS, self._current))
        if self._seen is None and (self._current is not None or self.latched):
            # A latched message comes again with every new subscription.
            self._seen = set()
        self._current, self._type_name, self.request = subscription, type_name, request

    def _retire(self, now_ns: int) -> None:
        for item in [item for item in self._retiring if item[0] <= now_ns]:
            self._retiring.remove(item)
            self._node.destroy_subscription(item[1])
        if not self._retiring and self._seen is not None:
            if not self.latched:
                self._seen = None
            elif len(self._seen) > MAX_SEEN:
                self._seen.clear()

    def _measure_rate(self, now_ns: int) -> None:
        """Keep the highest rate seen, over spans of half a second or more."""
        messages, since_ns = self._counted
        if now_ns - since_ns < 450_000_000:
            return
        if since_ns and self.messages > messages:
            rate = (self.messages - messages) / ((now_ns - since_ns) * 1e-9)
            self.rate_hz = max(rate, self.rate_hz or 0.0)
        self._counted = (self.messages, now_ns)


def _never_called(_: object) -> None:
    """Serve as the callback that a subscription must have."""
