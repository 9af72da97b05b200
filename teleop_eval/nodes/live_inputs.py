# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""All input topics: found in the graph, subscribed to when they appear, drained together."""

from __future__ import annotations

import difflib
import threading
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Protocol

from rclpy.node import Node

from teleop_eval.nodes.qos import Offer, offer_of
from teleop_eval.nodes.receive_clock import SimulatedReceiveClock, SystemReceiveClock
from teleop_eval.nodes.topic_input import NeverExecuted, TopicInput
from teleop_eval.nodes.topic_match import LATCHED_ROLES, ROLE_KINDS, Wanted, use_words
from teleop_eval.sources.feed_order import Received

# Each queue holds a second; fifty visits a second cost little and keep batches small.
READ_S = 0.02
# A node that is too slow for good leaves messages in their queues, where losses are counted.
MAX_WAITING = 200_000


class RouteLike(Protocol):
    """What is read of an evaluator's route."""

    @property
    def arm(self) -> str:
        """Name of the arm."""

    @property
    def role(self) -> str:
        """What the topic is to the arm."""


@dataclass(frozen=True)
class Batch:
    """
    What one drain gave.

    `cut_ns` is the receive clock when draining began; `more` tells that some may wait.
    """

    messages: list[Received]
    cut_ns: int
    more: bool


class LiveInputs:
    """
    Subscriptions to every topic that an evaluator reads.

    Parameters
    ----------
    node
        The node that subscribes.
    routes
        By full topic name, what the topic is used for.
    configured
        By full topic name, the name before remapping.
    supported
        Message types by kind of input.
    simulated
        Whether receive times come from /clock.

    """

    def __init__(self, node: Node, routes: Mapping[str, Sequence[RouteLike]],
                 configured: Mapping[str, str], supported: Mapping[str, Collection[str]], *,
                 simulated: bool) -> None:
        self._node = node
        self._routes = routes
        self._configured = configured
        self._group = NeverExecuted()
        self.clock: SystemReceiveClock | SimulatedReceiveClock = (
            SimulatedReceiveClock(node, self._group) if simulated else SystemReceiveClock())
        self.topics = {topic: self._topic_input(topic, uses, supported)
                       for topic, uses in routes.items()}
        self._latched: dict[str, Received] = {}
        self._waiting: list[Received] = []
        self._lock = threading.Lock()  # of subscriptions and what waits
        self._problems_so_far: dict[str, None] = {}

    def poll_graph(self, now_ns: int) -> list[TopicInput]:
        """Match every topic with its publishers; return those newly subscribed to."""
        offers = {topic: self._offers(topic) for topic in self.topics}
        with self._lock:
            new = [topic_input for topic, topic_input in self.topics.items()
                   if topic_input.rematch(offers[topic], now_ns)]
        self._problems_so_far.update(dict.fromkeys(self.problems()))
        return new

    def drain(self) -> Batch:
        """Return everything that has arrived since the last time."""
        with self._lock:
            return self._drained()

    def begin(self) -> Batch:
        """
        Drain, and begin anew what is told of a session: losses and problems of the topics.

        Losses among the messages of the batch are no longer counted, later ones are.
        """
        with self._lock:
            batch = self._drained()
            for topic_input in self.topics.values():
                topic_input.loss.begin()
        self._problems_so_far = dict.fromkeys(self.problems())
        return batch

    @contextmanager
    def reading(self) -> Iterator[None]:
        """
        Empty the queues in a thread of its own while the context lasts.

        Closing a window may take longer than a queue holds on a busy machine. What the thread
        took waits for `drain`, so that computing costs no message.
        """
        ended = threading.Event()

        def read() -> None:
            while not ended.wait(READ_S):
                with self._lock:
                    if len(self._waiting) < MAX_WAITING:
                        self._collect()

        thread = threading.Thread(target=read, name='inputs', daemon=True)
        thread.start()
        try:
            yield
        finally:
            ended.set()
            thread.join()

    def _drained(self) -> Batch:
        cut_ns, more = self._collect()
        messages, self._waiting = self._waiting, []
        return Batch(messages, cut_ns, more)

    def _collect(self) -> tuple[int, bool]:
        """Move what has arrived to what waits; return the clock before, and whether more is."""
        self.clock.update()
        cut_ns, more = self.clock.now_ns(), False
        if cut_ns == 0:  # the simulation has not begun; messages wait in their queues
            return cut_ns, more
        waiting = self._waiting
        for topic_input in self.topics.values():
            first = len(waiting)
            more |= topic_input.take(waiting, self.clock.at)
            if topic_input.latched and len(waiting) > first:
                self._latched[topic_input.topic] = waiting[-1]
        return cut_ns, more

    def latched_messages(self) -> list[Received]:
        """Return the last message of each latched topic: what is valid now."""
        return list(self._latched.values())

    def type_name(self, topic: str) -> str:
        """Return the type of a topic from which a message came."""
        return self.topics[topic].type_name or ''

    def problems(self, arm: str | None = None) -> list[str]:
        """Return what is wrong with the topics now, of one arm or of all."""
        return list(dict.fromkeys(
            problem for topic in self._of(arm) for problem in self.topics[topic].problems))

    def unusable(self) -> list[str]:
        """Return the topics that were never subscribed to because something is wrong."""
        return [topic for topic, topic_input in self.topics.items()
                if topic_input.request is None and topic_input.problems]

    def problems_so_far(self) -> list[str]:
        """Return what is or was wrong with the topics since the session began."""
        return list(self._problems_so_far)

    def absent(self) -> list[str]:
        """Return a sentence for each topic without a usable publisher."""
        return [self._absence(topic) for topic, topic_input in self.topics.items()
                if topic_input.request is None and not topic_input.problems]

    def found(self, topic_input: TopicInput) -> str:
        """Return a sentence on a topic that was subscribed to."""
        request = topic_input.request
        how = '' if request is None else ', '.join([
            'reliable' if request.reliable else 'best effort',
            *(['latched'] if request.transient_local else [])])
        return (f'{topic_input.topic}: found, {topic_input.type_name}, {how} '
                f'({self._uses(topic_input.topic)}).')

    def values(self, arm: str) -> dict[str, str]:
        """Return what only the live node knows of an arm's inputs, for its status."""
        values: dict[str, str] = {}
        for topic in self._of(arm):
            topic_input = self.topics[topic]
            for route in self._routes[topic]:
                if route.arm == arm:
                    loss = topic_input.loss
                    values[f'{route.role} publishers'] = str(topic_input.publishers)
                    values[f'{route.role} lost messages'] = (
                        str(loss.lost) if loss.lost is not None
                        else f'unobservable: {loss.reason}')
        return values

    def lost(self, topic: str) -> tuple[int | None, str]:
        """Return the number of lost messages of a topic, or None and the reason."""
        loss = self.topics[topic].loss
        return loss.lost, loss.reason

    def close(self) -> None:
        """Give all subscriptions back."""
        for topic_input in self.topics.values():
            topic_input.close()

    def _topic_input(self, topic: str, uses: Sequence[RouteLike],
                     supported: Mapping[str, Collection[str]]) -> TopicInput:
        types = [set(supported[ROLE_KINDS[route.role]]) for route in uses]
        wanted = Wanted(
            topic, tuple(use_words(route.arm, route.role) for route in uses),
            frozenset(set.intersection(*types)),
            latched=any(route.role in LATCHED_ROLES for route in uses))
        return TopicInput(self._node, self._configured.get(topic, topic), wanted, self._group)

    def _offers(self, topic: str) -> list[Offer]:
        name = self._configured.get(topic, topic)
        return [offer_of(found.topic_type, found.qos_profile)
                for found in self._node.get_publishers_info_by_topic(name)]

    def _of(self, arm: str | None) -> Iterable[str]:
        return (topic for topic, uses in self._routes.items()
                if arm is None or any(route.arm == arm for route in uses))

    def _uses(self, topic: str) -> str:
        return ' and '.join(use_words(route.arm, route.role) for route in self._routes[topic])

    def _absence(self, topic: str) -> str:
        names = [name for name, _ in self._node.get_topic_names_and_types()
                 if name not in self.topics and self._node.count_publishers(name)]
        near = difflib.get_close_matches(topic, names, n=2, cutoff=0.6)
        last = topic.rpartition('/')[2]
        near += [name for name in sorted(names)
                 if name.rpartition('/')[2] == last and name not in near][:2]
        hint = f'; did you mean {" or ".join(near)}?' if near else '.'
        return f'{topic}: absent, waiting for {self._uses(topic)}{hint}'
