# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Latency over a run: the window estimates of one delay, and what is known of it now."""

from __future__ import annotations

import re
from array import array
from collections import Counter, deque
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.blocks import ALIKE, MIN_BLOCKS
from teleop_eval.core.latency import DelayEstimate
from teleop_eval.core.medians import median_ci, median_error, why_none
from teleop_eval.core.metric import INSUFFICIENT, UNOBSERVABLE, Metric, joined, missing

# The level on /diagnostics follows the median of so many valid windows in a row.
LEVEL_WINDOWS = 3


@dataclass(frozen=True)
class Observed:
    """A delay in use: the value and how long ago it was observed, both in seconds."""

    delay_s: float
    age_s: float


class DelayNow:
    """What is known of one delay at this moment."""

    def __init__(self) -> None:
        self._last: tuple[float, int] | None = None
        self._recent: deque[float] = deque(maxlen=LEVEL_WINDOWS)
        self.estimate: DelayEstimate | None = None

    def add(self, estimate: DelayEstimate, end_ns: int) -> None:
        """Take the estimate of the window that ends at `end_ns`."""
        self.estimate = estimate
        if estimate.delay_s is not None:
            self._last = (estimate.delay_s, end_ns)
            self._recent.append(estimate.delay_s)
        else:
            self._recent.clear()

    def observed(self, now_ns: int, max_age_s: float) -> Observed | None:
        """Return the last observed delay, clamped at 0, None if it is too old."""
        if self._last is None:
            return None
        age_s = (now_ns - self._last[1]) / 1e9
        return Observed(max(self._last[0], 0.0), age_s) if age_s <= max_age_s else None

    @property
    def level_value(self) -> float | None:
        """Return the median of the last three valid windows in a row, None if fewer."""
        return float(np.median(self._recent)) if len(self._recent) == LEVEL_WINDOWS else None

    def interrupt(self) -> None:
        """Go on after a pause: the last delay still serves until it is too old."""
        self._recent.clear()
        self.estimate = None


class DelayStatistics:
    """
    Window estimates of one delay under one mapping.

    Windows overlap, but only those count that do not: from each one that gave a value to the
    next that begins after its end.
    """

    def __init__(self) -> None:
        # One every ten seconds: 70 kB in 8 h.
        self._delays, self._errors, self._peaks = array('d'), array('d'), array('d')
        self._samples = 0
        self._free_from_ns: int | None = None
        self.windows = 0
        self._reasons: Counter[str] = Counter()
        self._newest: dict[str, DelayEstimate] = {}
        self._space = ''

    def add(self, estimate: DelayEstimate, start_ns: int, end_ns: int, space: str) -> None:
        """Take one window; only windows that do not overlap an earlier one count in n."""
        if self._free_from_ns is not None and start_ns < self._free_from_ns:
            return
        self._space = space
        self.windows += 1
        if estimate.delay_s is not None:
            self._delays.append(estimate.delay_s)
            self._errors.append(estimate.standard_error_s or 0.0)
            self._peaks.append(estimate.correlation)
            self._samples += estimate.samples
            self._free_from_ns = end_ns
        else:
            # Sentences differ in their numbers; the same words are the same reason.
            words = re.sub(r'[0-9.]+', '#', estimate.reason)
            self._reasons[words] += 1
            self._newest[words] = estimate

    def restart(self) -> None:
        """Forget the time axis, as at the start of a segment."""
        self._free_from_ns = None

    @property
    def unobservable(self) -> bool:
        """Tell whether windows were looked at and none told the delay."""
        return not self._delays and any(
            one.status == UNOBSERVABLE for one in self._newest.values())

    def metric(self, *, caveat: str, reason: str) -> Metric:
        """
        Return the median over the windows that gave a value.

        `reason` says why there is no window at all; `caveat` goes with a value. Of the details,
        `standard_error_s` is that of the median, from the same windows as its interval;
        `window_standard_error_s` is the RMS of what single windows estimate of their own error.
        """
        details: dict[str, object] = {'windows': self.windows}
        if not self._delays:
            if not self._reasons:
                return missing(INSUFFICIENT, 's', reason, **details)
            words, times = self._reasons.most_common(1)[0]
            newest = self._newest[words]
            return missing(
                newest.status, 's', f'{newest.reason.removesuffix(".")} (in {times} of '
                f'{self.windows} windows that gave no value).', **details)
        delays, errors = np.array(self._delays), np.array(self._errors)
        details |= {
            'standard_error_s': median_error(delays),
            'window_standard_error_s': float(np.sqrt(np.mean(errors ** 2))),
            'p95_s': float(np.percentile(delays, 95.0)),
            'spread_s': float(np.std(delays, ddof=1)) if len(delays) > 1 else None,
            'correlation': float(np.median(self._peaks)),
            'space': self._space,
        }
        interval = median_ci(delays)
        why = why_none(delays)
        if interval is None and len(delays) >= MIN_BLOCKS and not why:
            why = ALIKE
        return Metric(
            float(np.median(delays)), 's', interval, len(delays),
            self._samples, reason=joined(caveat, why), details=details)


def window_metric(estimate: DelayEstimate | None, space: str) -> Metric:
    """Return one window's estimate as a metric."""
    if estimate is None:
        return missing(INSUFFICIENT, 's', 'no latency window has closed yet')
    if estimate.delay_s is None:
        return missing(estimate.status, 's', estimate.reason)
    return Metric(estimate.delay_s, 's', None, 1, estimate.samples, details={
        'standard_error_s': estimate.standard_error_s, 'correlation': estimate.correlation,
        'space': space})
