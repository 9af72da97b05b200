# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Spectra of two signals, averaged over segments and kept in batches for their uncertainty.

References
----------
P. D. Welch, "The use of fast Fourier transform for the estimation of power spectra", IEEE
Trans. Audio Electroacoustics 15(2), 1967, 70-73: overlapping segments (citation from memory).

F. J. Harris, "On the use of windows for harmonic analysis with the discrete Fourier
transform", Proc. IEEE 66(1), 1978, 51-83, table 1: two Hann windows that overlap by half are
correlated by 0.167 (from memory; the exact 1/6 follows from the integrals).

J. S. Bendat, A. G. Piersol, "Random Data", 4th ed., Wiley 2010, chapters 6 and 9: H1, H2,
coherence (citation from memory).

"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.segment_buffer import Segment

# Highest number of frequencies kept; 60 of 0.25 Hz end at 15 Hz, beyond tremor.
MAX_FREQUENCIES = 60
# Above this share of the sampling rate the averages over cells fall off and fold over.
_MAX_OF_RATE = 0.4
# Correlation of two Hann windows that overlap by half.
_OVERLAP = 1.0 / 6.0
# Share of both neighbours that is taken off; see `SegmentTransform`.
_SHARPEN = 1.0 / 6.0
# Columns of the spectra; the sharpened ones follow the plain ones in the same order.
_REFERENCE, _RESPONSE, _REAL, _IMAGINARY, _SHARP, _JOINT = 0, 1, 2, 3, 4, 8
_COLUMNS = 9


class SegmentTransform:
    """
    Turns one segment into its spectra: differenced, windowed, sharpened.

    The signals are differenced first. A hand's spectrum falls so steeply (a minimum-jerk
    reach by the 4th power of the frequency) that in positions the window's side lobes of the
    slow part drown the fast part; in differences they do not. It also takes out the offset.
    Nothing else is taken out: the mean of the differences belongs to the lowest frequencies,
    where reference and response still agree, and without it their coherence would fall.
    Measured with reaches through a lag of 0.15 s for 300 s: the coherence at 5 Hz is 0.38
    in positions, 0.99 in differences (1 in truth).

    A Hann window of length T averages a spectrum over its neighbourhood, with a second moment
    of 1 / (3 T^2). Where the spectrum is steep this takes the gain and the phase of the strong
    side for those of the middle: 5 % of the bandwidth of a 2 Hz servo, 5 ms of a delay of
    93 ms that is not shifted away. Sharpened spectra have no second moment: 4/3 of a
    frequency less 1/6 of either neighbour, which lie 1 / T apart. Gain and phase come from
    these, with 1.2 times the scatter; the coherence does not, as it could exceed 1.

    Parameters
    ----------
    rate_hz
        Cells per second.
    segment_s
        Length of a segment in seconds.

    """

    def __init__(self, rate_hz: float, segment_s: float) -> None:
        if not (math.isfinite(rate_hz) and rate_hz > 0.0):
            raise ValueError(f'rate_hz must be positive, got {rate_hz!r}')
        if not (math.isfinite(segment_s) and rate_hz * segment_s >= 16.0):
            raise ValueError(
                f'segment_s must hold at least 16 cells, got {segment_s!r} s at {rate_hz!r} Hz')
        self.rate_hz = rate_hz
        self.steps = 2 * round(rate_hz * segment_s / 2.0)  # even: segments overlap by half
        self._window = 0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(self.steps) / self.steps)
        kept = min(MAX_FREQUENCIES, math.floor(_MAX_OF_RATE * self.steps))
        self._bins = slice(0, kept + 2)  # one more on either side, for the sharpening
        self.frequencies_hz = np.arange(1, kept + 1) * rate_hz / self.steps

    @property
    def cells(self) -> int:
        """Return the cells of a segment: one more than it has differences."""
        return self.steps + 1

    def spectra(self, segment: Segment) -> np.ndarray:
        """
        Return the spectra (f, 9) of a segment, each summed over the dimensions.

        The columns are power of the reference, power of the response, real and imaginary
        part of conj(reference) x response, the same four sharpened, and the product of the
        two powers. The phase of the response's later reading is put back exactly.
        """
        x, y = self._transform(segment.reference), self._transform(segment.response)
        cross = np.sum(x.conj() * y, axis=1)
        plain = np.column_stack([_power(x), _power(y), cross.real, cross.imag])
        # Sharpened before the phase is put back: here neighbours have nearly equal phases.
        side = plain[:-2] + plain[2:]
        plain = plain[1:-1]
        found = np.hstack([plain, (1.0 + 2.0 * _SHARPEN) * plain - _SHARPEN * side,
                           plain[:, :1] * plain[:, 1:2]])
        back = np.exp(-2j * np.pi * self.frequencies_hz * (segment.shift / self.rate_hz))
        for real, imaginary in ((_REAL, _IMAGINARY), (_SHARP + _REAL, _SHARP + _IMAGINARY)):
            turned = (found[:, real] + 1j * found[:, imaginary]) * back
            found[:, real], found[:, imaginary] = turned.real, turned.imag
        return found

    def _transform(self, signal: np.ndarray) -> np.ndarray:
        steps = np.diff(signal, axis=0) * self._window[:, None]
        return np.fft.rfft(steps, axis=0)[self._bins]


@dataclass(frozen=True, eq=False)
class Spectra:
    """Sums (f, 9) of spectra over some segments, columns as `SegmentTransform.spectra`."""

    sums: np.ndarray

    @property
    def cross(self) -> np.ndarray:
        """Return the sharpened cross spectrum (f,), complex."""
        return np.asarray(
            self.sums[:, _SHARP + _REAL] + 1j * self.sums[:, _SHARP + _IMAGINARY])

    @property
    def unsharpened(self) -> Spectra:
        """Return the same with the plain spectra in the place of the sharpened ones."""
        plain = self.sums[:, :_SHARP]
        return Spectra(np.hstack([plain, plain, self.sums[:, _JOINT:]]))

    @property
    def gain_h1(self) -> np.ndarray:
        """Return |cross| / reference (f,): too low by noise on the reference."""
        return _ratio(np.abs(self.cross), self.sums[:, _SHARP + _REFERENCE])

    @property
    def gain_h2(self) -> np.ndarray:
        """Return response / |cross| (f,): too high by noise on the response."""
        return _ratio(self.sums[:, _SHARP + _RESPONSE], np.abs(self.cross))

    @property
    def coherence(self) -> np.ndarray:
        """Return the magnitude-squared coherence (f,), 0 where a signal has no power."""
        found = _ratio(self.sums[:, _REAL] ** 2 + self.sums[:, _IMAGINARY] ** 2,
                       self.sums[:, _REFERENCE] * self.sums[:, _RESPONSE])
        return np.asarray(np.clip(np.nan_to_num(found), 0.0, 1.0))

    @property
    def participation(self) -> np.ndarray:
        """
        Return the number of segments (f,) that carry the power, 0 where there is none.

        Of two unrelated signals the squared cross spectrum is on average the sum of the
        products of their powers, segment by segment. The number is that of equally strong
        segments with the same average coherence; it is small if both move only now and
        then, but at the same time.
        """
        found = _ratio(self.sums[:, _REFERENCE] * self.sums[:, _RESPONSE],
                       self.sums[:, _JOINT])
        return np.asarray(np.nan_to_num(found))


class SpectraBatches:
    """
    Sums of the segments' spectra in up to 40 batches of successive segments.

    A batch begins as one segment and the one that overlaps it by half; once 40 are full,
    neighbours are joined. Batches are what the jackknife leaves out one by one.

    Parameters
    ----------
    frequencies
        Number of frequencies.
    max_batches
        Even number of batches above which neighbours are joined.

    """

    def __init__(self, frequencies: int, max_batches: int = 40) -> None:
        self._max = max_batches
        self._shape = (frequencies, _COLUMNS)
        self._rows: list[np.ndarray] = []
        self._size = 1
        self._filled = 0
        self.segments = 0
        self.disjoint = 0
        self._stretches = 0

    def add(self, spectra: np.ndarray, index: int) -> None:
        """Add the spectra (f, 9) of the segment number `index` of its stretch."""
        self.segments += 1
        self._stretches += index == 0
        if index % 2 == 0:
            self.disjoint += 1
            if not self._rows or self._filled == self._size:
                self._begin()
            self._filled += 1
        self._rows[-1] = self._rows[-1] + spectra

    def _begin(self) -> None:
        if len(self._rows) == self._max:
            self._rows = [a + b for a, b in zip(self._rows[::2], self._rows[1::2], strict=True)]
            self._size *= 2
        self._rows.append(np.zeros(self._shape))
        self._filled = 0

    @property
    def total(self) -> Spectra:
        """Return the spectra of all segments."""
        return Spectra(np.sum(self._rows, axis=0) if self._rows else np.zeros(self._shape))

    def left_out(self) -> list[Spectra]:
        """Return the spectra without the first batch, without the second, and so on."""
        rows = self._rows
        if len(rows) > 1 and 2 * self._filled < self._size:
            # A batch less than half full says little.
            rows = [*rows[:-2], rows[-2] + rows[-1]]
        total = self.total.sums
        return [Spectra(total - row) for row in rows]

    def effective_segments(self) -> np.ndarray:
        """
        Return the number of independent segments (f,) behind the coherence, at most.

        The participation, less what the overlap takes. The dimensions count as one together,
        because in a straight reach they all tell the same. Careful for related signals:
        their powers rise and fall together, which halves the number for Gaussian ones.
        """
        if not self.segments:
            return np.zeros(self._shape[0])
        overlaps = self.segments - self._stretches
        shrink = 1.0 + 2.0 * _OVERLAP ** 2 * overlaps / self.segments
        return self.total.participation / shrink


def _power(transform: np.ndarray) -> np.ndarray:
    return np.sum(transform.real ** 2 + transform.imag ** 2, axis=1)


def _ratio(top: np.ndarray, bottom: np.ndarray) -> np.ndarray:
    return np.divide(top, bottom, out=np.full_like(top, np.nan), where=bottom > 0.0)


def null_level(effective_segments: np.ndarray, probability: float = 0.01) -> np.ndarray:
    """
    Return the coherence (f,) that unrelated signals exceed with the given probability.

    1 - p^(1 / (n - 1)) for n independent segments, 1 where n is at most 1.

    References
    ----------
    G. C. Carter, C. H. Knapp, A. H. Nuttall, "Estimation of the magnitude-squared coherence
    function via overlapped fast Fourier transform processing", IEEE Trans. Audio
    Electroacoustics 21(4), 1973, 337-344: P(coherence < c) = 1 - (1 - c)^(n - 1) without
    true coherence (citation from memory).

    """
    n = np.asarray(effective_segments, dtype=float)
    power = np.divide(1.0, n - 1.0, out=np.full_like(n, np.inf), where=n > 1.0)
    return np.asarray(1.0 - probability ** power)
