# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Choice of the time base of one arm, and what the stamps say about the clocks.

Header stamps are used only if all of an arm's streams have them in one clock; otherwise all
streams of that arm use receive time and the reason is given with the offsets.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

STAMP, RECEIVE = 'stamp', 'receive'


@dataclass(frozen=True)
class StreamClock:
    """
    What the first seconds of one stream show.

    `offset_ns` is the median of stamp minus receive time, None without stamps.
    """

    stamps: int
    zero_stamps: int
    distinct_stamps: int
    offset_ns: int | None

    @property
    def stands(self) -> bool:
        """Tell whether the stamps do not advance from message to message."""
        given = self.stamps - self.zero_stamps
        return given > 1 and self.distinct_stamps < max(2, given // 2)


@dataclass(frozen=True)
class TimeBase:
    """The frozen choice, with its reason and the offsets by role in nanoseconds."""

    base: str
    reason: str
    offsets_ns: dict[str, int | None]

    @property
    def by_stamp(self) -> bool:
        """Tell whether header stamps are the time base."""
        return self.base == STAMP

    def offset_of(self, role: str) -> int:
        """Return time base minus receive time of a stream, 0 on receive time."""
        return (self.offsets_ns.get(role) or 0) if self.by_stamp else 0

    @property
    def common_offset_ns(self) -> int:
        """Return the median offset of the arm, to place states that have no stamps."""
        known = [offset for offset in self.offsets_ns.values() if offset is not None]
        return int(np.median(known)) if self.by_stamp and known else 0


def observe_clock(stamps_ns: Sequence[int], receives_ns: Sequence[int]) -> StreamClock:
    """Return what stamps and receive times (n,) of one stream show, both in nanoseconds."""
    stamps = np.asarray(stamps_ns, dtype=np.int64)
    receives = np.asarray(receives_ns, dtype=np.int64)
    given = stamps != 0
    offset = int(np.median((stamps - receives)[given])) if given.any() else None
    return StreamClock(len(stamps), int((~given).sum()), len(np.unique(stamps[given])), offset)


def choose_time_base(clocks: Mapping[str, StreamClock], *, tolerance_ns: int) -> TimeBase:
    """
    Choose between header stamps and receive time for one arm.

    Parameters
    ----------
    clocks
        By role, every stream of the arm that has a say: the sampled ones, and a held or
        planned command that no stamps place near them.
    tolerance_ns
        Largest difference between the offsets of two streams.

    """
    offsets = {role: clock.offset_ns for role, clock in clocks.items()}
    faults = []
    for role, clock in clocks.items():
        if clock.zero_stamps:
            share = 'all' if clock.zero_stamps == clock.stamps else (
                f'{clock.zero_stamps} of {clock.stamps}')
            faults.append(f'{role}: {share} header stamps are zero or absent')
        elif clock.stands:
            faults.append(f'{role}: header stamps do not advance '
                          f'({clock.distinct_stamps} values in {clock.stamps} messages)')
    known = {role: offset for role, offset in offsets.items() if offset is not None}
    if len(known) > 1:
        low, high = min(known, key=lambda role: known[role]), max(known, key=lambda r: known[r])
        if known[high] - known[low] > tolerance_ns:
            faults.append(
                f'{high} and {low} are stamped {(known[high] - known[low]) / 1e9:.3f} s apart, '
                f'more than clock_tolerance_s ({tolerance_ns / 1e9:g} s)')
    if not faults:
        return TimeBase(STAMP, '', offsets)
    listed = ', '.join(f'{role} {offset / 1e9:+.3f} s' for role, offset in known.items())
    tail = f'; stamp minus receive time: {listed}' if listed else ''
    return TimeBase(RECEIVE, '; '.join(faults) + tail, offsets)
