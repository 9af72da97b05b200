# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""What the first seconds of a segment fix: time base, gap lengths, grid rate and origin."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.resample import default_max_gap_ns
from teleop_eval.core.settings import TimeSettings
from teleop_eval.core.streams import SampledStream
from teleop_eval.core.timebase import StreamClock, TimeBase, choose_time_base, observe_clock

MIN_GRID_HZ, MAX_GRID_HZ = 50.0, 1000.0
# A value that stays, or a point planned ahead, has no gap behind it.
NEVER_A_GAP_NS = 2 ** 62


@dataclass(frozen=True)
class Frozen:
    """
    What is fixed for one segment.

    `rate_hz` is that of the slowest sampled stream, at least 50 Hz; `origin_ns` is the
    grid's origin in the time base.
    """

    time_base: TimeBase
    rate_hz: float
    origin_ns: int


def can_freeze(streams: Mapping[str, SampledStream]) -> bool:
    """Tell whether there is a sampled stream with at least two samples."""
    return any(stream.closes_windows and len(stream.raw) > 1 for stream in streams.values())


def freeze(streams: Mapping[str, SampledStream], settings: TimeSettings) -> Frozen:
    """
    Choose from the raw samples of the streams (by role) and put them on their axis.

    Raises
    ------
    ValueError
        If no sampled stream has two samples.

    """
    tolerance_ns = round(settings.clock_tolerance_s * 1e9)
    clocks = {role: _clock(stream) for role, stream in streams.items()}
    base = choose_time_base(
        {role: clocks[role] for role in streams if streams[role].closes_windows},
        tolerance_ns=tolerance_ns)
    # A held or planned command whose stamps do not serve goes by its receive time. That places
    # it well only while the other streams' clock is near the receive clock.
    astray = {role for role, stream in streams.items()
              if not stream.closes_windows and not _agrees(clocks[role], base, tolerance_ns)}
    if base.by_stamp and astray and abs(base.common_offset_ns) > tolerance_ns:
        base = choose_time_base(
            {role: clock for role, clock in clocks.items()
             if streams[role].closes_windows or role in astray}, tolerance_ns=tolerance_ns)
    rates, firsts = [], []
    for role, stream in streams.items():
        by_stamp = base.by_stamp and (
            stream.closes_windows or _agrees(clocks[role], base, tolerance_ns))
        offset_ns = clocks[role].offset_ns if by_stamp else base.common_offset_ns
        times = np.unique([row[1] if by_stamp else row[0] for row in stream.raw])
        stream.freeze(by_stamp=by_stamp, offset_ns=offset_ns or 0,
                      max_gap_ns=_max_gap_ns(stream, times, settings))
        first = stream.first_ns()
        if stream.closes_windows and len(times) > 1 and first is not None:
            rates.append(_rate_hz(times))
            firsts.append(first)
    if not rates:
        raise ValueError('no sampled stream has two samples')
    rate_hz = settings.grid_rate_hz or min(max(MIN_GRID_HZ, round(min(rates))), MAX_GRID_HZ)
    # A first stamp that is far off must not open hours of empty windows.
    origin_ns = max(min(firsts), max(firsts) - round(settings.warm_up_s * 1e9))
    known = {role: clock.offset_ns for role, clock in clocks.items()}
    return Frozen(dataclasses.replace(base, offsets_ns=known), rate_hz, origin_ns)


def _clock(stream: SampledStream) -> StreamClock:
    raw = stream.raw
    return observe_clock([row[1] for row in raw], [row[0] for row in raw])


def _agrees(clock: StreamClock, base: TimeBase, tolerance_ns: int) -> bool:
    """Tell whether stamps that need not be used are as good as those that are."""
    return (clock.offset_ns is not None and not clock.stands
            and abs(clock.offset_ns - base.common_offset_ns) <= tolerance_ns)


def _max_gap_ns(stream: SampledStream, times_ns: np.ndarray, settings: TimeSettings) -> int:
    if not stream.closes_windows:
        return NEVER_A_GAP_NS
    if settings.max_gap_s is not None:
        return round(settings.max_gap_s * 1e9)
    return default_max_gap_ns(times_ns)


def _rate_hz(times_ns: np.ndarray) -> float:
    """Return the mean rate of samples (n,) at increasing times, pauses left out."""
    periods = np.diff(times_ns)
    kept = periods[periods <= 5 * np.median(periods)]
    return float(1e9 / kept.mean())
