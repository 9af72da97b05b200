# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Delay between two motions on the same grid, or the reason why there is none to tell.

The delay is where the normalised cross-correlation of the two velocity vectors, summed over
dimensions, is highest. In steps:

1. Both series pass the same short causal filters, warmed up on data from before the window,
   so that the filters' own phase cancels.
2. A first correlation over the whole search range answers whether there is a delay to tell:
   enough data, motion on both sides, more correlation than chance gives, one peak, not at
   the edge, not periodic.
3. Around that peak the filter is chosen, out of a small bank, for which the spread of the
   delay predicted from the data is least (the maximum-likelihood weighting of Knapp & Carter,
   restricted to a few shapes so that it can be learned from ten seconds).
4. The peak is interpolated band-limited over one fixed set of samples, and its standard error
   follows from the residual's autocorrelation and the motion's derivative.

A robot that lags (a servo) has no single delay: the estimate is then delay plus lag as the
motion's band sees it.

References
----------
- Knapp & Carter 1976, "The generalized correlation method for estimation of time delay",
  IEEE Trans. ASSP 24:320-327.
- Quazi 1981, "An overview on the time delay estimate in active and passive systems for target
  localization", IEEE Trans. ASSP 29:527-533.
- Carter 1987, "Coherence and time delay estimation", Proc. IEEE 75:236-255.

"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.fft import next_fast_len, rfft
from scipy.special import betaincinv

from .correlation import (
    KERNEL_HALF,
    LagCorrelation,
    Series,
    common_pairs,
    correlate_lags,
    refine_peak,
    shifted_values,
    variance_of_product_sum,
)
from .delay_filters import apply, bank, decimate, decimation, detection_taps
from .metric import INSUFFICIENT, OK, UNOBSERVABLE

# Half of the range searched around the first peak, in working samples.
_SEARCH = 2
# Autocovariances are trusted up to about 1 / 0.25 Hz.
_SMOOTHING_HZ = 0.25
# Lags in the search range that are independent of each other for motion up to 4 Hz.
_INDEPENDENT_LAGS_PER_S = 8.0
# With a lower correlation than this, the narrow filter gets its turn too.
_CLEAR = 0.8
# The usual filter stays unless another one promises a variance smaller by this factor: the
# prediction itself is uncertain by about as much.
_WORTH = 0.85
# A second peak is one only if the correlation falls by this share of the highest in between;
# without that, noise on top of one broad peak would count as several.
_DIP = 0.1


@dataclass(frozen=True)
class DelaySettings:
    """
    What is searched and when a delay counts as observable.

    Attributes
    ----------
    min_s, max_s
        Search range in seconds. A little below 0, so that a response without delay has its
        peak inside the range, and up to 1 s, where people stop moving continuously.
    low_hz
        Motion whose mean frequency is lower is called too slow: within 10 s it has no
        feature whose time could be told.
    high_hz
        Highest corner of the filters. Voluntary motion ends at 2-3 Hz, tremor at 12 Hz.
    min_speed
        Least RMS velocity of both sides in the band, arm lengths/s or rad/s: clearly under
        slow work (0.05) and over the noise of a still sensor.
    min_correlation
        Least correlation at the peak. Chance is excluded apart (`false_alarm`); this refuses
        motions that are related but of which more than half is something else.
    false_alarm
        Probability that unrelated motions of the same spectra reach the peak found.
    second_peak
        Share of the highest peak from which another one makes the answer ambiguous.
    periodic_s
        The motion's own autocorrelation is checked for such a peak up to this lag. Longer
        than the search range, because one more period back the true delay would lie just
        outside of it.
    min_duration_s
        Least duration of valid pairs of samples.
    max_standard_error_s
        Largest standard error with which a value is still given.
    context_s
        Data used before the window: the longest lag and the filters' length.

    """

    min_s: float = -0.1
    max_s: float = 1.0
    low_hz: float = 0.12
    high_hz: float = 9.0
    min_speed: float = 0.02
    min_correlation: float = 0.5
    false_alarm: float = 0.002
    second_peak: float = 0.9
    periodic_s: float = 1.3
    min_duration_s: float = 4.0
    max_standard_error_s: float = 0.1
    context_s: float = 1.5


@dataclass(frozen=True)
class DelayEstimate:
    """
    Delay of one window.

    Attributes
    ----------
    delay_s
        Seconds, positive = response later; None unless `status` is 'ok'.
    standard_error_s
        One standard deviation of `delay_s`, None with it.
    correlation
        Normalised correlation at the peak, NaN if none could be computed.
    status, reason
        'ok', 'unobservable' or 'insufficient', and one sentence for the last two.
    samples
        Grid samples behind the value.
    speed_reference, speed_response
        RMS velocity in the band, in the inputs' unit; NaN if there is no data.
    snr
        Power ratio of common motion to noise at the peak, both sides taken as equally noisy:
        correlation / (1 - correlation).

    """

    delay_s: float | None
    standard_error_s: float | None
    correlation: float
    status: str
    reason: str
    samples: int
    speed_reference: float
    speed_response: float
    snr: float


@dataclass(frozen=True)
class _Outcome:
    """Refined peak: seconds, seconds, height, pairs at the working rate, mean Hz."""

    delay_s: float
    standard_error_s: float
    height: float
    pairs: int
    mean_hz: float


class _NoValue(Exception):
    """Carries status and sentence from the check that failed."""

    def __init__(self, status: str, reason: str) -> None:
        super().__init__(reason)
        self.status = status
        self.reason = reason


def estimate_delay(
    reference: np.ndarray,
    response: np.ndarray,
    rate_hz: float,
    *,
    valid_reference: np.ndarray | None = None,
    valid_response: np.ndarray | None = None,
    runs: np.ndarray | None = None,
    window: tuple[int, int] | None = None,
    settings: DelaySettings | None = None,
) -> DelayEstimate:
    """
    Estimate the delay of one velocity behind another over a window.

    Parameters
    ----------
    reference, response
        Velocities (n, d) on one uniform grid, same unit, up to the window's end or beyond.
    rate_hz
        The grid's rate, at least 50 Hz for the full band.
    valid_reference, valid_response
        Which rows count (n,); those that are not finite never do.
    runs
        Labels (n,) of contiguous pieces, such as engagements; no pair spans a change.
    window
        First index and index after the last one of the window; default everything. Up to
        `settings.context_s` of the data before it are used, none after it.
    settings
        Search range and thresholds.

    Returns
    -------
    DelayEstimate
        With the value, or with the reason why there is none.

    Raises
    ------
    ValueError
        If shapes do not fit or the rate is not positive.

    """
    settings = settings or DelaySettings()
    pair = _prepare(
        reference, response, rate_hz, (valid_reference, valid_response), runs, window, settings
    )
    factor = decimation(rate_hz)
    rate = rate_hz / factor
    wide = (decimate(pair[0], factor), decimate(pair[1], factor))
    taps = detection_taps(rate, settings.high_hz)
    used = taps[0]
    smooth = _filtered(wide, used)
    speeds = (_rms(smooth[0]), _rms(smooth[1]))
    correlation, pairs = math.nan, 0
    try:
        found = _correlation(smooth, rate, settings)
        if _highest(found) < _CLEAR:
            # Noise above the motion's band may be all that is wrong.
            smoother = _filtered(wide, taps[1])
            again = _correlation(smoother, rate, settings)
            if _highest(again) > _highest(found):
                smooth, found, used = smoother, again, taps[1]
        correlation, pairs = _highest(found), int(found.pairs.max())
        _check_motion(speeds, settings)
        _check_chance(smooth, found, rate, settings)
        _check_single(smooth, found, rate, settings)
        lag = int(found.lags[np.nanargmax(found.value)])
        outcome = _refine(wide, lag, used, rate, settings)
        correlation, pairs = outcome.height, outcome.pairs
        _check_outcome(outcome, settings)
    except _NoValue as answer:
        return DelayEstimate(
            None, None, correlation, answer.status, answer.reason, pairs * factor, *speeds,
            _snr(correlation),
        )
    return DelayEstimate(
        outcome.delay_s, outcome.standard_error_s, correlation, OK, '', pairs * factor,
        *speeds, _snr(correlation),
    )


def _prepare(
    reference: np.ndarray,
    response: np.ndarray,
    rate_hz: float,
    valid: tuple[np.ndarray | None, np.ndarray | None],
    runs: np.ndarray | None,
    window: tuple[int, int] | None,
    settings: DelaySettings,
) -> tuple[Series, Series]:
    """Check the input, cut out window and context, set runs apart by missing samples."""
    both = [np.asarray(series, dtype=float) for series in (reference, response)]
    if both[0].ndim != 2 or both[0].shape != both[1].shape:
        raise ValueError(
            f'expected two velocities of one shape (n, d), got {both[0].shape} and '
            f'{both[1].shape}'
        )
    if not rate_hz > 0.0:
        raise ValueError(f'the rate must be positive, got {rate_hz} Hz')
    start, stop = window or (0, len(both[0]))
    first = max(0, start - math.ceil(settings.context_s * rate_hz))
    part = slice(first, max(first, min(stop, len(both[0]))))
    place = None
    if runs is not None:
        # Longer than any lag looked at: then no pair and no filter reaches across.
        pause = math.ceil((max(settings.max_s, settings.periodic_s) + 0.5) * rate_hz)
        changes = np.concatenate([[0], np.cumsum(np.diff(np.asarray(runs)[part]) != 0)])
        if len(changes) and changes[-1] > 0:
            place = np.arange(len(changes)) + pause * changes
    return (
        _series(both[0][part], valid[0], part, place),
        _series(both[1][part], valid[1], part, place),
    )


def _series(
    values: np.ndarray, valid: np.ndarray | None, part: slice, place: np.ndarray | None
) -> Series:
    """Return values with zeros where missing, moved to their places."""
    usable = np.isfinite(values).all(axis=1)
    if valid is not None:
        usable = usable & np.asarray(valid, dtype=bool)[part]
    values = np.where(usable[:, None], values, 0.0)
    if place is None:
        return Series(values, usable)
    apart = Series(
        np.zeros((place[-1] + 1, values.shape[1])), np.zeros(place[-1] + 1, dtype=bool)
    )
    apart.values[place] = values
    apart.valid[place] = usable
    return apart


def _filtered(pair: tuple[Series, Series], taps: np.ndarray) -> tuple[Series, Series]:
    """Pass both series through the same filter."""
    return apply(pair[0], taps), apply(pair[1], taps)


def _rms(series: Series) -> float:
    """Return the RMS norm about the mean of the valid samples, NaN without any."""
    values = series.values[series.valid]
    if len(values) == 0:
        return math.nan
    return float(np.sqrt(np.sum(np.var(values, axis=0))))


def _snr(correlation: float) -> float:
    """Return the power ratio of common motion to noise, equal noise assumed."""
    if not correlation < 1.0:
        return math.inf if correlation >= 1.0 else math.nan
    return max(correlation, 0.0) / (1.0 - correlation)


def _correlation(
    pair: tuple[Series, Series], rate: float, settings: DelaySettings
) -> LagCorrelation:
    """Correlate over the search range and a little beyond, to see peaks at its edge."""
    first = math.floor(settings.min_s * rate) - 2
    last = math.ceil(settings.max_s * rate) + 2
    least = max(8, round(settings.min_duration_s * rate))
    n = len(pair[0].valid)
    if n > 0:
        found = correlate_lags(*pair, first, last, min_pairs=least)
        if np.isfinite(found.value).any():
            return found
        longest = int(found.pairs.max())
        if longest >= least:
            raise _NoValue(UNOBSERVABLE, 'One of the two sides does not move at all.')
    else:
        longest = 0
    raise _NoValue(
        INSUFFICIENT,
        f'Only {longest / rate:.1f} s of valid data on both sides, '
        f'{settings.min_duration_s:.1f} s are needed.',
    )


def _highest(found: LagCorrelation) -> float:
    """Return the highest correlation."""
    return float(np.nanmax(found.value))


def _check_motion(speeds: tuple[float, float], settings: DelaySettings) -> None:
    """Refuse a side that stands still."""
    for name, speed in zip(('reference', 'response'), speeds, strict=True):
        if not speed >= settings.min_speed:
            raise _NoValue(
                UNOBSERVABLE,
                f'The {name} hardly moves: {speed:.4f} RMS in the band, '
                f'{settings.min_speed:.4f} are needed.',
            )


def _check_chance(
    pair: tuple[Series, Series], found: LagCorrelation, rate: float, settings: DelaySettings
) -> None:
    """Refuse a peak that unrelated motions of these spectra could have."""
    highest = _highest(found)
    best = int(np.nanargmax(found.value))
    centred = [_centred(series) for series in pair]
    size = next_fast_len(2 * len(centred[0]), True)
    smoothing = max(1, round(_SMOOTHING_HZ * size / rate))
    spread = variance_of_product_sum(*centred, smoothing, size)
    energy = np.sum(centred[0] ** 2) * np.sum(centred[1] ** 2)
    share = found.pairs[best] / max(1, np.count_nonzero(pair[1].valid))
    blocks = max(3.0, float(energy / max(spread, 1e-300)) * share)
    lags = 1.0 + _INDEPENDENT_LAGS_PER_S * (settings.max_s - settings.min_s)
    # For unrelated normal pairs r^2 follows a beta distribution (1/2, n/2 - 1).
    chance = math.sqrt(
        betaincinv(0.5, 0.5 * blocks - 1.0, 1.0 - 2.0 * settings.false_alarm / lags)
    )
    needed = max(settings.min_correlation, chance)
    if not highest >= needed:
        raise _NoValue(
            UNOBSERVABLE,
            f'Correlation too low: {highest:.2f} at the highest peak, {needed:.2f} are needed '
            f'with this motion.',
        )


def _centred(series: Series) -> np.ndarray:
    """Return the values about their mean, 0 where missing."""
    mean = series.values[series.valid].mean(axis=0)
    return np.where(series.valid[:, None], series.values - mean, 0.0)


def _check_single(
    pair: tuple[Series, Series], found: LagCorrelation, rate: float, settings: DelaySettings
) -> None:
    """Refuse a peak at the edge, a rival peak and periodic motion."""
    value = np.where(np.isfinite(found.value), found.value, -1.0)
    best = int(np.argmax(value))
    delay = found.lags[best] / rate
    if not settings.min_s <= delay <= settings.max_s or best in (0, len(value) - 1):
        raise _NoValue(
            UNOBSERVABLE,
            f'The highest correlation, {value[best]:.2f}, is at the edge of the search range '
            f'of {settings.min_s:.2f} to {settings.max_s:.2f} s.',
        )
    rival = _rival(value, best, settings.second_peak * value[best])
    if rival is not None:
        raise _NoValue(
            UNOBSERVABLE,
            f'Ambiguous: a second peak of {value[rival]:.2f} at '
            f'{found.lags[rival] / rate:.2f} s beside {value[best]:.2f} at {delay:.2f} s.',
        )
    # Noise takes the same share from the autocorrelation as from the cross-correlation, so
    # the limit sinks with the peak; not below 0.8, since a low peak has other causes too.
    limit = settings.second_peak * min(1.0, max(0.8, value[best]))
    last = round(settings.periodic_s * rate)
    for name, series in zip(('reference', 'response'), pair, strict=True):
        own = correlate_lags(series, series, 0, last, min_pairs=round(rate))
        own_value = np.where(np.isfinite(own.value), own.value, -1.0)
        rival = _rival(own_value, 0, limit)
        if rival is not None:
            raise _NoValue(
                UNOBSERVABLE,
                f'The {name} is periodic, {rival / rate:.2f} s (autocorrelation '
                f'{own_value[rival]:.2f}): the delay is ambiguous.',
            )


def _rival(value: np.ndarray, best: int, limit: float) -> int | None:
    """Return the index of the highest other peak above the limit with a dip before it."""
    inner = value[1:-1]
    peaks = np.flatnonzero((inner >= value[:-2]) & (inner > value[2:]) & (inner > limit)) + 1
    rivals = []
    for peak in peaks:
        low, high = sorted((int(peak), best))
        if peak != best and value[low:high + 1].min() < value[peak] - _DIP * value[best]:
            rivals.append(int(peak))
    return max(rivals, key=lambda index: value[index], default=None)


def _refine(
    wide: tuple[Series, Series], lag: int, found_with: np.ndarray, rate: float,
    settings: DelaySettings,
) -> _Outcome:
    """Choose the filter, interpolate the peak and compute its standard error."""
    taps = _best_filter(wide, lag, found_with, rate, settings)
    pair = _filtered(wide, taps)
    reach = _SEARCH + KERNEL_HALF
    for _ in range(8):
        index = common_pairs(*pair, lag, reach)
        if len(index) < settings.min_duration_s * rate:
            raise _NoValue(
                INSUFFICIENT,
                f'Only {len(index) / rate:.1f} s of valid data on both sides at a delay of '
                f'{lag / rate:.2f} s, {settings.min_duration_s:.1f} s are needed.',
            )
        peak = refine_peak(*pair, index, lag, _SEARCH)
        nearest = round(peak.lag)
        if abs(nearest - lag) < _SEARCH:
            break
        lag = nearest
    else:
        raise _NoValue(UNOBSERVABLE, f'The peak near {lag / rate:.2f} s has no summit.')
    error, mean_hz = _standard_error(pair, index, peak.lag, rate)
    return _Outcome(peak.lag / rate, error, peak.height, len(index), mean_hz)


def _best_filter(
    wide: tuple[Series, Series], lag: int, found_with: np.ndarray, rate: float,
    settings: DelaySettings,
) -> np.ndarray:
    """
    Return the taps of the bank for which the predicted variance of the delay is least.

    With X1 and X2 aligned and of equal size, A = |X1 + X2|^2 / 4 holds the motion, E =
    |X2 - X1|^2 the noise, and a filter of power P gives the variance
    sum w^2 P^2 A E / (sum w^2 P Re X1* X2)^2, w = 2 pi f. Noise is smooth in frequency, so E
    is averaged over 1 Hz; a few bins of motion alone could not tell it.
    """
    choices = bank(rate, settings.high_hz)
    index = common_pairs(*wide, lag, 1)
    if len(index) < rate:
        return choices.taps[choices.usual]
    shift = index - lag
    size = next_fast_len(len(wide[0].valid), True)
    both = np.zeros((2, len(wide[0].valid), wide[0].values.shape[1]))
    both[0, index] = wide[0].values[shift] - wide[0].values[shift].mean(axis=0)
    both[1, index] = wide[1].values[index] - wide[1].values[index].mean(axis=0)
    frequency = np.arange(size // 2 + 1) * rate / size
    kept = np.count_nonzero(frequency <= 1.5 * settings.high_hz)
    frequency = frequency[:kept]
    first, second = rfft(both, size, axis=1)[:, :kept]
    first, second = _aligned(first, second, frequency, found_with, rate)
    squared = (2.0 * np.pi * frequency) ** 2
    motion = 0.25 * np.sum(np.abs(first + second) ** 2, axis=1)
    common = np.sum((first.conj() * second).real, axis=1)
    noise = _smoothed(
        np.sum(np.abs(second - first) ** 2, axis=1), max(1, round(size / rate))
    )
    power = np.array([
        np.interp(frequency, choices.frequencies_hz, row) for row in choices.power
    ])
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
    first: np.ndarray, second: np.ndarray, frequency: np.ndarray, taps: np.ndarray, rate: float
) -> tuple[np.ndarray, np.ndarray]:
    """Take the rest of the delay and the gain out of two spectra, as the filter sees them."""
    angular = 2.0 * np.pi * frequency
    turn = np.exp(-1j * angular[:, None] / rate * np.arange(len(taps))[None, :])
    power = np.abs(turn @ taps) ** 2
    cross = np.sum(first.conj() * second, axis=1) * power
    for _ in range(2):
        bend = float(np.sum(angular**2 * cross.real))
        if bend <= 0.0:
            break
        rest = np.clip(-np.sum(angular * cross.imag) / bend, -1.0 / rate, 1.0 / rate)
        cross = cross * np.exp(1j * angular * rest)
        second = second * np.exp(1j * angular * rest)[:, None]
    energy_1 = np.sum(power[:, None] * np.abs(first) ** 2)
    energy_2 = np.sum(power[:, None] * np.abs(second) ** 2)
    return first, second * math.sqrt(energy_1 / max(energy_2, 1e-300))


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
        raise _NoValue(INSUFFICIENT, 'The valid data are in too short pieces.')
    everything, index = len(index), inner
    first, slope_1 = shifted_values(pair[0].values, index, lag)
    second, slope_2 = shifted_values(pair[1].values, index, 0.0)
    first = first - first.mean(axis=0)
    second = second - second.mean(axis=0)
    product = float(np.sum(first * second))
    gain = math.sqrt(np.sum(second**2) / np.sum(first**2))
    bend = float(np.sum(slope_1 * slope_2))
    if not (bend > 0.0 and product > 0.0):
        raise _NoValue(UNOBSERVABLE, 'The correlation has no clear summit.')
    shape = (len(pair[1].valid), first.shape[1])
    derivative, residual = np.zeros(shape), np.zeros(shape)
    derivative[index] = 0.5 * (gain * slope_1 + slope_2)
    residual[index] = second - gain * first
    size = next_fast_len(2 * shape[0], True)
    smoothing = max(1, round(_SMOOTHING_HZ * size / rate))
    variance = variance_of_product_sum(derivative, residual, smoothing, size)
    error = math.sqrt(variance * len(index) / everything) / (gain * bend) / rate
    return error, math.sqrt(bend / product) * rate / (2.0 * math.pi)


def _check_outcome(outcome: _Outcome, settings: DelaySettings) -> None:
    """Refuse motion too slow, a value too uncertain and one outside of the range."""
    if outcome.mean_hz < settings.low_hz:
        raise _NoValue(
            UNOBSERVABLE,
            f'Motion too slow: mean frequency {outcome.mean_hz:.2f} Hz, '
            f'{settings.low_hz:.2f} Hz are needed.',
        )
    if outcome.standard_error_s > settings.max_standard_error_s:
        raise _NoValue(
            UNOBSERVABLE,
            f'Too uncertain: standard error {outcome.standard_error_s:.3f} s, at most '
            f'{settings.max_standard_error_s:.3f} s are accepted.',
        )
    if not settings.min_s <= outcome.delay_s <= settings.max_s:
        raise _NoValue(
            UNOBSERVABLE,
            f'The peak at {outcome.delay_s:.2f} s is at the edge of the search range of '
            f'{settings.min_s:.2f} to {settings.max_s:.2f} s.',
        )
