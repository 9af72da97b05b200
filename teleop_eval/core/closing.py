# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""When a window may close: the rule, looked at over the sampled streams of one arm."""

from __future__ import annotations

from collections.abc import Sequence

from teleop_eval.core.streams import SampledStream


def deadline_ns(stream: SampledStream, end_ns: int, lateness_ns: int) -> int:
    """Return the receive time after which a window ending at `end_ns` waits no longer."""
    return end_ns - stream.offset_ns + lateness_ns


def may_close(streams: Sequence[SampledStream], end_ns: int, *, receive_ns: int,
              lateness_ns: int) -> bool:
    """Tell whether every stream has a sample at or after the end, or is waited for no longer."""
    for stream in streams:
        there = stream.last_ns is not None and stream.last_ns >= end_ns
        if not there and receive_ns <= deadline_ns(stream, end_ns, lateness_ns):
            return False
    return True


def first_from(streams: Sequence[SampledStream], time_ns: int) -> int | None:
    """Return the first time of any sample at or after a time, None if there is none."""
    starts = [start for stream in streams if (start := stream.next_from(time_ns)) is not None]
    return min(starts, default=None)


def moved_clock(streams: Sequence[SampledStream], start_ns: int, tolerance_s: float) -> str:
    """Return which stream's stamps have left the frozen offset since a time, '' if none."""
    moved = {stream.role: offset - stream.offset_ns for stream in streams
             if stream.by_stamp and (offset := stream.offset_from(start_ns)) is not None}
    if not moved:
        return ''
    role = max(moved, key=lambda one: abs(moved[one]))
    spread = max(moved.values()) - min(moved.values())
    if max(abs(moved[role]), spread) <= tolerance_s * 1e9:
        return ''
    return f'the clock of {role} moved by {moved[role] / 1e9:+.3f} s'
