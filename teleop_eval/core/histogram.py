# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Percentiles of unbounded streams in bounded memory.

Both histograms use one percentile rule: the value at position (n - 1) p / 100 of the sorted
samples, linear between neighbours (type 7 of the reference below, numpy.percentile's
default). The c samples of one bin are taken as evenly spread over it, so that every sorted
value is known to one bin width; the smallest and the largest are exact.

References
----------
R. J. Hyndman, Y. Fan, "Sample quantiles in statistical packages", The American Statistician
50(4), 1996, 361-365 (citation from memory).

"""

from __future__ import annotations

import math

import numpy as np

# Counts grow in steps of this many bins, so that a drifting stream does not copy every time.
_CHUNK = 256


class _Counts:
    """Counts per integer bin over a contiguous range that grows when needed."""

    def __init__(self) -> None:
        self.first = 0
        self.values = np.zeros(0, dtype=np.int64)

    def add(self, bins: np.ndarray, counts: np.ndarray | int = 1) -> None:
        """Add `counts` to `bins` (n,) of int64."""
        if bins.size == 0:
            return
        self._cover(int(bins.min()), int(bins.max()))
        np.add.at(self.values, bins - self.first, counts)

    def occupied(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the bins (k,) that hold samples, ascending, and their counts (k,)."""
        index = np.flatnonzero(self.values)
        return index + self.first, self.values[index]

    def _cover(self, low: int, high: int) -> None:
        if self.values.size and low >= self.first and high < self.first + self.values.size:
            return
        if self.values.size:
            low, high = min(low, self.first), max(high, self.first + self.values.size - 1)
        first = (low // _CHUNK) * _CHUNK
        grown = np.zeros((high // _CHUNK + 1) * _CHUNK - first, dtype=np.int64)
        grown[self.first - first:self.first - first + self.values.size] = self.values
        self.first, self.values = first, grown


class _Stream:
    """Exact count, sum, sum of squares, minimum and maximum, and the percentile rule."""

    def __init__(self) -> None:
        self._counts = _Counts()
        self.count = 0
        self.skipped = 0
        self.sum = 0.0
        self.sum_of_squares = 0.0
        self._min = math.inf
        self._max = -math.inf

    @property
    def min(self) -> float:
        """Return the smallest value, NaN while empty."""
        return self._min if self.count else math.nan

    @property
    def max(self) -> float:
        """Return the largest value, NaN while empty."""
        return self._max if self.count else math.nan

    @property
    def mean(self) -> float:
        """Return the mean, NaN while empty."""
        return self.sum / self.count if self.count else math.nan

    @property
    def rms(self) -> float:
        """Return the root mean square, NaN while empty."""
        return math.sqrt(self.sum_of_squares / self.count) if self.count else math.nan

    def _take(self, values: np.ndarray) -> np.ndarray:
        """Return the finite values (k,) after counting and summing them."""
        values = np.asarray(values, dtype=float).reshape(-1)
        finite = np.isfinite(values)
        if not finite.all():
            self.skipped += int(values.size - np.count_nonzero(finite))
            values = values[finite]
        if values.size:
            self.count += values.size
            self.sum += float(values.sum())
            self.sum_of_squares += float(np.dot(values, values))
            self._min = min(self._min, float(values.min()))
            self._max = max(self._max, float(values.max()))
        return values

    def _merge(self, other: _Stream) -> None:
        self._counts.add(*other._counts.occupied())
        self.count += other.count
        self.skipped += other.skipped
        self.sum += other.sum
        self.sum_of_squares += other.sum_of_squares
        self._min = min(self._min, other._min)
        self._max = max(self._max, other._max)

    def percentile(self, p: float) -> float:
        """
        Return the p-th percentile (0 to 100) by the module's rule, NaN while empty.

        Raises
        ------
        ValueError
            If p lies outside 0 to 100.

        """
        if not 0.0 <= p <= 100.0:
            raise ValueError(f'a percentile lies between 0 and 100, got {p!r}')
        if self.count == 0:
            return math.nan
        position = (self.count - 1) * p / 100.0
        low = math.floor(position)
        fraction = position - low
        lower = self._ranked(low)
        if fraction == 0.0:
            return lower
        return lower + fraction * (self._ranked(low + 1) - lower)

    def _ranked(self, rank: int) -> float:
        """Return the sorted value of zero-based `rank`."""
        if rank <= 0:
            return self._min
        if rank >= self.count - 1:
            return self._max
        bins, counts = self._counts.occupied()
        upto = np.cumsum(counts)
        where = int(np.searchsorted(upto, rank, side='right'))
        before = int(upto[where] - counts[where])
        value = self._inside(int(bins[where]), (rank - before + 0.5) / int(counts[where]))
        return min(max(value, self._min), self._max)

    def _inside(self, index: int, share: float) -> float:
        raise NotImplementedError  # pragma: no cover


class StreamingHistogram(_Stream):
    """
    Percentiles of magnitudes to a relative resolution of 0.1 %.

    Bins are spaced by a factor of 1.001 from `floor` to `ceiling`; smaller values share one
    bin down to 0, larger ones share an overflow bin up to the exact maximum. Memory grows
    with the decades in use, to 166 kB over the default range of nine decades.

    Attributes
    ----------
    count, sum, sum_of_squares, min, max
        Of the finite values, exact up to floating-point rounding.
    skipped
        Number of NaN and infinite values left out.

    """

    RATIO = 1.001

    def __init__(self, floor: float = 1e-6, ceiling: float = 1e3) -> None:
        if not 0.0 < floor < ceiling < math.inf:
            raise ValueError(f'a floor in (0, ceiling) is needed, got {floor!r}, {ceiling!r}')
        super().__init__()
        self.floor, self.ceiling = floor, ceiling
        self._step = math.log(self.RATIO)
        self._overflow = math.ceil(math.log(ceiling / floor) / self._step)

    def add(self, values: np.ndarray) -> None:
        """
        Add magnitudes (n,), all of one unit; NaN and infinite ones are skipped and counted.

        Raises
        ------
        ValueError
            If a value is negative.

        """
        values = np.asarray(values, dtype=float).reshape(-1)
        if np.any(values < 0.0):
            raise ValueError(f'a magnitude cannot be negative, got {float(np.nanmin(values))!r}')
        values = self._take(values)
        # Bin -1 holds 0 and what lies below the floor.
        bins = np.full(values.size, -1, dtype=np.int64)
        above = values >= self.floor
        bins[above] = np.log(values[above] / self.floor) / self._step
        self._counts.add(np.minimum(bins, self._overflow))

    def merge(self, other: StreamingHistogram) -> None:
        """
        Add all samples of `other`, as if they had been added here.

        Raises
        ------
        ValueError
            If the two do not share floor and ceiling.

        """
        if (self.floor, self.ceiling) != (other.floor, other.ceiling):
            raise ValueError('only histograms with the same floor and ceiling can be merged')
        self._merge(other)

    def _inside(self, index: int, share: float) -> float:
        if index < 0:
            return self.floor * share
        if index >= self._overflow:
            low = self.floor * math.exp(self._overflow * self._step)
            return low + share * max(self._max - low, 0.0)
        return self.floor * math.exp((index + share) * self._step)


class LinearHistogram(_Stream):
    """
    Percentiles on a linear scale, for instance of a joint's position.

    `bins` equal bins lie between `low` and `high`: the default of 1000 resolves 0.1 % of the
    span. Values outside continue the same bins for `MAX_SPANS` spans on either side and share
    one bin beyond. With `periodic=True` the range is one turn: values are folded into it,
    so that an unwrapped and a wrapped stream give the same counts.
    """

    MAX_SPANS = 10

    def __init__(
        self, low: float, high: float, bins: int = 1000, *, periodic: bool = False,
    ) -> None:
        if not (math.isfinite(low) and math.isfinite(high) and low < high and bins > 0):
            raise ValueError(
                f'finite low < high and bins > 0 are needed, got {low!r}, {high!r}, {bins!r}')
        super().__init__()
        self.low, self.high, self.bins, self.periodic = low, high, bins, periodic
        self._width = (high - low) / bins
        self._last = (self.MAX_SPANS + 1) * bins
        self._first = -self.MAX_SPANS * bins - 1

    def add(self, values: np.ndarray) -> None:
        """Add values (n,); NaN and infinite ones are skipped and counted."""
        values = np.asarray(values, dtype=float).reshape(-1)
        if self.periodic:
            values = self.low + np.mod(values - self.low, self.high - self.low)
        values = self._take(values)
        bins = np.floor((values - self.low) / self._width)
        self._counts.add(np.clip(bins, self._first, self._last).astype(np.int64))

    def merge(self, other: LinearHistogram) -> None:
        """
        Add all samples of `other`, as if they had been added here.

        Raises
        ------
        ValueError
            If the two do not share range, bins and periodicity.

        """
        if self._shape() != other._shape():
            raise ValueError('only histograms with the same range and bins can be merged')
        self._merge(other)

    def shortest_arc(self, share: float = 0.9) -> float:
        """
        Return the shortest arc of the turn that holds `share` of the samples, NaN while empty.

        On a circle there is no smallest value to count percentiles from; this is the part of
        the turn in use. Whole bins are counted: at most two bin widths too long.

        Raises
        ------
        ValueError
            If the histogram is not periodic or the share is not in (0, 1].

        """
        if not self.periodic or not 0.0 < share <= 1.0:
            raise ValueError(f'a periodic histogram and 0 < share <= 1 are needed, got {share!r}')
        if self.count == 0:
            return math.nan
        bins, counts = self._counts.occupied()
        twice = np.concatenate([bins, bins + self.bins])
        upto = np.concatenate([[0], np.cumsum(np.concatenate([counts, counts]))])
        need = math.ceil(share * self.count)
        end = np.searchsorted(upto, upto[:bins.size] + need, side='left') - 1
        return float((twice[end] - bins + 1).min()) * self._width

    def _shape(self) -> tuple[float, float, int, bool]:
        return self.low, self.high, self.bins, self.periodic

    def _inside(self, index: int, share: float) -> float:
        if index <= self._first:
            edge = self.low + (index + 1) * self._width
            return self._min + share * (edge - self._min)
        if index >= self._last:
            edge = self.low + index * self._width
            return edge + share * (self._max - edge)
        return self.low + (index + share) * self._width
