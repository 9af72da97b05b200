# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The clock of receive times: the machine's, or the simulator's."""

from __future__ import annotations

from bisect import bisect_right
from collections import deque

from rclpy.clock import Clock, ClockType
from rclpy.event_handler import SubscriptionEventCallbacks
from rclpy.node import Node
from rosgraph_msgs.msg import Clock as ClockMessage

from teleop_eval.nodes.qos import CLOCK
from teleop_eval.nodes.topic_input import NeverExecuted

# Readings kept: those of one pause of this process at a 1 kHz clock, and some before.
KEPT_READINGS = 2000


class SystemReceiveClock:
    """Receive times as the middleware stamped them, on the machine's clock."""

    def __init__(self) -> None:
        self._clock = Clock(clock_type=ClockType.SYSTEM_TIME)

    def update(self) -> None:
        """Do nothing: the machine's clock runs by itself."""

    def now_ns(self) -> int:
        """Return the time now."""
        return int(self._clock.now().nanoseconds)

    def at(self, received_ns: int) -> int:
        """Return a message's receive time; now, where the middleware stamps none."""
        return received_ns if received_ns > 0 else self.now_ns()


class SimulatedReceiveClock:
    """
    Receive times on the simulator's clock.

    Draining a message may come 20 ms after it arrived. So the readings of /clock are drained
    too, and a message gets the last reading that had arrived before it: the node's clock as
    it was then, not as it is now.
    """

    def __init__(self, node: Node, group: NeverExecuted) -> None:
        self._node = node
        self._machine = SystemReceiveClock()
        self._subscription = node.create_subscription(
            ClockMessage, '/clock', lambda _: None, CLOCK, callback_group=group,
            event_callbacks=SubscriptionEventCallbacks(use_default_callbacks=False))
        self._received: deque[int] = deque(maxlen=KEPT_READINGS)
        self._readings: deque[int] = deque(maxlen=KEPT_READINGS)

    def update(self) -> None:
        """Take the readings that have arrived."""
        handle = self._subscription.handle
        with handle:
            while (taken := handle.take_message(ClockMessage, False)) is not None:
                message, info = taken
                self.add(self._machine.at(info['received_timestamp']),
                         message.clock.sec * 1_000_000_000 + message.clock.nanosec)

    def add(self, received_ns: int, reading_ns: int) -> None:
        """Keep a reading; zero means that the simulation has not begun."""
        if reading_ns > 0:
            self._received.append(received_ns)
            self._readings.append(reading_ns)

    def now_ns(self) -> int:
        """Return the latest reading, 0 before the first."""
        return self._readings[-1] if self._readings else 0

    def at(self, received_ns: int) -> int | None:
        """Return the reading when a message arrived, None before the first reading."""
        if not self._readings:
            return None
        place = bisect_right(self._received, received_ns) if received_ns > 0 else -1
        return self._readings[place - 1] if place > 0 else (
            self._readings[-1] if place < 0 else self._readings[0])
