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
4. The peak is interpolated over one fixed set of samples, and its standard error
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
from scipy.fft import next_fast_len

from .correlation import Series
from .delay_filters import bank, decimate, decimation, filtered
from .delay_refine import check_outcome, refine
from .delay_search import check_chance, check_motion, check_single, search_peak
from .delay_settings import DelaySettings, NoDelay, Sides
from .metric import OK

__all__ = ['DelayEstimate', 'DelaySettings', 'Sides', 'estimate_delay']

# With a lower correlation than this, the narrow filter gets its turn too.
_CLEAR = 0.8


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
    sides: Sides | None = None,
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
    sides
        What the two motions are called in the reasons.

    Returns
    -------
    DelayEstimate
        With the value, or with the reason why there is none.

    Raises
    ------
    ValueError
        If shapes do not fit or the rate is not positive.

    """
    settings, sides = settings or DelaySettings(), sides or Sides()
    pair = _prepare(
        reference, response, rate_hz, (valid_reference, valid_response), runs, window, settings
    )
    factor = decimation(rate_hz)
    rate = rate_hz / factor
    wide = (decimate(pair[0], factor), decimate(pair[1], factor))
    filters = bank(rate, settings.high_hz, next_fast_len(max(1, len(wide[0].valid)), True))
    smooth = filtered(wide, filters.detection[0])
    speeds = (_rms(smooth[0]), _rms(smooth[1]))
    correlation, pairs = math.nan, 0
    try:
        search = search_peak(smooth, rate, settings, sides)
        which = 0
        if search.highest < _CLEAR:
            # Noise above the motion's band may be all that is wrong.
            again = search_peak(filtered(wide, filters.detection[1]), rate, settings, sides)
            if again.highest > search.highest:
                search, which = again, 1
        correlation, pairs = search.highest, int(search.found.pairs.max())
        check_motion(speeds, settings, sides)
        check_chance(search, rate, settings)
        check_single(search, rate, settings, sides)
        outcome = refine(wide, search.lag, (filters, which), rate, settings, sides)
        correlation, pairs = outcome.height, outcome.pairs
        check_outcome(outcome, settings)
    except NoDelay as answer:
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
