# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Latency over a run: the window estimates of one delay, and what is known of it now."""

from __future__ import annotations

import re
from collections import Counter, deque
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.blocks import median_ci
from teleop_eval.core.latency import DelayEstimate
from teleop_eval.core.metric import INSUFFICIENT, UNOBSERVABLE, Metric, missing

# The level on /diagnostics follows the median of so many valid windows in a row.
LEVEL_WINDOWS = 3


@dataclass(frozen=True)
class Observed:
    """A delay in use: the value and how long ago it was observed, both in seconds."""

    delay_s: float
    age_s: float


class DelayNow:
    """What is known of one delay at this moment, whatever the mapping."""

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

    def forget(self) -> None:
        """Begin anew, as after a change of mapping: another delay may hold now."""
        self._last = None
        self._recent.clear()
        self.estimate = None


class DelayStatistics:
    """All window estimates of one delay under one mapping."""

    def __init__(self) -> None:
        self._estimates: list[DelayEstimate] = []
        self._free_from_ns: int | None = None
        self.windows = 0
        self._reasons: Counter[str] = Counter()
        self._sentence: dict[str, str] = {}
        self._space = ''

    def add(self, estimate: DelayEstimate, start_ns: int, end_ns: int, space: str) -> None:
        """Take one window; only windows that do not overlap an earlier one count in n."""
        if self._free_from_ns is not None and start_ns < self._free_from_ns:
            return
        self._space = space
        self.windows += 1
        if estimate.delay_s is not None:
            self._estimates.append(estimate)
            self._free_from_ns = end_ns
        else:
            # Sentences differ in their numbers; the same words are the same reason.
            words = re.sub(r'[0-9.]+', '#', estimate.reason)
            self._reasons[words] += 1
            self._sentence[words] = estimate.reason

    def restart(self) -> None:
        """Forget the time axis, as at the start of a segment."""
        self._free_from_ns = None

    def metric(self, *, caveat: str, reason: str) -> Metric:
        """
        Return the median over the windows that gave a value.

        `reason` says why there is no window at all; `caveat` goes with a value.
        """
        details: dict[str, object] = {'windows': self.windows}
        if not self._estimates:
            if not self._reasons:
                return missing(INSUFFICIENT, 's', reason, **details)
            words, times = self._reasons.most_common(1)[0]
            return missing(
                UNOBSERVABLE, 's', f'{self._sentence[words]} (in {times} of {self.windows} '
                'windows that gave no value)', **details)
        delays = np.array([estimate.delay_s for estimate in self._estimates])
        errors = np.array([estimate.standard_error_s for estimate in self._estimates])
        peaks = np.array([estimate.correlation for estimate in self._estimates])
        details |= {
            'standard_error_s': float(np.sqrt(np.mean(errors ** 2))),
            'p95_s': float(np.percentile(delays, 95.0)),
            'spread_s': float(np.std(delays, ddof=1)) if len(delays) > 1 else None,
            'correlation': float(np.median(peaks)),
            'space': self._space,
        }
        return Metric(
            float(np.median(delays)), 's', median_ci(delays), len(delays),
            int(sum(estimate.samples for estimate in self._estimates)), reason=caveat,
            details=details)


def window_metric(estimate: DelayEstimate | None, space: str) -> Metric:
    """Return one window's estimate as a metric."""
    if estimate is None:
        return missing(INSUFFICIENT, 's', 'no latency window has closed yet')
    if estimate.delay_s is None:
        return missing(estimate.status, 's', estimate.reason)
    return Metric(estimate.delay_s, 's', None, 1, estimate.samples, details={
        'standard_error_s': estimate.standard_error_s, 'correlation': estimate.correlation,
        'space': space})
