# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Second look at a delay near a known peak: best filter, place between samples, error."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.fft import next_fast_len, rfft

from .correlation import (
    KERNEL_HALF,
    Series,
    common_pairs,
    refine_peak,
    shifted_values,
    variance_of_product_sum,
)
from .delay_filters import Bank, filtered
from .delay_search import SMOOTHING_HZ
from .delay_settings import DelaySettings, NoDelay, Sides
from .metric import INSUFFICIENT, UNOBSERVABLE

# Half of the range searched around the first peak, in working samples.
_SEARCH = 2
# The usual filter stays unless another one promises a variance smaller by this factor: the
# prediction itself is uncertain by about as much.
_WORTH = 0.85


@dataclass(frozen=True)
class Outcome:
    """Refined peak: seconds, seconds, height, pairs at the working rate, mean Hz."""

    delay_s: float
    standard_error_s: float
    height: float
    pairs: int
    mean_hz: float


def refine(
    wide: tuple[Series, Series], lag: int, found_with: tuple[Bank, int], rate: float,
    settings: DelaySettings, sides: Sides,
) -> Outcome:
    """Choose the filter, interpolate the peak and compute its standard error."""
    taps = _best_filter(wide, lag, found_with, rate)
    pair = filtered(wide, taps)
    reach = _SEARCH + KERNEL_HALF
    for _ in range(8):
        index = common_pairs(*pair, lag, reach)
        if len(index) < settings.min_duration_s * rate:
            raise NoDelay(
                INSUFFICIENT,
                f'Only {len(index) / rate:.1f} s with valid data of both {sides.both} at a '
                f'delay of {lag / rate:.2f} s, {settings.min_duration_s:.1f} s are needed.',
            )
        peak = refine_peak(*pair, index, lag, _SEARCH)
        nearest = round(peak.lag)
        if abs(nearest - lag) < _SEARCH:
            break
        lag = nearest
    else:
        raise NoDelay(UNOBSERVABLE, f'The peak near {lag / rate:.2f} s has no summit.')
    error, mean_hz = _standard_error(pair, index, peak.lag, rate)
    return Outcome(peak.lag / rate, error, peak.height, len(index), mean_hz)


def _best_filter(
    wide: tuple[Series, Series], lag: int, found_with: tuple[Bank, int], rate: float
) -> np.ndarray:
    """
    Return the taps of the bank for which the predicted variance of the delay is least.

    With X1 and X2 aligned and of equal size, A = |X1 + X2|^2 / 4 holds the motion, E =
    |X2 - X1|^2 the noise, and a filter of power P gives the variance
    sum w^2 P^2 A E / (sum w^2 P Re X1* X2)^2, w = 2 pi f. Noise is smooth in frequency, so E
    is averaged over 1 Hz; a few bins of motion alone could not tell it.
    """
    choices, which = found_with
    index = common_pairs(*wide, lag, 1)
    if len(index) < rate:
        return choices.taps[choices.usual]
    shift = index - lag
    size = next_fast_len(len(wide[0].valid), True)
    both = np.zeros((2, len(wide[0].valid), wide[0].values.shape[1]))
    both[0, index] = wide[0].values[shift] - wide[0].values[shift].mean(axis=0)
    both[1, index] = wide[1].values[index] - wide[1].values[index].mean(axis=0)
    angular = 2.0 * np.pi * choices.frequencies_hz
    first, second = rfft(both, size, axis=1)[:, :len(angular)]
    second = _aligned(first, second, angular, choices.detection_power[which], 1.0 / rate)
    squared = angular**2
    motion = 0.25 * np.sum(np.abs(first + second) ** 2, axis=1)
    common = np.sum((first.conj() * second).real, axis=1)
    noise = _smoothed(
        np.sum(np.abs(second - first) ** 2, axis=1), max(1, round(size / rate))
    )
    power = choices.power
    bend = power @ (squared * common)
    with np.errstate(divide='ignore', invalid='ignore'):
        predicted = np.where(
            bend > 0.0, power**2 @ (squared * motion * noise) / bend**2, np.inf
        )
    best = int(np.argmin(predicted))
    if predicted[best] > _WORTH * predicted[choices.usual]:
        best = choices.usual
    return choices.taps[best]


def _aligned(
    first: np.ndarray, second: np.ndarray, angular: np.ndarray, power: np.ndarray, limit: float
) -> np.ndarray:
    """Return the second spectrum without the rest of the delay and the gain."""
    cross = np.sum(first.conj() * second, axis=1) * power
    for _ in range(2):
        bend = float(np.sum(angular**2 * cross.real))
        if bend <= 0.0:
            break
        rest = np.clip(-np.sum(angular * cross.imag) / bend, -limit, limit)
        cross = cross * np.exp(1j * angular * rest)
        second = second * np.exp(1j * angular * rest)[:, None]
    energy_1 = np.sum(power[:, None] * np.abs(first) ** 2)
    energy_2 = np.sum(power[:, None] * np.abs(second) ** 2)
    return second * math.sqrt(energy_1 / max(energy_2, 1e-300))


def _smoothed(spectrum: np.ndarray, width: int) -> np.ndarray:
    """Return the running mean over `width` bins, over fewer at the ends."""
    box = np.ones(width)
    count = np.convolve(np.ones(len(spectrum)), box, 'same')
    return np.convolve(spectrum, box, 'same') / count


def _standard_error(
    pair: tuple[Series, Series], index: np.ndarray, lag: float, rate: float
) -> tuple[float, float]:
    """
    Return the delay's standard error in seconds and the motion's mean frequency in Hz.

    Near the peak the delay's error is sum a . e / sum x1' . x2', with e = x2 - g x1 the
    residual at the peak and a the derivative averaged over both sides. The denominator comes
    from the two sides' product, in which independent noise cancels.
    """
    # The response's derivative needs neighbours too; the samples lost by that only serve to
    # estimate the spread, which is scaled back to all of them at the end.
    inner = np.intersect1d(
        index, common_pairs(pair[1], pair[1], 0, KERNEL_HALF), assume_unique=True
    )
    if len(inner) < rate:
        raise NoDelay(INSUFFICIENT, 'The valid data are in too short pieces.')
    everything, index = len(index), inner
    first, slope_1 = shifted_values(pair[0].values, index, lag)
    second, slope_2 = shifted_values(pair[1].values, index, 0.0)
    first = first - first.mean(axis=0)
    second = second - second.mean(axis=0)
    product = float(np.sum(first * second))
    gain = math.sqrt(np.sum(second**2) / np.sum(first**2))
    bend = float(np.sum(slope_1 * slope_2))
    if not (bend > 0.0 and product > 0.0):
        raise NoDelay(UNOBSERVABLE, 'The correlation has no clear summit.')
    shape = (len(pair[1].valid), first.shape[1])
    derivative, residual = np.zeros(shape), np.zeros(shape)
    derivative[index] = 0.5 * (gain * slope_1 + slope_2)
    residual[index] = second - gain * first
    size = next_fast_len(2 * shape[0], True)
    smoothing = max(1, round(SMOOTHING_HZ * size / rate))
    variance = variance_of_product_sum(derivative, residual, smoothing, size)
    # A stamp that is off moves all axes at once, by the more the faster the motion: a residual
    # along the derivative that grows with it. The axes taken for independent, its variance would
    # be too small by about their number.
    length = np.linalg.norm(derivative, axis=1, keepdims=True)
    along = np.sum(derivative * residual, axis=1, keepdims=True) / np.maximum(length, 1e-300)
    together = variance_of_product_sum(length, along, smoothing, size)
    scale = float(np.sum(length**2) * np.sum(along**2)) / len(index)
    if scale > 0.0:
        # White 1980, Econometrica 48:817-838 (from memory): the spread depends on the motion.
        together *= float(np.sum((length * along) ** 2)) / scale
    variance = max(variance, together)
    error = math.sqrt(variance * len(index) / everything) / (gain * bend) / rate
    return error, math.sqrt(bend / product) * rate / (2.0 * math.pi)


def check_outcome(outcome: Outcome, settings: DelaySettings) -> None:
    """Refuse motion too slow, a value too uncertain and one outside of the range."""
    if outcome.mean_hz < settings.low_hz:
        raise NoDelay(
            UNOBSERVABLE,
            f'Motion too slow: mean frequency {outcome.mean_hz:.2f} Hz, '
            f'{settings.low_hz:.2f} Hz are needed.',
        )
    if outcome.standard_error_s > settings.max_standard_error_s:
        raise NoDelay(
            UNOBSERVABLE,
            f'Too uncertain: standard error {outcome.standard_error_s:.3f} s, at most '
            f'{settings.max_standard_error_s:.3f} s are accepted.',
        )
    if not settings.min_s <= outcome.delay_s <= settings.max_s:
        raise NoDelay(
            UNOBSERVABLE,
            f'The peak at {outcome.delay_s:.2f} s is at the edge of the search range of '
            f'{settings.min_s:.2f} to {settings.max_s:.2f} s.',
        )
