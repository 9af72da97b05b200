# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Motions with known delay, noise of known density, and the bound on what can be told."""

import numpy as np
from scipy.integrate import trapezoid
from scipy.interpolate import CubicSpline

from teleop_eval.core.resample import cell_average, default_max_gap_ns, edge_velocity

ORIGIN_S = 5.0


def band_limited(rng, duration_s, low_hz, high_hz, rms, width=3, slope=0.0):
    """
    Return position functions of a Gaussian motion whose velocity fills a band.

    The velocity's spectral density goes with f ** -slope; `rms` is that of its norm. The
    returned function takes seconds (n,) in -5 ... duration + 5 and gives metres (n, width).
    """
    rate = 40.0 * high_hz
    size = int((duration_s + 2 * ORIGIN_S) * rate)
    frequency = np.fft.rfftfreq(size, 1.0 / rate)
    inside = (frequency >= low_hz) & (frequency <= high_hz) & (frequency > 0)
    spectrum = np.zeros((len(frequency), width), dtype=complex)
    count = (int(inside.sum()), width)
    spectrum[inside] = rng.normal(size=count) + 1j * rng.normal(size=count)
    spectrum[inside] *= frequency[inside, None] ** (-0.5 * slope)
    velocity = np.fft.irfft(spectrum, size, axis=0)
    spectrum *= rms / np.sqrt(np.mean(np.sum(velocity**2, axis=1)))
    spectrum[inside] /= 2j * np.pi * frequency[inside, None]
    times = np.arange(size) / rate - ORIGIN_S
    return CubicSpline(times, np.fft.irfft(spectrum, size, axis=0))


def reaches(rng, duration_s, distance=0.4, width=3, durations=(1.2, 2.0), rests=(0.2, 0.8)):
    """
    Return the position function of minimum-jerk reaches to random targets with rests.

    Minimum jerk: Flash & Hogan 1985, J. Neurosci. 5(7):1688-1703.
    """
    count = int((duration_s + 2 * ORIGIN_S) / (durations[0] + rests[0])) + 3
    lengths, pauses = rng.uniform(*durations, count), rng.uniform(*rests, count)
    starts = np.concatenate([[0.0], np.cumsum(lengths + pauses)])[:-1] - ORIGIN_S - 1.0
    targets = rng.normal(size=(count + 1, width))
    targets *= distance / np.sqrt(2 * width)

    def position(times):
        times = np.asarray(times)
        which = np.clip(np.searchsorted(starts, times, side='right') - 1, 0, count - 1)
        share = np.clip((times - starts[which]) / lengths[which], 0.0, 1.0)
        shape = share**3 * (10.0 - 15.0 * share + 6.0 * share**2)
        return targets[which] + shape[:, None] * (targets[which + 1] - targets[which])

    return position


def sample(
    position, duration_s, rate_hz, rng, *, noise=0.0, jitter=0.0, stamp_noise_s=0.0,
    drop=0.0, gap_every_s=None,
):
    """
    Return stamps (ns) and noisy samples of a motion as a sensor would deliver them.

    `jitter` is the true irregularity as a share of the period; `stamp_noise_s` falsifies the
    stamps; `drop` is the share of lost samples; a gap of 0.3 s comes every `gap_every_s`.
    """
    count = int(duration_s * rate_hz)
    times = (np.arange(count) + rng.random()) / rate_hz
    times = times + jitter / rate_hz * rng.uniform(-0.5, 0.5, count)
    values = position(times)
    values = values + noise * rng.normal(size=values.shape)
    stamps = np.rint((times + stamp_noise_s * rng.normal(size=count)) * 1e9).astype(np.int64)
    keep = rng.random(count) >= drop
    if gap_every_s is not None:
        keep &= (times + rng.random() * gap_every_s) % gap_every_s >= 0.3
    stamps, values = stamps[keep], values[keep]
    order = np.argsort(stamps, kind='stable')
    stamps, values = stamps[order], values[order]
    distinct = np.concatenate([[True], np.diff(stamps) > 0])
    return stamps[distinct], values[distinct]


def grid_velocity(stamps_ns, values, duration_s, grid_hz):
    """Return velocity (n, d) and validity (n,) of a stream on the grid."""
    period = int(round(1e9 / grid_hz))
    cells = cell_average(
        stamps_ns, values, 0, int(duration_s * grid_hz), period_ns=period,
        max_gap_ns=default_max_gap_ns(stamps_ns),
    )
    velocity = edge_velocity(cells, period_ns=period)
    return velocity.values, velocity.valid


def position_noise_for(snr, band_hz, velocity_rms, stream_hz, width=3):
    """
    Return the deviation of white position noise that gives a velocity SNR within a band.

    White noise of deviation s at rate F has the one-sided density 2 s^2 / F; differentiated
    and integrated over the band: 2 s^2 / F (2 pi)^2 (f2^3 - f1^3) / 3 per axis.
    """
    low, high = band_hz
    per_unit = 2.0 / stream_hz * (2.0 * np.pi) ** 2 * (high**3 - low**3) / 3.0
    return float(np.sqrt(velocity_rms**2 / width / snr / per_unit))


def delay_bound(frequency_hz, snr_1, snr_2, duration_s, width=3):
    """
    Return the Cramer-Rao bound on the deviation of a delay estimate in seconds.

    1 / var = 2 T integral (2 pi f)^2 C / (1 - C) df, C the coherence, here from the ratios of
    signal to noise density of both channels (inf = no noise): C / (1 - C) = 1 / (1 / r1 +
    1 / r2 + 1 / (r1 r2)). Knapp & Carter 1976, IEEE Trans. ASSP 24:320-327.
    """
    with np.errstate(divide='ignore'):
        inverse_1, inverse_2 = 1.0 / np.asarray(snr_1), 1.0 / np.asarray(snr_2)
    ratio = 1.0 / (inverse_1 + inverse_2 + inverse_1 * inverse_2)
    weight = (2.0 * np.pi * frequency_hz) ** 2 * ratio
    return float((2.0 * duration_s * width * trapezoid(weight, frequency_hz)) ** -0.5)
