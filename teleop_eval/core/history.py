# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The last seconds of one arm on the grid, and reading them at a delay."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.resample import Cells


@dataclass(frozen=True)
class Track:
    """One quantity on consecutive cells: values (m, d), NaN where not valid; valid (m,)."""

    values: np.ndarray
    valid: np.ndarray

    @classmethod
    def of(cls, cells: Cells) -> Track:
        """Return resampled cells as a track."""
        return cls(cells.values, cells.valid)

    @classmethod
    def computed(cls, values: np.ndarray, valid: np.ndarray) -> Track:
        """Return computed values with NaN where they are not valid."""
        values = np.where(valid[:, None], values, np.nan)
        return cls(values, valid & np.isfinite(values).all(axis=1))


class History:
    """
    Tracks by name, cut to the last `keep` cells, with the state of each cell.

    `usable` (m,): engaged, settled and not excluded; `run` (m,): number of the stretch
    between two boundaries (engagement, change of mapping); `label` (m,): index of the
    active mapping, -1 for none.
    """

    def __init__(self, keep: int) -> None:
        self._keep = keep
        self._tracks: dict[str, Track] = {}
        self.usable = np.zeros(0, dtype=bool)
        self.run = np.zeros(0, dtype=np.int64)
        self.label = np.zeros(0, dtype=np.int64)

    def __len__(self) -> int:
        return len(self.run)

    def extend(self, tracks: dict[str, Track], usable: np.ndarray, run: np.ndarray,
               label: np.ndarray) -> None:
        """Append one window's cells; a quantity not given now was not there."""
        before, count = len(self), len(run)
        for name in {*self._tracks, *tracks}:
            old, new = self._tracks.get(name), tracks.get(name)
            width = (new or old).values.shape[1]  # type: ignore[union-attr]
            old = old or _nothing(before, width)
            new = new or _nothing(count, width)
            self._tracks[name] = Track(
                np.concatenate([old.values, new.values])[-self._keep:],
                np.concatenate([old.valid, new.valid])[-self._keep:])
        self.usable = np.concatenate([self.usable, usable])[-self._keep:]
        self.run = np.concatenate([self.run, run])[-self._keep:]
        self.label = np.concatenate([self.label, label])[-self._keep:]

    def get(self, name: str) -> Track | None:
        """Return a track over the kept cells, None if the quantity was never there."""
        return self._tracks.get(name)

    def usable_track(self, name: str) -> Track | None:
        """Return a track over the kept cells, valid only where they are usable."""
        track = self._tracks.get(name)
        return None if track is None else Track(track.values, track.valid & self.usable)

    def last(self, name: str, count: int) -> Track | None:
        """Return the last `count` cells of a track."""
        track = self._tracks.get(name)
        return None if track is None else Track(track.values[-count:], track.valid[-count:])

    def delayed(self, name: str, count: int, shift: float, *, turn: bool = False) -> Track | None:
        """
        Return a track `shift` cells earlier, for the last `count` cells.

        A value is valid only where the earlier cells were usable and lie in one run: this is
        how the robot's side is shifted by the delay. `turn` interpolates orientations.
        """
        track = self._tracks.get(name)
        if track is None:
            return None
        where = np.arange(len(self) - count, len(self)) - shift
        low = np.floor(where).astype(np.int64)
        share = where - low
        high = np.where(share > 0.0, low + 1, low)
        inside = (low >= 0) & (high < len(self))
        low, high = np.clip(low, 0, len(self) - 1), np.clip(high, 0, len(self) - 1)
        good = track.valid & self.usable
        valid = inside & good[low] & good[high] & (self.run[low] == self.run[high])
        if turn:
            start = np.where(valid[:, None], track.values[low], [0.0, 0.0, 0.0, 1.0])
            end = np.where(valid[:, None], track.values[high], [0.0, 0.0, 0.0, 1.0])
            values = rotations.slerp(start, end, share)
        else:
            values = track.values[low] + share[:, None] * (track.values[high] - track.values[low])
        return Track.computed(values, valid)

    def label_delayed(self, count: int, shift: float) -> np.ndarray:
        """
        Return the label `shift` cells earlier, for the last `count` cells.

        Between two cells it is that of the earlier one; -1 before the first cell.
        """
        where = np.arange(len(self) - count, len(self)) - math.ceil(shift)
        return np.where(where >= 0, self.label[np.maximum(where, 0)], -1)

    def velocity(self, name: str, period_s: float, *, usable_only: bool) -> Track | None:
        """Return the track's velocity on cell edges (m, d), invalid across boundaries."""
        track = self._tracks.get(name)
        if track is None or len(self) == 0:
            return None
        good = track.valid & self.usable if usable_only else track.valid
        valid = np.zeros(len(self), dtype=bool)
        valid[1:] = good[1:] & good[:-1] & (self.run[1:] == self.run[:-1])
        values = np.full_like(track.values, np.nan)
        values[1:] = np.diff(track.values, axis=0) / period_s
        return Track.computed(values, valid)


def _nothing(count: int, width: int) -> Track:
    return Track(np.full((count, width), np.nan), np.zeros(count, dtype=bool))
