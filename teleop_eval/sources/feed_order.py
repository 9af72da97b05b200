# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Put received messages into the one order that the evaluator and the recorded inputs share.

The evaluator's results depend on nothing but the sequence (receive_ns, topic, bytes). What
this module gives out is that sequence: sorted within each drained batch, its times strictly
increasing for ever, whatever the clock does. A clock that steps back by more than a second
starts a new segment: an event is put in and a stored offset keeps the times increasing.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

STEP_NS = 1_000_000_000


class Received(NamedTuple):
    """
    One serialized message; sorts by receive time, topic, publication number.

    `number` is the publication number, 0 where the middleware gives none.
    """

    receive_ns: int
    topic: str
    number: int
    data: bytes


class FeedOrder:
    """
    Turn batches of received messages into a strictly increasing sequence.

    Parameters
    ----------
    event_topic, segment_data
        Topic and serialized message of the event that marks a new segment.
    step_ns
        A step back of the receive clock by more than this starts a new segment.

    """

    def __init__(self, event_topic: str, segment_data: bytes, *, step_ns: int = STEP_NS) -> None:
        self._event_topic = event_topic
        self._segment_data = segment_data
        self._step_ns = step_ns
        self._held: list[Received] = []
        self._clock_ns: int | None = None  # latest reading of the receive clock as it is
        self._last_ns: int | None = None  # last time given out
        self.offset_ns = 0
        self.segments = 0

    def order(self, batch: Iterable[Received], *, cut_ns: int | None = None) -> list[Received]:
        """
        Return the messages that are ready, in order, with their final receive times.

        Parameters
        ----------
        batch
            Messages of each topic in their order of arrival.
        cut_ns
            Receive clock when draining began. A message that arrived later waits for the
            next batch, since an earlier one of a topic already drained may come then. None
            holds nothing back.

        """
        held = len(self._held)
        arrived = [*self._held, *batch]
        self._held = []
        if not arrived:
            return []
        if self._may_step(arrived):
            return self._give_out(self._sorted_by_part(arrived))
        if cut_ns is not None:
            # Nothing waits twice: a wrong cut must not starve the evaluator.
            self._held = [item for item in arrived[held:] if item.receive_ns > cut_ns]
            if self._held:
                arrived = arrived[:held] + [
                    item for item in arrived[held:] if item.receive_ns <= cut_ns]
        arrived.sort()
        return self._give_out_steady(arrived)

    def feed_time_ns(self, clock_ns: int) -> int:
        """Return a reading of the receive clock as time of the sequence, never going back."""
        shifted = clock_ns + self.offset_ns
        return shifted if self._last_ns is None else max(shifted, self._last_ns)

    def _may_step(self, items: list[Received]) -> bool:
        times = [item.receive_ns for item in items]
        low, high = min(times), max(times)
        first = high if self._clock_ns is None else max(high, self._clock_ns)
        return first - low > self._step_ns

    def _sorted_by_part(self, items: list[Received]) -> list[Received]:
        """
        Sort what came before a step ahead of what came after it.

        Within a topic the order of arrival shows where the clock stepped; sorting by time
        alone would put the new, smaller times first and turn the step around.
        """
        latest: dict[str, int] = {}
        parts: dict[str, int] = {}
        keyed: list[tuple[int, Received]] = []
        for item in items:
            time_ns, topic = item.receive_ns, item.topic
            known = latest.get(topic, self._clock_ns)
            if known is not None and time_ns < known - self._step_ns:
                parts[topic] = parts.get(topic, 0) + 1
                latest[topic] = time_ns
            else:
                latest[topic] = time_ns if known is None else max(known, time_ns)
            keyed.append((parts.get(topic, 0), item))
        keyed.sort()
        return [item for _, item in keyed]

    def _give_out_steady(self, items: list[Received]) -> list[Received]:
        """Give out sorted messages among which the clock does not step: nearly always."""
        if not items:
            return []
        latest = items[-1].receive_ns
        self._clock_ns = latest if self._clock_ns is None else max(latest, self._clock_ns)
        offset, last = self.offset_ns, self._last_ns
        out: list[Received] = []
        for item in items:
            time_ns = item.receive_ns + offset
            if last is not None and time_ns <= last:
                time_ns = last + 1
            last = time_ns
            out.append(item if time_ns == item.receive_ns
                       else Received(time_ns, item.topic, item.number, item.data))
        self._last_ns = last
        return out

    def _give_out(self, items: list[Received]) -> list[Received]:
        out: list[Received] = []
        for item in items:
            clock_ns, topic, number, data = item
            if self._clock_ns is not None and clock_ns < self._clock_ns - self._step_ns:
                out.append(self._new_segment(clock_ns))
            elif self._clock_ns is not None:
                clock_ns = max(clock_ns, self._clock_ns)
            self._clock_ns = clock_ns
            time_ns = item.receive_ns + self.offset_ns
            if self._last_ns is not None and time_ns <= self._last_ns:
                time_ns = self._last_ns + 1
            self._last_ns = time_ns
            out.append(item if time_ns == item.receive_ns
                       else Received(time_ns, topic, number, data))
        return out

    def _new_segment(self, clock_ns: int) -> Received:
        """Return the event, one nanosecond after the past, and shift what follows behind it."""
        assert self._last_ns is not None  # a step needs an earlier message
        self._last_ns += 1
        self.offset_ns = self._last_ns + 1 - clock_ns
        self.segments += 1
        return Received(self._last_ns, self._event_topic, 0, self._segment_data)
