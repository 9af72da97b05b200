# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Correlation of two vector series that have gaps, and its peak between the samples.

Pairs with a missing partner do not count, and each lag is normalised by the energies of the
pairs it has, so that neither a gap nor the end of the data pulls the peak to small lags.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.fft import irfft, next_fast_len, rfft

# Half width of the interpolation in samples. The error of Lagrange's formula on 9 points is
# below 1e-7 of the amplitude for content at 0.06 of the sampling rate (3 Hz of 50) and below
# 1e-4 at 0.13. It vanishes towards low frequencies, where a windowed sinc keeps a ripple
# that would pull the peak of a slow motion to whole samples.
KERNEL_HALF = 4
# Steps between two samples at which the peak is looked up before the last parabola.
_FINE = 16


@dataclass(frozen=True)
class Series:
    """Vector series on a uniform grid: values (n, d), 0 where missing; valid (n,) of bool."""

    values: np.ndarray
    valid: np.ndarray


@dataclass(frozen=True)
class Transform:
    """Spectra of a series' values, energy and mask, (frequencies, d + 2), padded to `size`."""

    spectra: np.ndarray
    size: int


@dataclass(frozen=True)
class LagCorrelation:
    """
    Normalised correlation by lag.

    `lags` (m,) in samples, positive = response later; `value` (m,) in -1 ... 1, NaN where too
    few pairs are left; `pairs` (m,) their number.
    """

    lags: np.ndarray
    value: np.ndarray
    pairs: np.ndarray


@dataclass(frozen=True)
class Peak:
    """Maximum of a correlation: lag in samples and height."""

    lag: float
    height: float


def transform(series: Series, reach: int) -> Transform:
    """Transform a series once for correlations up to `reach` lags on either side."""
    size = next_fast_len(len(series.valid) + reach + 1, True)
    energy = np.einsum('nd,nd->n', series.values, series.values)[:, None]
    stacked = np.concatenate([series.values, energy, series.valid[:, None]], axis=1)
    return Transform(rfft(stacked, size, axis=0), size)


def correlate_lags(
    reference: Transform, response: Transform, first_lag: int, last_lag: int, *, min_pairs: int
) -> LagCorrelation:
    """
    Correlate at every lag, each with all its pairs, means removed, dimensions summed.

    Parameters
    ----------
    reference, response
        Transforms of two series of one shape, both with a reach that covers the lags.
    first_lag, last_lag
        Range of lags in samples, both included.
    min_pairs
        Lags with fewer pairs are NaN.

    """
    size, width = reference.size, reference.spectra.shape[1] - 2
    conjugate, second = reference.spectra.conj(), response.spectra
    products = np.empty((len(second), 4 + 2 * width), dtype=complex)
    np.einsum('fd,fd->f', conjugate[:, :width], second[:, :width], out=products[:, 0])
    products[:, 1] = conjugate[:, -2] * second[:, -1]
    products[:, 2] = conjugate[:, -1] * second[:, -2]
    products[:, 3] = conjugate[:, -1] * second[:, -1]
    products[:, 4:4 + width] = conjugate[:, :width] * second[:, -1:]
    products[:, 4 + width:] = conjugate[:, -1:] * second[:, :width]
    lags = np.arange(first_lag, last_lag + 1)
    sums = irfft(products, size, axis=0)[lags]
    pairs = np.rint(sums[:, 3])
    count = np.maximum(pairs, 1.0)
    mean_1, mean_2 = sums[:, 4:4 + width], sums[:, 4 + width:]
    cross = sums[:, 0] - np.sum(mean_1 * mean_2, axis=1) / count
    energy_1 = sums[:, 1] - np.sum(mean_1**2, axis=1) / count
    energy_2 = sums[:, 2] - np.sum(mean_2**2, axis=1) / count
    # Rounding of the transform, not data, when an energy is this small.
    floor = 1e-12 * max(float(sums[:, 1:3].max()), np.finfo(float).tiny)
    known = (pairs >= min_pairs) & (energy_1 > floor) & (energy_2 > floor)
    value = np.full(len(lags), np.nan)
    value[known] = cross[known] / np.sqrt(energy_1[known] * energy_2[known])
    return LagCorrelation(lags, value, pairs.astype(int))


def common_pairs(
    reference: Series, response: Series, lag: int, reach: int
) -> np.ndarray:
    """
    Return indices of response samples whose partners exist at all lags lag +- reach.

    Using the same response samples at every lag makes the peak exact without noise: by the
    Cauchy-Schwarz inequality no lag can beat the true one.
    """
    n = len(reference.valid)
    missing = np.concatenate([[0], np.cumsum(~reference.valid)])
    low, high = max(0, lag + reach), min(n, n + lag - reach)
    index = np.arange(low, max(low, high))
    whole = missing[index - lag + reach + 1] == missing[index - lag - reach]
    return index[whole & response.valid[index]]


def refine_peak(
    reference: Series, response: Series, index: np.ndarray, lag: int, search: int
) -> Peak:
    """
    Find the peak within lag +- search between the samples.

    The correlation over a fixed set of response samples is a function of the lag no faster
    than the motion, so interpolating it is interpolating the motion. A parabola closes the
    search over a sixteenth of a sample only: on whole samples it is biased by up to 0.03 of
    one, towards the nearest.

    Parameters
    ----------
    reference, response
        Series of equal shape.
    index
        Response samples, from `common_pairs` with reach = search + KERNEL_HALF.
    lag
        Whole lag in the middle of the search.
    search
        Half of the searched range in samples.

    """
    reach = search + KERNEL_HALF
    target = response.values[index]
    target = target - target.mean(axis=0)
    lags = np.arange(lag - reach, lag + reach + 1)
    shifted = reference.values[index[None, :] - lags[:, None]]
    flat = shifted.reshape(len(lags), -1)
    cross = flat @ target.ravel()
    energy = np.einsum('km,km->k', flat, flat)
    energy = energy - np.sum(shifted.sum(axis=1) ** 2, axis=1) / len(index)
    weights, offsets = _fine_weights(search)
    spread = weights @ energy * np.sum(target**2)
    height = weights @ cross / np.sqrt(np.maximum(spread, np.finfo(float).tiny))
    best = int(np.clip(np.argmax(height), 1, len(height) - 2))
    left, middle, right = height[best - 1:best + 2]
    bend = left - 2.0 * middle + right
    part = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
    part = float(np.clip(part, -1.0, 1.0))
    return Peak(
        lag + float(offsets[best]) + part / _FINE,
        float(middle - 0.25 * (left - right) * part),
    )


def shifted_values(
    values: np.ndarray, index: np.ndarray, lag: float
) -> tuple[np.ndarray, np.ndarray]:
    """
    Return a series and its derivative per sample at `index - lag`, (n, d) each.

    The derivative is taken with respect to time, by central difference of the interpolant
    over an eighth of a sample.
    """
    whole = round(lag)
    part = lag - whole
    steps = np.arange(-KERNEL_HALF, KERNEL_HALF + 1)
    around = values[index[:, None] - whole + steps[None, :]]
    step = 1.0 / 8.0
    middle, before, after = lagrange_weights(np.array([-part, -part - step, -part + step]))
    rows = np.stack([middle, (after - before) / (2.0 * step)])
    both = rows @ around
    return both[:, 0], both[:, 1]


def lagrange_weights(offset: np.ndarray) -> np.ndarray:
    """
    Return weights (m, 2 KERNEL_HALF + 1) of the samples around, at offsets (m,) in samples.

    Lagrange's interpolation formula on equidistant points.
    """
    points = np.arange(-KERNEL_HALF, KERNEL_HALF + 1)
    own = np.eye(len(points), dtype=bool)
    over = np.where(own, 1.0, np.asarray(offset)[:, None, None] - points)
    under = np.where(own, 1.0, points[:, None] - points)
    return np.prod(over / under, axis=2)


@lru_cache(maxsize=8)
def _fine_weights(search: int) -> tuple[np.ndarray, np.ndarray]:
    """Return weights (fine, whole lags) and fine offsets (fine,) from the middle lag."""
    offsets = np.arange(-search * _FINE, search * _FINE + 1) / _FINE
    centre = np.rint(offsets).astype(int)
    around = lagrange_weights(offsets - centre)
    weights = np.zeros((len(offsets), 2 * (search + KERNEL_HALF) + 1))
    rows = np.arange(len(offsets))[:, None]
    weights[rows, (centre + search)[:, None] + np.arange(2 * KERNEL_HALF + 1)] = around
    return weights, offsets


def variance_of_product_sum(
    signal: np.ndarray, noise: np.ndarray, smoothing: int, size: int
) -> float:
    """
    Return the variance of sum_t signal(t) . noise(t) under the noise's own autocorrelation.

    By Parseval the double sum over pairs of times is a sum over frequencies of the signal's
    periodogram matrix times the noise's spectrum; the latter is smoothed over `smoothing`
    bins, which is the same as trusting its autocovariance only at short lags. Source: the
    variance of a sample cross-covariance (Bartlett 1935, J. Royal Stat. Soc. 98:536-543; from
    memory), kept as matrices because motion of an arm need not fill all directions equally.

    Parameters
    ----------
    signal, noise
        Series (n, d), 0 where missing in either.
    smoothing
        Bins to average the noise spectrum over.
    size
        Length of the transform, at least 2 n, so that no pair wraps around.

    """
    first, second = rfft(signal, size, axis=0), rfft(noise, size, axis=0)
    used = max(1, int(np.count_nonzero(np.any(noise != 0.0, axis=1))))
    # Zero and the Nyquist bin would count once, all others twice; both are negligible.
    blocks = len(first) // smoothing
    trimmed = blocks * smoothing
    shape = (blocks, smoothing, signal.shape[1])
    first, second = first[:trimmed].reshape(shape), second[:trimmed].reshape(shape)
    matrices_1 = first.conj().transpose(0, 2, 1) @ first
    matrices_2 = second.transpose(0, 2, 1) @ second.conj()
    total = np.vdot(matrices_2.conj(), matrices_1).real
    return 2.0 * float(total) / (smoothing * size * used)
