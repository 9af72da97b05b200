# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Gap-free segments of two signals, cut from cells that arrive window by window."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class Segment:
    """
    One segment: `reference` (n, d), `response` (n, d) read `shift` cells later.

    `index` counts the segments of one unbroken stretch: each begins half a segment after
    the one before, so those of even index do not overlap.
    """

    reference: np.ndarray
    response: np.ndarray
    shift: int
    index: int


class SegmentBuffer:
    """
    Keeps the cells of one unbroken stretch until they fill a segment.

    A segment never spans a cell that is not valid or a change of the run number, neither
    on the reference's side nor on the response's: the stretch between them is unbroken too.
    Held are at most one segment, the largest shift and one window. What is cut does not
    depend on how the cells are split into calls.

    Parameters
    ----------
    cells
        Length of a segment in cells.
    hop
        Cells from the beginning of one segment to that of the next.

    """

    def __init__(self, cells: int, hop: int) -> None:
        self._cells, self._hop = cells, hop
        self._dimensions: int | None = None
        self.reset()

    def reset(self) -> None:
        """Begin a new stretch with the next cell."""
        self._signals: np.ndarray | None = None  # (k, 2 d): reference beside response
        self._shifts = np.zeros(0, dtype=np.int64)
        self._run = 0
        self._index = 0

    @property
    def held_cells(self) -> int:
        """Return the number of cells in the buffer."""
        return len(self._shifts)

    def add(self, reference: np.ndarray, response: np.ndarray, valid: np.ndarray,
            run: np.ndarray, *, shift_cells: int) -> Iterator[Segment]:
        """
        Take consecutive cells; yield each segment they complete.

        Parameters
        ----------
        reference, response
            (m, d) signals.
        valid
            (m,) whether both have a value. A cell that is not finite is never used.
        run
            (m,) number of the stretch each cell belongs to.
        shift_cells
            How much later the response is read, in segments that begin in these cells.

        Raises
        ------
        ValueError
            If the shapes do not fit or the shift is negative.

        """
        self._check(reference, response, valid, run, shift_cells)
        both = np.hstack([reference, response])
        good = np.asarray(valid, dtype=bool) & np.isfinite(both).all(axis=1)
        changes = np.flatnonzero((good[1:] != good[:-1]) | (run[1:] != run[:-1])) + 1
        edges = [0, *changes.tolist(), len(good)] if len(good) else []
        for start, stop in zip(edges[:-1], edges[1:], strict=True):
            # Only the first piece of a call can go on with what the last call left.
            if start > 0 or not good[start] or int(run[start]) != self._run:
                self.reset()
            if not good[start]:
                continue
            self._run = int(run[start])
            piece = both[start:stop]
            self._signals = piece if self._signals is None else np.vstack([self._signals, piece])
            self._shifts = np.append(self._shifts, np.full(stop - start, shift_cells))
            yield from self._close()

    def _close(self) -> Iterator[Segment]:
        while self.held_cells and self.held_cells >= self._cells + self._shifts[0]:
            assert self._signals is not None and self._dimensions is not None
            shift, d = int(self._shifts[0]), self._dimensions
            yield Segment(self._signals[:self._cells, :d],
                          self._signals[shift:shift + self._cells, d:], shift, self._index)
            self._index += 1
            self._signals = self._signals[self._hop:]
            self._shifts = self._shifts[self._hop:]

    def _check(self, reference: np.ndarray, response: np.ndarray, valid: np.ndarray,
               run: np.ndarray, shift_cells: int) -> None:
        if reference.ndim != 2 or reference.shape != response.shape:
            raise ValueError('reference and response must both have the shape (m, d), got '
                             f'{reference.shape} and {response.shape}')
        if valid.shape != (len(reference),) or run.shape != (len(reference),):
            raise ValueError(f'valid and run must have the shape ({len(reference)},), got '
                             f'{valid.shape} and {run.shape}')
        if self._dimensions not in (None, reference.shape[1]):
            raise ValueError(f'the signals had {self._dimensions} dimensions before, now '
                             f'{reference.shape[1]}')
        if shift_cells < 0:
            raise ValueError(f'shift_cells cannot be negative, got {shift_cells}')
        self._dimensions = reference.shape[1]
