# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Bandwidth, phase delay and coherent band of a frequency response, as metrics.

References
----------
A. G. Piersol, "Time delay estimation using phase data", IEEE Trans. ASSP 29(3), 1981,
471-477: the phase fitted through the origin with weights coherence / (1 - coherence)
(citation from memory).

B. Efron, C. Stein, "The jackknife estimate of variance", Annals of Statistics 9(3), 1981,
586-596 (citation from memory).

"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import stdtrit

from teleop_eval.core.blocks import MIN_BLOCKS, BatchMeans
from teleop_eval.core.cross_spectra import Spectra
from teleop_eval.core.frequency_response import (
    MAX_LOWEST_HZ,
    MIN_COHERENCE,
    FrequencyResponse,
    Response,
    phase_rad,
)
from teleop_eval.core.metric import INSUFFICIENT, UNOBSERVABLE, Metric, missing

MIN_SEGMENTS = 10
# Half of the power of the lowest band: -3.01 dB.
_HALF_POWER = math.log(math.sqrt(0.5))
# Weights of nearly perfect frequencies differ by rounding only.
_MIN_INCOHERENCE = 1e-3


# With a correction for the window's smear above this share of the interval's half width, what
# is left of the smear makes the interval cover too rarely.
_MAX_CORRECTION = 0.7
_COARSE = ('no interval: what segments of {0:g} s cannot resolve, or what lies beyond the '
           'coherent band, is not small against the scatter')


@dataclass(frozen=True)
class Uncertainty:
    """
    What an estimate may be wrong by.

    `standard_error` is the jackknife's, `resolution` the correction for the window's smear,
    of which less than the whole is left. `ci95` is None with fewer than 20 batches and where
    the scatter does not clearly outweigh the resolution.
    """

    standard_error: float
    resolution: float
    ci95: tuple[float, float] | None

    def details(self, unit: str) -> dict[str, object]:
        """Return both as details of a metric."""
        return {f'standard_error_{unit}': self.standard_error,
                f'resolution_{unit}': self.resolution}


def metrics(measured: FrequencyResponse, *, of: str = '') -> dict[str, Metric]:
    """
    Return bandwidth{of}_hz, phase_delay{of}_s and coherent_up_to{of}_hz.

    Parameters
    ----------
    measured
        The accumulated frequency response.
    of
        Part of the names, such as '_response' for command to robot.

    """
    response = measured.result()
    names = (f'bandwidth{of}_hz', f'phase_delay{of}_s', f'coherent_up_to{of}_hz')
    units = ('Hz', 's', 'Hz')
    nothing = _nothing(response, measured.segment_s)
    if nothing is not None:
        status, reason = nothing
        return {name: missing(status, unit, reason, segments=response.segments)
                for name, unit in zip(names, units, strict=True)}
    total, left_out = measured.total, measured.left_out()
    found = (_bandwidth(response, total, left_out, measured.segment_s),
             _phase_delay(response, total, left_out, measured.segment_s),
             _coherent_up_to(response))
    return dict(zip(names, found, strict=True))


def curve(response: Response) -> dict[str, list[float | None]]:
    """Return the response as short lists of plain numbers, for a report to draw."""
    columns = {
        'frequency_hz': response.frequencies_hz, 'gain_h1': response.gain_h1,
        'gain_h2': response.gain_h2, 'phase_rad': response.phase_rad,
        'coherence': response.coherence,
    }
    return {name: [round(float(x), 5) if math.isfinite(x) else None for x in values]
            for name, values in columns.items()}


def _nothing(response: Response, segment_s: float) -> tuple[str, str] | None:
    """Return status and reason if nothing at all can be told."""
    if response.segments < MIN_SEGMENTS:
        return INSUFFICIENT, (
            f'{response.segments} segments of {segment_s:g} s without a gap so far, '
            f'{MIN_SEGMENTS} are needed')
    if response.band is None:
        best = int(np.argmax(response.coherence))
        return UNOBSERVABLE, (
            f'the coherence exceeds {_needed(response, best):.2f} at no two neighbouring '
            f'frequencies; the highest is {response.coherence[best]:.2f} at '
            f'{response.frequencies_hz[best]:.2f} Hz')
    return None


def _needed(response: Response, index: int) -> float:
    return max(MIN_COHERENCE, float(response.null_level[index]))


def _coherent_up_to(response: Response) -> Metric:
    assert response.band is not None
    first, last = response.band
    return Metric(
        float(response.frequencies_hz[last]), 'Hz', None, response.segments, response.samples,
        details={'from_hz': float(response.frequencies_hz[first]), 'curve': curve(response)})


def _bandwidth(response: Response, total: Spectra, left_out: list[Spectra],
               segment_s: float) -> Metric:
    """
    Return the frequency from which on both gains are below -3 dB of the lowest band.

    The lowest band is the lowest coherent frequency (of segments of 4 s at best 0.25 Hz),
    which the window makes 0.36 Hz wide. Each gain is compared with its own there. So the
    bandwidth of a first-order lag comes out too high by 0.7 % at 3 Hz and 6 % at 1 Hz.
    """
    assert response.band is not None
    first, last = response.band
    hz = response.frequencies_hz[first:last + 1]
    details: dict[str, object] = {
        'lowest_band_hz': float(hz[0]),
        'coherent_up_to_hz': float(hz[-1]),
    }
    if hz[0] > MAX_LOWEST_HZ:
        return missing(
            UNOBSERVABLE, 'Hz', f'coherent from {hz[0]:.2f} Hz on only: there is no slow motion '
            'to compare the gain with', **details)
    log_gain = _log_gain(total, response.band)
    each = np.array([_log_gain(one, response.band) for one in left_out])
    error = np.array([_standard_error(column) for column in each.T])
    sure = stdtrit(len(each) - 1, 0.975) * error
    crossing = _crossing(log_gain, sure)
    if crossing is None:
        return missing(UNOBSERVABLE, 'Hz', _above(hz, log_gain, sure), **details)
    value = _interpolated(hz, log_gain, crossing)
    plain = _log_gain(total.unsharpened, response.band)
    known = _uncertainty(
        value, np.array([_interpolated(hz, row, crossing) for row in each]),
        unsharpened=_interpolated(hz, plain, crossing))
    if known.ci95 is not None and known.ci95[1] > hz[-1]:
        # Only runs whose gain happened to be low would be given a value there.
        known = replace(known, ci95=None)
    return Metric(value, 'Hz', known.ci95, response.segments, response.samples,
                  reason=_caveat(known, left_out, segment_s),
                  details=details | known.details('hz'))


def _caveat(known: Uncertainty, left_out: list[Spectra], segment_s: float) -> str:
    coarse = known.ci95 is None and len(left_out) >= MIN_BLOCKS
    return _COARSE.format(segment_s) if coarse else ''


def _log_gain(spectra: Spectra, band: tuple[int, int]) -> np.ndarray:
    """Return the larger of both gains (k,), log of the ratio to its own lowest band."""
    inside = slice(band[0], band[1] + 1)
    gains = np.stack([spectra.gain_h1[inside], spectra.gain_h2[inside]])
    gains = np.log(np.where(gains > 0.0, gains, np.nan))  # sharpened powers can be negative
    return np.asarray(np.max(gains - gains[:, :1], axis=0))


def _crossing(log_gain: np.ndarray, sure: np.ndarray) -> int | None:
    """
    Return the index of the first gain below -3 dB of a stretch that is surely below.

    A stretch counts if at one of its frequencies the gain is below by more than the
    uncertainty `sure`: a dip by chance at the end of the band is no bandwidth.
    """
    start = None
    for index, below in enumerate(log_gain < _HALF_POWER):
        start = (index if start is None else start) if below else None
        if start is not None and log_gain[index] + sure[index] < _HALF_POWER:
            return start or None
    return None


def _interpolated(hz: np.ndarray, log_gain: np.ndarray, crossing: int) -> float:
    """Return where the gain passes -3 dB, on the line through two neighbours in log-log."""
    low, high = log_gain[crossing - 1], log_gain[crossing]
    part = (low - _HALF_POWER) / (low - high)
    return float(hz[crossing - 1] * (hz[crossing] / hz[crossing - 1]) ** part)


def _above(hz: np.ndarray, log_gain: np.ndarray, sure: np.ndarray) -> str:
    near = np.flatnonzero(log_gain - sure < _HALF_POWER)
    end = f'{hz[-1]:.2f} Hz, end of the coherent band'
    if near.size:
        return (f'above about {hz[near[0]]:.2f} Hz: the gain may be at -3 dB there, but is not '
                f'surely below up to {end}')
    return f'above {end}; the gain there is {log_gain[-1] * 20.0 / math.log(10.0):+.1f} dB'


def _phase_delay(response: Response, total: Spectra, left_out: list[Spectra],
                 segment_s: float) -> Metric:
    """
    Return the delay whose phase -2 pi f D fits the coherent band best.

    Through the origin: motion that is slow enough is followed without phase. The weight of
    a frequency is coherence / (1 - coherence), the inverse variance of its phase.
    """
    assert response.band is not None
    band = response.band
    inside = slice(band[0], band[1] + 1)
    hz, coherence = response.frequencies_hz[inside], response.coherence[inside]
    weight = coherence / np.maximum(1.0 - coherence, _MIN_INCOHERENCE)
    third = max(2, len(hz) // 3)
    lowest, highest = np.arange(len(hz)) < third, np.arange(len(hz)) >= len(hz) - third

    def phase(spectra: Spectra) -> np.ndarray:
        return phase_rad(spectra.cross, response.frequencies_hz, band=band,
                         mean_shift_s=response.mean_shift_s)[inside]

    phases = [phase(one) for one in left_out]
    value = _slope_delay(hz, phase(total), weight)
    known = _uncertainty(
        value, np.array([_slope_delay(hz, one, weight) for one in phases]),
        unsharpened=_slope_delay(hz, phase(total.unsharpened), weight))
    change = _change(hz, phase(total), phases, weight * lowest, weight * highest)
    return Metric(
        value, 's', known.ci95, response.segments, response.samples,
        reason=_caveat(known, left_out, segment_s), details=known.details('s') | {
            'band_hz': [float(hz[0]), float(hz[-1])],
            'slow_s': _slope_delay(hz, phase(total), weight * lowest),
            'slow_up_to_hz': float(hz[third - 1]),
            'fast_s': _slope_delay(hz, phase(total), weight * highest),
            'fast_from_hz': float(hz[-third]),
            'change_s': change[0], 'change_standard_error_s': change[1],
        })


def _change(hz: np.ndarray, phase: np.ndarray, phases: list[np.ndarray], lowest: np.ndarray,
            highest: np.ndarray) -> tuple[float, float]:
    """Return how much later fast motion is than slow motion, and the standard error."""
    def change(one: np.ndarray) -> float:
        return _slope_delay(hz, one, highest) - _slope_delay(hz, one, lowest)

    return change(phase), _standard_error(np.array([change(one) for one in phases]))


def _slope_delay(hz: np.ndarray, phase: np.ndarray, weight: np.ndarray) -> float:
    return float(-np.sum(weight * hz * phase) / (2.0 * np.pi * np.sum(weight * hz ** 2)))


def _standard_error(each: np.ndarray) -> float:
    """Return the jackknife standard error from the estimates without each batch."""
    n = len(each)
    return math.sqrt((n - 1) / n * float(np.sum((each - each.mean()) ** 2)))


def _uncertainty(value: float, each: np.ndarray, *, unsharpened: float) -> Uncertainty:
    """
    Return error and interval of an estimate from those without each batch.

    The pseudo-values n x - (n - 1) x_b behave like independent observations of the estimate;
    what correlation successive ones still have widens the interval as everywhere else.
    """
    n = len(each)
    error, resolution = _standard_error(each), abs(value - unsharpened)
    blocks = BatchMeans(max_batches=2 * MIN_BLOCKS)
    for one in n * value - (n - 1) * each:
        blocks.add(float(one))
    interval = blocks.ci95()
    if interval is None or not math.isfinite(error):
        return Uncertainty(error, resolution, None)
    half = (interval[1] - interval[0]) / 2.0
    fine = resolution <= _MAX_CORRECTION * half
    return Uncertainty(error, resolution, (value - half, value + half) if fine else None)
