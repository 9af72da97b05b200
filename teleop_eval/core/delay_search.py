# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""First look for a delay over the whole range, and the checks that there is one to tell."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.fft import next_fast_len
from scipy.special import betaincinv

from .correlation import (
    LagCorrelation,
    Series,
    Transform,
    correlate_lags,
    transform,
    variance_of_product_sum,
)
from .delay_settings import DelaySettings, NoDelay, Sides
from .metric import INSUFFICIENT, UNOBSERVABLE

# Autocovariances are trusted up to about 1 / 0.25 Hz.
SMOOTHING_HZ = 0.25
# Lags in the search range that are independent of each other for motion up to 4 Hz.
_INDEPENDENT_LAGS_PER_S = 8.0
# A second peak is one only if the correlation falls by this share of the highest in between;
# without that, noise on top of one broad peak would count as several.
_DIP = 0.1


@dataclass(frozen=True)
class Search:
    """What the first correlation found: filtered series, their spectra, the highest peak."""

    pair: tuple[Series, Series]
    spectra: tuple[Transform, Transform]
    found: LagCorrelation
    best: int

    @property
    def highest(self) -> float:
        """Return the highest correlation."""
        return float(self.found.value[self.best])

    @property
    def lag(self) -> int:
        """Return the lag of the highest correlation in samples."""
        return int(self.found.lags[self.best])


def search_peak(
    pair: tuple[Series, Series], rate: float, settings: DelaySettings, sides: Sides
) -> Search:
    """Correlate over the search range and a little beyond, to see peaks at its edge."""
    first = math.floor(settings.min_s * rate) - 2
    last = math.ceil(settings.max_s * rate) + 2
    least = max(8, round(settings.min_duration_s * rate))
    longest = 0
    if len(pair[0].valid) > 0:
        reach = max(-first, last, math.ceil(settings.periodic_s * rate))
        spectra = (transform(pair[0], reach), transform(pair[1], reach))
        found = correlate_lags(*spectra, first, last, min_pairs=least)
        if np.isfinite(found.value).any():
            best = int(np.nanargmax(found.value))
            return Search(pair, spectra, found, best)
        longest = int(found.pairs.max())
        if longest >= least:
            raise NoDelay(UNOBSERVABLE, _still(pair, sides))
    raise NoDelay(
        INSUFFICIENT,
        f'Only {longest / rate:.1f} s with valid data of both {sides.both}, '
        f'{settings.min_duration_s:.1f} s are needed.',
    )


def _still(pair: tuple[Series, Series], sides: Sides) -> str:
    """Return the sentence on the side that stands still."""
    energies = [float(np.sum(_centred(series) ** 2)) for series in pair]
    if max(energies) == 0.0:
        return f'Neither {sides.reference} nor {sides.response} moves at all.'
    which = sides.reference if energies[0] < energies[1] else sides.response
    return f'The {which} does not move at all.'


def check_motion(
    speeds: tuple[float, float], settings: DelaySettings, sides: Sides
) -> None:
    """Refuse a side that stands still."""
    for name, speed in zip((sides.reference, sides.response), speeds, strict=True):
        if not speed >= settings.min_speed:
            raise NoDelay(
                UNOBSERVABLE,
                f'The {name} hardly moves: {sides.speed(speed)} RMS in the band, '
                f'{sides.speed(settings.min_speed)} are needed.',
            )


def check_chance(search: Search, rate: float, settings: DelaySettings) -> None:
    """Refuse a peak that unrelated motions of these spectra could have."""
    highest = search.highest
    centred = (_centred(search.pair[0]), _centred(search.pair[1]))
    size = next_fast_len(2 * len(centred[0]), True)
    smoothing = max(1, round(SMOOTHING_HZ * size / rate))
    spread = variance_of_product_sum(centred[0], centred[1], smoothing, size)
    energy = np.sum(centred[0] ** 2) * np.sum(centred[1] ** 2)
    valid = np.count_nonzero(search.pair[1].valid)
    share = search.found.pairs[search.best] / max(1, valid)
    blocks = max(3.0, float(energy / max(spread, 1e-300)) * share)
    lags = 1.0 + _INDEPENDENT_LAGS_PER_S * (settings.max_s - settings.min_s)
    # For unrelated normal pairs r^2 follows a beta distribution (1/2, n/2 - 1).
    chance = math.sqrt(
        betaincinv(0.5, 0.5 * blocks - 1.0, 1.0 - 2.0 * settings.false_alarm / lags)
    )
    needed = max(settings.min_correlation, chance)
    if not highest >= needed:
        raise NoDelay(
            UNOBSERVABLE,
            f'Correlation too low: {highest:.2f} at the highest peak, {needed:.2f} are needed '
            f'with this motion.',
        )


def _centred(series: Series) -> np.ndarray:
    """Return the values about their mean, 0 where missing."""
    mean = series.values[series.valid].mean(axis=0)
    return np.where(series.valid[:, None], series.values - mean, 0.0)


def check_single(
    search: Search, rate: float, settings: DelaySettings, sides: Sides
) -> None:
    """Refuse a peak at the edge, a rival peak and periodic motion."""
    found, best = search.found, search.best
    value = np.where(np.isfinite(found.value), found.value, -1.0)
    delay = found.lags[best] / rate
    if not settings.min_s <= delay <= settings.max_s or best in (0, len(value) - 1):
        raise NoDelay(
            UNOBSERVABLE,
            f'The highest correlation, {value[best]:.2f}, is at the edge of the search range '
            f'of {settings.min_s:.2f} to {settings.max_s:.2f} s.',
        )
    rival = _rival(value, best, settings.second_peak * value[best])
    if rival is not None:
        raise NoDelay(
            UNOBSERVABLE,
            f'Ambiguous: a second peak of {value[rival]:.2f} at '
            f'{found.lags[rival] / rate:.2f} s beside {value[best]:.2f} at {delay:.2f} s.',
        )
    # Noise takes the same share from the autocorrelation as from the cross-correlation, so
    # the limit sinks with the peak; not below 0.8, since a low peak has other causes too.
    limit = settings.second_peak * min(1.0, max(0.8, value[best]))
    last = round(settings.periodic_s * rate)
    for name, spectra in zip(
            (sides.reference, sides.response), search.spectra, strict=True):
        own = correlate_lags(spectra, spectra, 0, last, min_pairs=round(rate))
        own_value = np.where(np.isfinite(own.value), own.value, -1.0)
        rival = _rival(own_value, 0, limit)
        if rival is not None:
            raise NoDelay(
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
