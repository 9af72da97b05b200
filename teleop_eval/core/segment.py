# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""One segment of an arm: windows on one frozen time base, closed one after the other."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

from teleop_eval.core.closing import deadline_ns, first_from, may_close, moved_clock
from teleop_eval.core.measure import ArmMeasurement
from teleop_eval.core.results import WindowResult
from teleop_eval.core.settings import TimeSettings
from teleop_eval.core.streams import HeldState, SampledStream
from teleop_eval.core.transport_age import TransportAge
from teleop_eval.core.window import Span

NEVER_NS = 2 ** 63 - 1


@dataclass(frozen=True)
class SegmentInputs:
    """What the windows of a segment let go of when they close."""

    streams: list[SampledStream]
    states: Collection[HeldState]
    ages: Collection[TransportAge]


class Segment:
    """
    Closes windows from the origin of a frozen grid on.

    Attributes
    ----------
    end_ns
        End of the next window, on the time axis.
    closed_until_ns
        Start of the next window: samples before it are late.
    next_check_ns
        Receive time from which the next window may close without waiting for a sample.

    """

    def __init__(self, origin_ns: int, period_ns: int, settings: TimeSettings,
                 inputs: SegmentInputs, measurement: ArmMeasurement) -> None:
        self._origin_ns = origin_ns
        self._period_ns = period_ns
        self._cells = max(1, round(settings.window_s * 1e9 / period_ns))
        self._lateness_ns = round(settings.lateness_s * 1e9)
        self._tolerance_s = settings.clock_tolerance_s
        self._inputs = inputs
        self._closing = [stream for stream in inputs.streams if stream.closes_windows]
        self._measurement = measurement
        self._next_cell = 0
        self.plan_next()

    def plan_next(self) -> None:
        """Note where the next window lies, and from when it may close without a stream."""
        self.closed_until_ns = self._origin_ns + self._next_cell * self._period_ns
        self.end_ns = self.closed_until_ns + self._cells * self._period_ns
        self.next_check_ns = min(
            deadline_ns(stream, self.end_ns, self._lateness_ns) for stream in self._closing)

    def close_ready(self, receive_ns: int, results: list[WindowResult]) -> str:
        """
        Close every window whose samples are all there or no longer waited for.

        Returns
        -------
        Which clock moved away during the last of them, '' if none did. The segment is at its
        end then.

        """
        while may_close(self._closing, self.end_ns, receive_ns=receive_ns,
                        lateness_ns=self._lateness_ns):
            silent = self._silent_windows()
            if silent is None:
                # Nothing to evaluate: look again when a sample comes.
                self.next_check_ns = NEVER_NS
                return ''
            if silent:
                self._skip(silent)
                continue
            moved = moved_clock(self._closing, self.closed_until_ns, self._tolerance_s)
            self._close(self._cells, receive_ns, results)
            if moved:
                return moved
        return ''

    def flush(self, receive_ns: int, results: list[WindowResult]) -> None:
        """Close what is there, the last window as far as it goes."""
        while (silent := self._silent_windows()) is not None:
            if silent:
                self._skip(silent)
                continue
            last_ns = max(stream.last_ns or 0 for stream in self._closing)
            # The last cell may end beyond the last sample: the grid masks it, but the joint
            # error, which is not gridded, still sees that sample.
            cells = (last_ns - self.closed_until_ns) // self._period_ns + 1
            self._close(min(int(cells), self._cells), receive_ns, results)

    def _silent_windows(self) -> int | None:
        """Return the number of windows before the next sample, None if there is no sample."""
        first_ns = first_from(self._closing, self.closed_until_ns)
        length_ns = self.end_ns - self.closed_until_ns
        return None if first_ns is None else (first_ns - self.closed_until_ns) // length_ns

    def _skip(self, windows: int) -> None:
        """
        Leave out windows without any sample.

        A clock that steps ahead by hours must not cost an empty window every two seconds.
        """
        start_ns = self.closed_until_ns
        self._next_cell += windows * self._cells
        self.plan_next()
        self._measurement.skip(start_ns, self.closed_until_ns)
        self._let_go(self.closed_until_ns)

    def _close(self, cells: int, receive_ns: int, results: list[WindowResult]) -> None:
        span = Span(self._origin_ns, self._period_ns, self._next_cell, cells)
        result = self._measurement.window(span, receive_ns)
        if result is not None:
            results.append(result)
        self._next_cell += cells
        self._let_go(span.end_ns)
        for age in self._inputs.ages:
            age.close_window(receive_ns)
        self.plan_next()

    def _let_go(self, end_ns: int) -> None:
        """Let go of what no later window needs; what comes for an earlier one is late."""
        for stream in self._inputs.streams:
            stream.close(end_ns)
        for state in self._inputs.states:
            state.close(end_ns)
