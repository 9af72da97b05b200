# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Buffers of one arm's inputs between arrival and the closing of a window.

Sampled streams are interpolated and close windows; held states keep their value until the
next one and never do. Both start raw (receive time and stamp kept apart) and are given
their time axis once the arm has frozen its time base.
"""

from __future__ import annotations

import bisect
from dataclasses import dataclass, field

import numpy as np

# A stamp that falls back further than this belongs to a new run of that clock.
CLOCK_STEP_NS = 1_000_000_000


@dataclass
class StreamCounts:
    """What became of the messages of one input."""

    messages: int = 0
    late: int = 0
    out_of_order: int = 0
    non_finite: int = 0
    gaps: int = 0
    gap_ns: int = 0


@dataclass(frozen=True)
class Items:
    """
    Samples of a stretch of time, taken out of a stream.

    `times_ns` (n,) increasing; `values` (n, d); `orientations` (n, 4) x, y, z, w or None;
    `enabled` (n, d) or None.
    """

    times_ns: np.ndarray
    values: np.ndarray
    orientations: np.ndarray | None
    enabled: np.ndarray | None


Row = tuple[int, int, np.ndarray, 'np.ndarray | None', 'np.ndarray | None']
"""One sample: receive_ns, stamp_ns, value (d,), orientation (4,) or None, enabled or None."""


class SampledStream:
    """One input that is interpolated, or a held command with times of its own."""

    def __init__(self, role: str, topic: str) -> None:
        self.role = role
        self.topic = topic
        self.counts = StreamCounts()
        self.width = 0
        self.restart()

    def restart(self) -> None:
        """Begin anew, as at the start of a segment; counts go on."""
        self.raw: list[Row] = []
        self._times: list[int] = []
        self._rows: list[Row] = []
        self._by_stamp: bool | None = None
        self._last_stamp = 0
        self.watermark_ns: int | None = None
        self.last_ns: int | None = None
        self.offset_ns = 0
        self.max_gap_ns = 0

    @property
    def present(self) -> bool:
        """Tell whether any sample has come in this segment."""
        return bool(self.raw) or self.last_ns is not None

    def drop_raw(self) -> None:
        """Forget what came before a clock step inside the warm-up."""
        self.raw.clear()

    def stepped_back(self, stamp_ns: int) -> bool:
        """Tell whether a stamp falls back by more than the clock step, and remember it."""
        stepped = 0 < stamp_ns < self._last_stamp - CLOCK_STEP_NS
        self._last_stamp = stamp_ns
        return stepped

    def add(self, row: Row) -> None:
        """Take one sample: raw before the freeze, on the time axis after it."""
        if self._by_stamp is None:
            self.raw.append(row)
        else:
            self._accept(row)

    def freeze(self, *, by_stamp: bool, offset_ns: int, max_gap_ns: int) -> None:
        """Fix the time axis and put the raw samples on it."""
        self._by_stamp = by_stamp
        self.offset_ns = offset_ns
        self.max_gap_ns = max_gap_ns
        raw, self.raw = self.raw, []
        for row in raw:
            self._accept(row)

    def replace_after(self, time_ns: int) -> None:
        """Drop planned samples from a time on: a new trajectory replaces the old one's rest."""
        keep = bisect.bisect_left(self._times, time_ns)
        del self._times[keep:]
        del self._rows[keep:]
        self.last_ns = self._times[-1] if self._times else self.watermark_ns

    def _accept(self, row: Row) -> None:
        time_ns = row[1] if self._by_stamp else row[0]
        if self.watermark_ns is not None and time_ns < self.watermark_ns:
            self.counts.late += 1
            return
        last = self.last_ns
        if last is not None:
            if time_ns <= last:
                self.counts.out_of_order += 1
                return
            if time_ns - last > self.max_gap_ns:
                self.counts.gaps += 1
                self.counts.gap_ns += time_ns - last
        self._times.append(time_ns)
        self._rows.append(row)
        self.last_ns = time_ns

    def first_ns(self) -> int | None:
        """Return the first time on the axis, None where there is none."""
        return self._times[0] if self._times else None

    def next_from(self, time_ns: int) -> int | None:
        """Return the first kept time at or after a time, None if there is none."""
        place = bisect.bisect_left(self._times, time_ns)
        return self._times[place] if place < len(self._times) else None

    def items(self, end_ns: int) -> Items:
        """Return the kept samples up to and including the first one at or after `end_ns`."""
        stop = min(bisect.bisect_left(self._times, end_ns) + 1, len(self._times))
        rows = self._rows[:stop]
        turned = bool(rows) and all(row[3] is not None for row in rows)
        masked = bool(rows) and all(row[4] is not None for row in rows)
        return Items(
            np.array(self._times[:stop], dtype=np.int64),
            np.array([row[2] for row in rows], dtype=float).reshape(stop, self.width),
            np.array([row[3] for row in rows], dtype=float) if turned else None,
            np.array([row[4] for row in rows], dtype=bool) if masked else None,
        )

    def offset_in(self, start_ns: int, end_ns: int) -> float | None:
        """Return the median of stamp minus receive time between two times, in ns."""
        first = bisect.bisect_left(self._times, start_ns)
        stop = bisect.bisect_left(self._times, end_ns)
        if stop - first < 5:
            return None
        return float(np.median([row[1] - row[0] for row in self._rows[first:stop]]))

    def close(self, end_ns: int) -> None:
        """Let go of what no later window needs; samples before `end_ns` are now late."""
        self.watermark_ns = end_ns
        # One sample before the boundary stays, to interpolate across it.
        drop = max(bisect.bisect_right(self._times, end_ns) - 1, 0)
        del self._times[:drop]
        del self._rows[:drop]

    def remaining(self) -> list[Row]:
        """Return the samples at or after the watermark, for the next segment."""
        return self._rows[bisect.bisect_left(self._times, self.watermark_ns or 0):]


@dataclass
class HeldState:
    """A state that keeps its value until the next message; times are receive times."""

    role: str
    topic: str
    counts: StreamCounts = field(default_factory=StreamCounts)
    offset_ns: int = 0
    _times: list[int] = field(default_factory=list)
    _values: list[object] = field(default_factory=list)

    def add(self, receive_ns: int, value: object, watermark_ns: int | None) -> None:
        """Take a new value; a late one holds from the watermark on."""
        time_ns = receive_ns + self.offset_ns
        if watermark_ns is not None and time_ns < watermark_ns:
            self.counts.late += 1
            time_ns = watermark_ns
        if self._times and time_ns < self._times[-1]:
            time_ns = self._times[-1]
        self._times.append(time_ns)
        self._values.append(value)

    def shift(self, offset_ns: int) -> None:
        """Move the axis of the kept values to a newly frozen time base."""
        change = offset_ns - self.offset_ns
        self.offset_ns = offset_ns
        self._times = [time + change for time in self._times]

    def at(self, times_ns: np.ndarray) -> list[object]:
        """Return the value that holds at each time, None before the first."""
        index = np.searchsorted(np.array(self._times, dtype=np.int64), times_ns, side='right')
        return [self._values[i - 1] if i else None for i in index]

    def changes(self, start_ns: int, end_ns: int) -> list[int]:
        """Return the times in (start, end] at which the value really changed."""
        found = []
        for i, time_ns in enumerate(self._times):
            before = self._values[i - 1] if i else None
            if start_ns < time_ns <= end_ns and self._values[i] != before:
                found.append(time_ns)
        return found

    @property
    def latest(self) -> object:
        """Return the newest value, None before the first."""
        return self._values[-1] if self._values else None

    def close(self, end_ns: int) -> None:
        """Let go of values that no later window needs."""
        # The value before the boundary stays: a change on it is judged against that.
        drop = max(bisect.bisect_left(self._times, end_ns) - 1, 0)
        del self._times[:drop]
        del self._values[:drop]
