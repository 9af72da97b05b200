# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Band filters for delay estimation: short, causal, the same on both series.

A filter that both series pass cancels out of their relative delay. Its shape decides how well
the delay can be told: the best one weights each frequency by signal over noise (Knapp &
Carter 1976, IEEE Trans. ASSP 24:320-327, the maximum-likelihood processor). Which shape that
is depends on the sensors. White noise of a position sensor rises with frequency in the
velocity, noise of a velocity sensor does not, and motion ends at 0.5 Hz or at 5 Hz. So there
is a bank: low passes of several corners, each with the slope 0, -1/2 and -1.

The filters are finite: output exists only where all input does, and a gap of the data widens
by the filter's length (0.4 to 1 s) and no more.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.signal import upfirdn

from .correlation import Series

# Rate after decimation lies in 50 ... 100 Hz: six times what the widest filter passes.
WORKING_RATE_HZ = 50.0
# A filter of length L resolves about 1 / L: a low corner needs a long one, and the data that
# a long one loses at each gap are not worth it for a high corner.
_MIN_LENGTH_S = 0.4
_MAX_LENGTH_S = 1.0
_LENGTH_TIMES_CORNER = 0.8
_SLOPES = (0.0, 0.5, 1.0)
_CORNERS_HZ = (0.8, 1.2, 1.7, 2.4, 3.4, 4.8, 6.8, 9.0)
# Below this frequency the sloped filters are flat; a filter of 0.4 s cannot do more.
_KNEE_HZ = 0.3
# Filters that serve before anything is known about the noise: slope and corner.
_WIDE = (0.5, 4.0)
_NARROW = (0.5, 1.0)
# Filter to prefer: best for white noise of a position sensor and motion up to 3 Hz.
_USUAL = (1.0, 3.4)


@dataclass(frozen=True)
class Bank:
    """
    Filters at one working rate, with their power at given frequencies.

    `taps` of each filter, `power` (filters, frequencies) its squared magnitude; `usual` the
    index of the filter to prefer while nothing speaks against it; `detection` the wide and
    the narrow filter to find a peak with, `detection_power` (2, frequencies) theirs.
    """

    frequencies_hz: np.ndarray
    taps: tuple[np.ndarray, ...]
    power: np.ndarray
    usual: int
    detection: tuple[np.ndarray, np.ndarray]
    detection_power: np.ndarray


def decimation(rate_hz: float) -> int:
    """Return the whole factor from the grid's rate to the working rate."""
    return max(1, int(rate_hz / WORKING_RATE_HZ + 1e-9))


def decimate(series: Series, factor: int) -> Series:
    """
    Low-pass and keep every `factor`-th sample; the last sample is kept.

    The low pass is a Kaiser-windowed sinc of 6 * factor + 1 samples, cut off at half the new
    rate.
    """
    if factor == 1:
        return series
    return apply(series, _decimation_taps(factor), factor)


@lru_cache(maxsize=16)
def _decimation_taps(factor: int) -> np.ndarray:
    """Return the low pass before keeping every factor-th sample."""
    half = 3 * factor
    steps = np.arange(-half, half + 1)
    taps = np.sinc(steps / (1.5 * factor)) * np.kaiser(2 * half + 1, 5.0)
    return taps / taps.sum()


def apply(series: Series, taps: np.ndarray, factor: int = 1) -> Series:
    """
    Filter a series causally, keeping only outputs whose whole input is valid.

    Parameters
    ----------
    series
        Values (n, d), 0 where not valid.
    taps
        Impulse response (length,).
    factor
        Keep every factor-th output, counted from the last sample.

    """
    length, n = len(taps), len(series.valid)
    if n < length:
        return Series(np.empty((0, series.values.shape[1])), np.zeros(0, dtype=bool))
    # Skipping the first samples makes the last one an output, whatever the factor.
    skip = (n - length) % factor
    values = upfirdn(taps, series.values[skip:], 1, factor, axis=0)
    missing = np.concatenate([[0], np.cumsum(~series.valid)])
    whole = missing[length:] == missing[:-length]
    valid = whole[skip::factor]
    # Output i of upfirdn ends at input skip + i * factor, the first whole one at length - 1.
    start = -(-(length - 1) // factor)
    if start * factor != length - 1:
        raise ValueError(f'{length} taps do not fit a decimation by {factor}')
    values = values[start:start + len(valid)]
    values[~valid] = 0.0
    return Series(values, valid)


def filtered(pair: tuple[Series, Series], taps: np.ndarray) -> tuple[Series, Series]:
    """Pass both series through the same filter."""
    return apply(pair[0], taps), apply(pair[1], taps)


@lru_cache(maxsize=16)
def bank(rate_hz: float, high_hz: float, size: int) -> Bank:
    """
    Return all filters with corners up to `high_hz` for a working rate.

    Frequencies are those of a real transform of `size` samples, up to 1.5 times `high_hz`.
    """
    corners = [corner for corner in _CORNERS_HZ if corner <= high_hz] or [high_hz]
    shapes = [(slope, corner) for slope in _SLOPES for corner in corners]
    taps = tuple(_design(rate_hz, slope, corner) for slope, corner in shapes)
    wide, narrow = (
        _design(rate_hz, slope, min(corner, high_hz)) for slope, corner in (_WIDE, _NARROW)
    )
    frequencies = np.fft.rfftfreq(size, 1.0 / rate_hz)
    frequencies = frequencies[frequencies <= 1.5 * high_hz]

    def power(rows: tuple[np.ndarray, ...]) -> np.ndarray:
        spectra = [np.fft.rfft(row, size)[:len(frequencies)] for row in rows]
        return np.abs(np.array(spectra)) ** 2

    usual = min(
        range(len(shapes)),
        key=lambda i: abs(shapes[i][0] - _USUAL[0]) + abs(np.log(shapes[i][1] / _USUAL[1])),
    )
    return Bank(frequencies, taps, power(taps), usual, (wide, narrow), power((wide, narrow)))


def _design(rate_hz: float, slope: float, corner_hz: float) -> np.ndarray:
    """Return taps with gain 1 at 0.5 Hz, falling by `slope`, cut at the corner."""
    length = np.clip(_LENGTH_TIMES_CORNER / corner_hz, _MIN_LENGTH_S, _MAX_LENGTH_S)
    half = round(0.5 * float(length) * rate_hz)
    size = 4096
    frequency = np.fft.rfftfreq(size, 1.0 / rate_hz)
    gain = (1.0 + (frequency / _KNEE_HZ) ** 2) ** (-0.5 * slope)
    gain = gain * (frequency <= corner_hz)
    centred = np.roll(np.fft.irfft(gain, size), half)[:2 * half + 1]
    taps = centred * np.kaiser(2 * half + 1, 3.0)
    turn = np.exp(-2j * np.pi * 0.5 / rate_hz * np.arange(2 * half + 1))
    return taps / np.abs(np.sum(taps * turn))
