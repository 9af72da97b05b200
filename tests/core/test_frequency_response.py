# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Segments, spectra and coherence of two motions; scipy.signal is the outside reference."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from teleop_eval.core.cross_spectra import SegmentTransform, SpectraBatches, null_level
from teleop_eval.core.frequency_response import FrequencyResponse
from teleop_eval.core.segment_buffer import SegmentBuffer

RATE = 50.0


def motion(cells, seed=0, dimensions=3):
    """Return a random walk and one that follows it with a lag and noise of its own."""
    rng = np.random.default_rng(seed)
    x = np.cumsum(rng.standard_normal((cells, dimensions)), axis=0)
    y = signal.lfilter([0.3], [1.0, -0.7], x, axis=0) + rng.standard_normal(x.shape)
    return x, y


def measured(x, y, *, valid=None, run=None, shift=0, chunk=None):
    found = FrequencyResponse(RATE)
    valid = np.ones(len(x), dtype=bool) if valid is None else valid
    run = np.zeros(len(x), dtype=np.int64) if run is None else run
    chunk = len(x) if chunk is None else chunk
    for start in range(0, len(x), chunk):
        part = slice(start, start + chunk)
        found.add(x[part], y[part], valid[part], run[part], shift_cells=shift)
    return found


def of_scipy(x, y):
    """Return Welch's spectra of the differences, and the coherence, from scipy."""
    dx, dy = np.diff(x, axis=0), np.diff(y, axis=0)
    given = {'fs': RATE, 'window': 'hann', 'nperseg': 200, 'noverlap': 100, 'detrend': False,
             'axis': 0}
    hz, xy = signal.csd(dx, dy, **given)
    xx, yy = signal.welch(dx, **given)[1], signal.welch(dy, **given)[1]
    # scipy doubles all but the first and the last: the same on top and bottom of a ratio.
    for one in (xy, xx, yy):
        one[0] *= 2.0
    return hz, xy, xx, yy


def sharpened(spectrum):
    return 4.0 / 3.0 * spectrum[1:-1] - (spectrum[:-2] + spectrum[2:]) / 6.0


def test_one_dimension_without_gaps_equals_scipy():
    x, y = motion(200 * 12 + 1, dimensions=1)
    result = measured(x, y).result()
    hz, xy, xx, yy = of_scipy(x, y)
    kept = slice(0, len(result.frequencies_hz))
    np.testing.assert_allclose(result.frequencies_hz, hz[1:][kept], rtol=1e-12)
    coherence = signal.coherence(
        np.diff(x[:, 0]), np.diff(y[:, 0]), fs=RATE, nperseg=200, noverlap=100, detrend=False)[1]
    np.testing.assert_allclose(result.coherence, coherence[1:][kept], rtol=1e-9)
    xy, xx, yy = (sharpened(one[:, 0])[kept] for one in (xy, xx, yy))
    np.testing.assert_allclose(result.gain_h1, np.abs(xy) / xx, rtol=1e-9)
    np.testing.assert_allclose(result.gain_h2, yy / np.abs(xy), rtol=1e-9)
    assert result.segments_overlapping == 23 and result.segments == 12
    np.testing.assert_allclose(np.exp(1j * result.phase_rad), xy / np.abs(xy), atol=1e-9)


def test_three_dimensions_are_summed_and_the_shift_is_put_back():
    x, y = motion(200 * 12 + 8)
    result = measured(x, y, shift=7).result()
    _, xy, xx, yy = (one if one.ndim == 1 else one.sum(axis=1) for one in of_scipy(x[:-7], y[7:]))
    kept = slice(0, 60)
    np.testing.assert_allclose(
        result.coherence, (np.abs(xy) ** 2 / xx / yy)[1:][kept], rtol=1e-9)
    expected = sharpened(xy)[kept] * np.exp(-2j * np.pi * result.frequencies_hz * 7 / RATE)
    np.testing.assert_allclose(
        np.exp(1j * result.phase_rad), expected / np.abs(expected), atol=1e-9)
    assert result.mean_shift_s == pytest.approx(0.14)


@pytest.mark.parametrize('chunk', [1, 7, 100, 333])
def test_windows_and_the_whole_give_the_same_bits(chunk):
    x, y = motion(3000)
    valid = np.ones(3000, dtype=bool)
    valid[[1200, 1999]] = False
    run = np.repeat([0, 1, 2], 1000)
    whole = measured(x, y, valid=valid, run=run, shift=5)
    parts = measured(x, y, valid=valid, run=run, shift=5, chunk=chunk)
    assert np.array_equal(whole.total.sums, parts.total.sums)
    assert all(np.array_equal(a.sums, b.sums)
               for a, b in zip(whole.left_out(), parts.left_out(), strict=True))
    assert whole.result().segments == parts.result().segments > 5


@pytest.mark.parametrize('kind', ['run', 'invalid', 'nan'])
@pytest.mark.parametrize('chunk', [None, 90])
def test_no_segment_spans_a_boundary(kind, chunk):
    # A step of the response at each boundary: one segment across it would show a power many
    # orders above that of the rest, in which both are equal.
    x, _ = motion(3000)
    edges = [620, 1330, 2100]
    y = x.copy()
    for edge in edges:
        y[edge:] += 1e6
    valid, run = np.ones(3000, dtype=bool), np.zeros(3000, dtype=np.int64)
    for edge in edges:
        if kind == 'run':
            run[edge:] += 1
        else:
            valid[edge - 1] = kind == 'nan'
            if kind == 'nan':
                y[edge - 1, 1] = np.nan
    found = measured(x, y, valid=valid, run=run, chunk=chunk).result()
    # Adding 1e6 costs digits: equal to about 1e6 x 2^-52 of a step of 1.
    np.testing.assert_allclose(found.gain_h1, 1.0, rtol=1e-6)
    np.testing.assert_allclose(found.coherence, 1.0, rtol=1e-6)
    whole = measured(x, y, chunk=chunk).result() if kind == 'run' else None
    assert whole is None or np.max(np.abs(whole.gain_h1 - 1.0)) > 10.0


def test_the_shifted_response_does_not_reach_over_a_boundary():
    # 201 cells are a segment; with a shift of 30 the run must hold 231.
    x, y = motion(460)
    run = np.repeat([0, 1], 230)
    assert measured(x, y, run=run, shift=30).result().segments == 0
    assert measured(x, y, run=run, shift=29).result().segments == 2


def test_segments_say_where_they_lie():
    cells = np.arange(60.0)[:, None]
    buffer = SegmentBuffer(11, 5)
    run = np.repeat([3, 4], 30)
    found = [one for start in range(0, 60, 4) for one in buffer.add(
        cells[start:start + 4], -cells[start:start + 4], np.ones(4, dtype=bool),
        run[start:start + 4], shift_cells=2)]
    assert [one.reference[0, 0] for one in found] == [0, 5, 10, 15, 30, 35, 40, 45]
    assert [one.response[-1, 0] for one in found] == [
        -12, -17, -22, -27, -42, -47, -52, -57]
    assert [one.index for one in found] == [0, 1, 2, 3] * 2


def test_restart_begins_a_new_stretch():
    x, y = motion(300)
    found = FrequencyResponse(RATE)
    for part in (slice(0, 150), slice(150, 300)):
        found.add(x[part], y[part], np.ones(150, dtype=bool), np.zeros(150, dtype=np.int64))
        found.restart()
    assert found.result().segments == 0
    assert measured(x, y).result().segments == 1


def test_memory_does_not_grow():
    found = FrequencyResponse(RATE)
    x, y = motion(20_000)
    ones, zeros = np.ones(100, dtype=bool), np.zeros(100, dtype=np.int64)
    sizes = []
    for _ in range(4):
        for start in range(0, 20_000, 100):
            part = slice(start, start + 100)
            found.add(x[part], y[part], ones, zeros, shift_cells=10)
        assert found._buffer.held_cells <= 201 + 10 + 100
        assert found._buffer._signals.base is None or (
            found._buffer._signals.base.shape[0] <= 2 * 311)
        sizes.append(len(found._batches._rows))
    assert max(sizes) <= 40
    assert found.result().segments == pytest.approx(80_000 / 200, abs=2)
    # Joining batches loses nothing: each segment is in all but one of the replicates.
    rows = found.left_out()
    total = sum(one.sums for one in rows) / (len(rows) - 1)
    np.testing.assert_allclose(total, found.total.sums, rtol=1e-9)


def test_null_level_against_the_published_table():
    # Table of the 99 % (and 95 %) significance levels, 1 - (1 - p)^(1 / (n - 1)): closed form
    # of Carter, Knapp and Nuttall 1973; for n = 10 and n = 2 by hand.
    assert null_level(np.array([10.0]))[0] == pytest.approx(1.0 - 0.01 ** (1.0 / 9.0))
    assert null_level(np.array([2.0, 1.0, 0.0])) == pytest.approx([0.99, 1.0, 1.0])
    assert null_level(np.array([10.0]), 0.05)[0] == pytest.approx(0.2831, abs=1e-4)


def false_alarms(make, runs=150):
    """Return the share of frequencies at which unrelated signals exceed the null level."""
    above = []
    for seed in range(runs):
        rng = np.random.default_rng([7, seed])
        result = measured(*make(rng)).result()
        above.append(result.coherence[4::4] > result.null_level[4::4])
        assert not np.any(result.coherent)
    return float(np.mean(above))


def walk(rng, dimensions, power=None):
    steps = rng.standard_normal((200 * 15 + 1, dimensions))
    return np.cumsum(steps if power is None else steps * power[:, None], axis=0)


def test_unrelated_motion_along_one_axis_exceeds_the_null_level_in_one_of_a_hundred():
    # 150 x 14 frequencies: 1 % +- 0.22 %; the overlap is accounted for approximately.
    share = false_alarms(lambda rng: (walk(rng, 1), walk(rng, 1)))
    assert 0.003 < share < 0.017


def test_unrelated_motion_that_starts_and_stops_together_is_not_coherent():
    # Both move in 3 of 15 segments: taken as 15, the level would be exceeded far too often.
    power = np.where((np.arange(200 * 15 + 1) // 200) % 5 == 0, 1.0, 0.02)

    def both(rng):
        return walk(rng, 1, power), walk(rng, 1, power)

    assert false_alarms(both) < 0.02
    naive = []
    for seed in range(50):
        result = measured(*both(np.random.default_rng([7, seed]))).result()
        naive.append(result.coherence[4::4] > null_level(np.full(14, 15.0)))
    assert np.mean(naive) > 0.1


def test_three_axes_are_on_the_safe_side():
    assert false_alarms(lambda rng: (walk(rng, 3), walk(rng, 3)), 60) < 0.005


def test_no_power_gives_no_gain_and_no_coherence():
    x, _ = motion(3000)
    result = measured(np.zeros_like(x), x).result()
    assert np.all(np.isnan(result.gain_h1)) and np.all(result.coherence == 0.0)
    assert result.band is None
    assert FrequencyResponse(RATE).result().segments == 0


def test_other_rates_keep_at_most_sixty_frequencies_below_the_limit():
    assert len(SegmentTransform(1000.0, 4.0).frequencies_hz) == 60
    assert SegmentTransform(10.0, 4.0).frequencies_hz[-1] == 4.0
    assert SegmentTransform(333.3, 4.0).frequencies_hz[0] == pytest.approx(0.25, rel=1e-2)


@pytest.mark.parametrize('change, text', [
    ({'response': np.zeros((10, 2))}, 'shape'),
    ({'valid': np.ones(9, dtype=bool)}, r'\(10,\)'),
    ({'shift_cells': -1}, 'negative'),
])
def test_shapes_that_do_not_fit_are_refused(change, text):
    given = {'reference': np.zeros((10, 3)), 'response': np.zeros((10, 3)),
             'valid': np.ones(10, dtype=bool), 'run': np.zeros(10, dtype=np.int64)} | change
    with pytest.raises(ValueError, match=text):
        FrequencyResponse(RATE).add(**given)


def test_settings_that_make_no_sense_are_refused():
    with pytest.raises(ValueError, match='rate_hz'):
        FrequencyResponse(0.0)
    with pytest.raises(ValueError, match='segment_s'):
        FrequencyResponse(50.0, segment_s=0.1)
    found = FrequencyResponse(50.0)
    found.add(np.zeros((5, 3)), np.zeros((5, 3)), np.ones(5, dtype=bool), np.zeros(5, dtype=int))
    with pytest.raises(ValueError, match='3 dimensions before, now 2'):
        found.add(np.zeros((5, 2)), np.zeros((5, 2)), np.ones(5, dtype=bool),
                  np.zeros(5, dtype=int))


def test_overlap_takes_a_little_of_the_effective_segments():
    batches = SpectraBatches(1)
    row = np.array([[1.0, 1.0, 1.0, 0.0, 1.0, 1.0, 1.0, 0.0, 1.0]])
    for index in range(19):
        batches.add(row, index)
    # 1 + 2 / 36 x 18 / 19 for Hann windows that overlap by half.
    assert batches.effective_segments()[0] == pytest.approx(19.0 / (1.0 + 18.0 / 18.0 / 19.0))


def test_joining_batches_loses_no_segment():
    batches = SpectraBatches(1)
    row = np.ones((1, 9))
    for index in range(4001):
        batches.add(row, index)
        if index % 400 == 399:
            assert batches.total.sums[0, 0] == index + 1 == batches.segments
    sizes = [4001.0 - one.sums[0, 0] for one in batches.left_out()]
    assert 20 <= len(sizes) <= 40 and sum(sizes) == 4001.0
    # All as long as each other but the last.
    assert len(set(sizes[:-1])) == 1 and 0.5 * sizes[0] <= sizes[-1] <= 1.5 * sizes[0]


def test_what_chance_reaches_with_few_segments_is_not_coherent():
    """
    Unrelated motions, two segments that do not overlap: chance alone exceeds 0.8 often.

    P(coherence > c) = (1 - c)^(n - 1) for n independent segments: 20 % at c = 0.8 and n = 2,
    and 1 % at the null level, which then mostly lies above 0.8.
    """
    by_chance = 0
    for seed in range(5):
        x, _ = motion(402, seed, dimensions=1)
        y, _ = motion(402, seed + 100, dimensions=1)
        result = measured(x, y).result()
        assert np.median(result.null_level) > 0.8 and result.segments == 2
        chance = (result.coherence > 0.8) & (result.coherence <= result.null_level)
        by_chance += int(np.count_nonzero(chance))
        assert not result.coherent[chance].any()
        np.testing.assert_array_equal(
            result.coherent, (result.coherence > np.maximum(0.8, result.null_level))
            & (result.gain_h1 > 0.0) & (result.gain_h2 > 0.0))
    assert by_chance > 5
