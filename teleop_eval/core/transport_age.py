# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Age of messages on arrival, and what it says about the clocks."""

from __future__ import annotations

import math

import numpy as np

from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.metric import NOT_CONFIGURED, UNOBSERVABLE, Metric, missing

# A change of the smallest age this large over the run, and this many standard errors clear
# of zero, is called drift: crystal clocks part by up to about 50 ppm (common practice),
# 5 ms in 100 s.
DRIFT_S = 0.005
DRIFT_ERRORS = 4.0
# More than come in one window; only where no window closes are there as many.
MOST_PENDING = 100_000


class TransportAge:
    """
    Receive time minus header stamp of one input.

    Ages are counted from the first one, so that a clock that is off by a minute costs no
    resolution, with one histogram for either side. The smallest age of each window follows
    the clocks, since delays only add; its slope over time is the drift.
    """

    def __init__(self) -> None:
        self._positive = StreamingHistogram(floor=1e-6)
        self._negative = StreamingHistogram(floor=1e-6)
        self._minimum = math.inf
        self._first: float | None = None
        self._pending: list[int] = []
        self._zero_stamps = 0
        # Count and sums of t, y, tt, ty, yy of the windows' minima: a line in constant memory.
        self._sums = np.zeros(6)
        self._origin_ns: int | None = None

    def add(self, receive_ns: int, stamp_ns: int) -> None:
        """Take one message."""
        if stamp_ns == 0:
            self._zero_stamps += 1
        else:
            if self._origin_ns is None:
                self._origin_ns = receive_ns
            self._pending.append(receive_ns - stamp_ns)
            if len(self._pending) >= MOST_PENDING:
                self.close_window(receive_ns)

    def close_window(self, receive_ns: int) -> None:
        """Put the pending messages into the statistics."""
        if not self._pending:
            return
        ages = np.array(self._pending) / 1e9
        self._pending.clear()
        if self._first is None:
            self._first = float(ages[0])
        beyond = ages - self._first
        self._positive.add(beyond[beyond >= 0.0])
        self._negative.add(-beyond[beyond < 0.0])
        least = float(ages.min())
        self._minimum = min(self._minimum, least)
        t = (receive_ns - (self._origin_ns or 0)) / 1e9
        self._sums += [1.0, t, least, t * t, t * least, least * least]

    def _percentile(self, p: float) -> float:
        """Return a percentile over both sides of the first age."""
        first = self._first or 0.0
        below, above = self._negative.count, self._positive.count
        rank = p / 100.0 * (below + above)
        if rank < below:
            return first - self._negative.percentile(100.0 * (below - rank) / below)
        return first + (self._positive.percentile(100.0 * (rank - below) / above)
                        if above else 0.0)

    def drift_s(self) -> float | None:
        """Return the change of the smallest age over the run, None if there is no drift."""
        n, t, y, tt, ty, yy = self._sums
        if n < 10:
            return None
        spread = tt - t * t / n
        if spread <= 0.0:
            return None
        slope = (ty - t * y / n) / spread
        residual = max((yy - y * y / n) - slope * slope * spread, 0.0)
        error = math.sqrt(residual / (n - 2) / spread)
        duration = math.sqrt(12.0 * spread / n)
        change = slope * duration
        drifting = abs(change) > DRIFT_S and abs(slope) > DRIFT_ERRORS * error
        return float(change) if drifting else None

    def warning(self) -> str:
        """Return the sentence about unsynchronised clocks, '' if there is none."""
        if self._minimum < 0.0:
            return (f'smallest transport age is {self._minimum * 1e3:.1f} ms, below zero: the '
                    'clocks are not synchronised, distrust every stamp-based latency')
        drift = self.drift_s()
        if drift is not None:
            return (f'transport age drifts by {drift * 1e3:+.1f} ms over the run: the clocks '
                    'are not synchronised, distrust every stamp-based latency')
        return ''

    def metrics(self, *, simulated_time: bool) -> dict[str, Metric]:
        """
        Return transport_age_min_s, transport_age_s (the median) and transport_age_jitter_s.

        Jitter is the 95th minus the 5th percentile.
        """
        names = ('transport_age_min_s', 'transport_age_s', 'transport_age_jitter_s')
        n = self._positive.count + self._negative.count
        if simulated_time:
            return {name: missing(NOT_CONFIGURED, 's', 'there is no transport age under '
                                  'simulated time') for name in names}
        if not n:
            why = ('header stamps are zero or absent' if self._zero_stamps
                   else 'no message with a header stamp came')
            return {name: missing(UNOBSERVABLE, 's', why) for name in names}
        warning = self.warning()
        values = (self._minimum, self._percentile(50.0),
                  self._percentile(95.0) - self._percentile(5.0))
        return {name: Metric(value, 's', None, int(self._sums[0]), n, reason=warning)
                for name, value in zip(names, values, strict=True)}
