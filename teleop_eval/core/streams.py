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
from collections import deque
from dataclasses import dataclass, field

import numpy as np

# A stamp that falls back further than this belongs to a new run of that clock.
CLOCK_STEP_NS = 1_000_000_000
# More than the longest window, warm-up and lateness hold at 1 kHz.
MOST_ROWS = 200_000


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

    def picked(self, columns: list[int]) -> Items:
        """Return the samples with these columns of their values."""
        return Items(self.times_ns, self.values[:, columns], self.orientations,
                     None if self.enabled is None else self.enabled[:, columns])

    def since(self, time_ns: int) -> Items:
        """Return the samples from the last one at or before a time on."""
        first = max(int(np.searchsorted(self.times_ns, time_ns, side='right')) - 1, 0)
        return self._cut(slice(first, None))

    def followed_by(self, later: Items) -> Items:
        """Return these samples up to where the later ones begin, and then those."""
        if not len(later.times_ns):
            return self
        stop = int(np.searchsorted(self.times_ns, later.times_ns[0]))
        if not stop:
            return later
        before = self._cut(slice(0, stop))
        return Items(
            np.concatenate([before.times_ns, later.times_ns]),
            np.concatenate([before.values, later.values]),
            _both(before.orientations, later.orientations),
            _both(before.enabled, later.enabled))

    def _cut(self, part: slice) -> Items:
        return Items(self.times_ns[part], self.values[part],
                     None if self.orientations is None else self.orientations[part],
                     None if self.enabled is None else self.enabled[part])


def _both(before: np.ndarray | None, later: np.ndarray | None) -> np.ndarray | None:
    if before is None or later is None:
        return None
    return np.concatenate([before, later])


Row = tuple[int, int, np.ndarray, 'np.ndarray | None', 'np.ndarray | None']
"""One sample: receive_ns, stamp_ns, value (d,), orientation (4,) or None, enabled or None."""


class SampledStream:
    """
    One input with times of its own: interpolated, held or planned ahead.

    Attributes
    ----------
    held
        Whether a value stays until the next one (a command with zero-order hold).
    planned
        Whether one message gives several points ahead of time, which replace those of the
        message before from the first point on.
    matched
        Whether any message could be used, in whatever segment.
    offset_ns
        Time on the axis minus receive time.

    """

    def __init__(self, role: str, topic: str, *, held: bool = False) -> None:
        self.role = role
        self.topic = topic
        self.held = held
        self.planned = False
        self.matched = False
        self.counts = StreamCounts()
        self.width = 0
        self.restart()

    def restart(self) -> None:
        """Begin anew, as at the start of a segment; counts go on."""
        self._raw: deque[list[Row]] = deque(maxlen=MOST_ROWS)
        self._times: list[int] = []
        self._rows: list[Row] = []
        self.frozen = False
        self.by_stamp = False
        self._last_stamp = 0
        self.watermark_ns: int | None = None
        self.last_ns: int | None = None
        self.offset_ns = 0
        self.max_gap_ns = 0

    @property
    def closes_windows(self) -> bool:
        """Tell whether windows wait for this stream: not for what lasts or is planned."""
        return not (self.held or self.planned)

    @property
    def present(self) -> bool:
        """Tell whether any sample has come in this segment."""
        return bool(self._raw) or self.last_ns is not None

    @property
    def raw(self) -> list[Row]:
        """Return the samples that came before the freeze."""
        return [row for rows in self._raw for row in rows]

    def drop_raw(self, *, keep: int = 0) -> None:
        """Forget what came before the freeze, but for the newest `keep` messages."""
        while len(self._raw) > keep:
            self._raw.popleft()

    def stepped_back(self, stamp_ns: int) -> int:
        """Return by how many ns a stamp falls back, 0 below the clock step; remember it."""
        back_ns = self._last_stamp - stamp_ns
        self._last_stamp = stamp_ns
        return back_ns if stamp_ns > 0 and back_ns > CLOCK_STEP_NS else 0

    def add(self, rows: list[Row]) -> None:
        """Take the rows of one message: raw before the freeze, on the axis after it."""
        self.matched = True
        if self.frozen:
            self._take(rows)
        else:
            self._raw.append(rows)

    def freeze(self, *, by_stamp: bool, offset_ns: int, max_gap_ns: int) -> None:
        """Fix the time axis and put the raw samples on it."""
        self.frozen = True
        self.by_stamp = by_stamp
        self.offset_ns = offset_ns
        self.max_gap_ns = max_gap_ns
        raw, self._raw = self._raw, deque(maxlen=MOST_ROWS)
        for rows in raw:
            self._take(rows)

    def time_of(self, row: Row) -> int:
        """Return a row's time on the axis; without a stamp it follows from receive time."""
        return row[1] if self.by_stamp and row[1] else row[0] + self.offset_ns

    def _take(self, rows: list[Row]) -> None:
        if self.planned:
            self._replan(rows)
        elif self.held:
            self._hold(rows)
        else:
            self._sample(rows)
        if len(self._times) > MOST_ROWS:
            # Only a stream gets here that runs on while no window closes.
            del self._times[:MOST_ROWS // 2]
            del self._rows[:MOST_ROWS // 2]

    def _sample(self, rows: list[Row]) -> None:
        for row in rows:
            time_ns, last = self.time_of(row), self.last_ns
            if self.watermark_ns is not None and time_ns < self.watermark_ns:
                self.counts.late += 1
                continue
            if last is not None and time_ns - last > self.max_gap_ns:
                self.counts.gaps += 1
                self.counts.gap_ns += time_ns - last
            elif last is not None and time_ns <= last:
                self.counts.out_of_order += 1
                continue
            self._append(time_ns, row)

    def _hold(self, rows: list[Row]) -> None:
        for row in rows:
            time_ns = self.time_of(row)
            if self.watermark_ns is not None and time_ns < self.watermark_ns:
                # Dropped, the value before it would go on until the next message.
                self.counts.late += 1
                time_ns = self.watermark_ns
                if self.last_ns == time_ns:
                    self._rows[-1] = row
                    continue
            if self.last_ns is not None and time_ns <= self.last_ns:
                self.counts.out_of_order += 1
                continue
            self._append(time_ns, row)

    def _replan(self, rows: list[Row]) -> None:
        # Points before the watermark stay: the plan leads from them into the next window.
        cut = bisect.bisect_left(self._times, self.time_of(rows[0]))
        del self._times[cut:]
        del self._rows[cut:]
        self.last_ns = self._times[-1] if self._times else None
        for row in rows:
            time_ns = self.time_of(row)
            if self.last_ns is not None and time_ns <= self.last_ns:
                self.counts.out_of_order += 1
                continue
            self._append(time_ns, row)

    def _append(self, time_ns: int, row: Row) -> None:
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
        times = np.array(self._times[:stop], dtype=np.int64)
        if not stop:
            return Items(times, np.zeros((0, self.width)), None, None)
        _, _, values, orientations, enabled = zip(*self._rows[:stop], strict=True)
        return Items(
            times, np.concatenate(values).reshape(stop, -1).astype(float, copy=False),
            None if any(one is None for one in orientations)
            else np.concatenate(orientations).reshape(stop, 4),
            None if any(one is None for one in enabled)
            else np.concatenate(enabled).reshape(stop, -1).astype(bool, copy=False),
        )

    def offset_from(self, start_ns: int) -> float | None:
        """Return the median of stamp minus receive time from a time on, in ns."""
        rows = self._rows[bisect.bisect_left(self._times, start_ns):]
        if len(rows) < 5:
            return None
        return float(np.median([row[1] - row[0] for row in rows]))

    def close(self, end_ns: int) -> None:
        """Let go of what no later window needs; samples before `end_ns` are now late."""
        self.watermark_ns = end_ns
        # One sample before the boundary stays, to interpolate across it.
        drop = max(bisect.bisect_right(self._times, end_ns) - 1, 0)
        del self._times[:drop]
        del self._rows[:drop]

    def remaining(self) -> list[list[Row]]:
        """Return what no window has used yet, message by message, for the next segment."""
        if not self.frozen:
            return list(self._raw)
        first = bisect.bisect_left(self._times, self.watermark_ns or 0)
        # What holds at the watermark began before it.
        rows = self._rows[max(first - 1, 0) if self.held else first:]
        return [rows] if self.planned and rows else [[row] for row in rows]

    @property
    def newest(self) -> Row | None:
        """Return the newest sample, None before the first."""
        return self._rows[-1] if self._rows else self._raw[-1][-1] if self._raw else None


@dataclass
class HeldState:
    """A state that keeps its value until the next message; times are receive times."""

    role: str
    topic: str
    counts: StreamCounts = field(default_factory=StreamCounts)
    offset_ns: int = 0
    _times: list[int] = field(default_factory=list)
    _values: list[object] = field(default_factory=list)
    _dropped: int = 0
    ever_true: bool = False

    def add(self, receive_ns: int, value: object, watermark_ns: int | None) -> None:
        """Take a new value; a late one holds from the watermark on."""
        self.ever_true |= value is True
        if self._values and self._values[-1] == value:
            return
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

    def known(self) -> list[object]:
        """Return the kept values in the order of their times."""
        return list(self._values)

    def place(self, times_ns: np.ndarray) -> np.ndarray:
        """Return how many kept values (n,) began at or before each time."""
        return np.searchsorted(np.array(self._times, dtype=np.int64), times_ns, side='right')

    def changed_before(self, times_ns: np.ndarray) -> np.ndarray:
        """Return how often the value changed (n,) at or before each time since the start."""
        return self._dropped + self.place(times_ns)

    def last_change(self, time_ns: int) -> int | None:
        """Return the last time at or before a time at which the value changed."""
        place = bisect.bisect_right(self._times, time_ns)
        return self._times[place - 1] if place else None

    def changes(self, start_ns: int, end_ns: int) -> list[int]:
        """Return the times in [start, end) at which the value changed."""
        return [time_ns for time_ns in self._times if start_ns <= time_ns < end_ns]

    @property
    def latest(self) -> object:
        """Return the newest value, None before the first."""
        return self._values[-1] if self._values else None

    def close(self, end_ns: int) -> None:
        """Let go of values that no later window needs."""
        # The value before the boundary stays: a change on it is judged against that.
        drop = max(bisect.bisect_left(self._times, end_ns) - 1, 0)
        self._dropped += drop
        del self._times[:drop]
        del self._values[:drop]
