# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Streaming percentiles against numpy's exact ones and closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from teleop_eval.core.histogram import LinearHistogram, StreamingHistogram

LEVELS = (0.0, 1.0, 5.0, 25.0, 50.0, 75.0, 95.0, 99.0, 99.9, 100.0)


def filled(values, chunk=37):
    histogram = StreamingHistogram()
    for start in range(0, len(values), chunk):
        histogram.add(values[start:start + chunk])
    return histogram


@pytest.mark.parametrize('draw', [
    lambda r: r.lognormal(-3.0, 1.5, 20000),
    lambda r: r.uniform(0.0, 2.0, 5000),
    lambda r: np.abs(r.standard_normal(8001)) * 1e-3,
    lambda r: np.concatenate([np.full(500, 0.1), np.full(501, 7.0)]),
    lambda r: r.exponential(0.05, 12),
])
def test_percentiles_agree_with_numpy_within_a_thousandth(draw):
    values = draw(np.random.default_rng(3))
    histogram = filled(values)
    for p in LEVELS:
        # numpy.percentile, method 'linear', is the outside reference.
        assert histogram.percentile(p) == pytest.approx(np.percentile(values, p), rel=1e-3)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.floats(1e-5, 900.0), min_size=1, max_size=60), st.floats(0.0, 100.0))
def test_any_sample_and_level_agree_with_numpy(values, p):
    expected = np.percentile(values, p)
    assert filled(np.array(values)).percentile(p) == pytest.approx(expected, rel=1e-3)


@settings(max_examples=40, deadline=None)
@given(st.floats(1e-5, 900.0))
def test_a_value_alone_in_its_bin_is_known_to_half_a_bin(value):
    histogram = filled(np.array([1e-6, value, 999.0]))
    assert histogram.percentile(50.0) == pytest.approx(value, rel=5.01e-4)


def test_moments_and_extremes_are_exact():
    values = np.random.default_rng(5).lognormal(0.0, 2.0, 3000)
    histogram = filled(values)
    assert histogram.count == 3000
    assert histogram.min == values.min() and histogram.max == values.max()
    assert histogram.sum == pytest.approx(math.fsum(values), rel=1e-13)
    assert histogram.sum_of_squares == pytest.approx(math.fsum(values**2), rel=1e-13)
    assert histogram.rms == pytest.approx(np.sqrt(np.mean(values**2)), rel=1e-12)
    assert histogram.mean == pytest.approx(values.mean(), rel=1e-12)


def test_median_of_minimum_jerk_speed_has_its_closed_form():
    # Speed 1.875 * 16 tau^2 (1 - tau)^2 (Flash & Hogan 1985) rises to tau = 1/2 and falls
    # symmetrically, so half of the samples lie below its value at tau = 1/4: 1.0546875.
    tau = np.linspace(0.0, 1.0, 100001)
    histogram = filled(30.0 * tau**2 * (1.0 - tau)**2, chunk=1000)
    assert histogram.percentile(50.0) == pytest.approx(1.0546875, rel=1e-3)
    assert histogram.max == pytest.approx(1.875, rel=1e-12)


def test_values_beyond_the_range_keep_the_exact_extremes():
    histogram = filled(np.array([0.0, 0.0, 1e-9, 2.0, 5e3, 8e5]))
    assert histogram.min == 0.0 and histogram.max == 8e5
    assert histogram.percentile(100.0) == 8e5
    assert histogram.percentile(0.0) == 0.0
    assert 0.0 <= histogram.percentile(30.0) < 1e-6
    assert histogram.percentile(60.0) == pytest.approx(2.0, rel=1e-3)
    assert 1e3 <= histogram.percentile(80.0) <= 8e5


def test_all_zeros_and_one_value():
    assert filled(np.zeros(9)).percentile(50.0) == 0.0
    assert filled(np.array([0.37])).percentile(95.0) == 0.37


def test_empty_gives_nan_and_no_data_is_skipped_with_a_count():
    histogram = StreamingHistogram()
    histogram.add(np.array([]))
    assert all(map(math.isnan, (
        histogram.percentile(50.0), histogram.min, histogram.max, histogram.mean, histogram.rms)))
    histogram.add(np.array([np.nan, np.inf, 1.0]))
    assert (histogram.count, histogram.skipped) == (1, 2)
    assert histogram.max == 1.0


def test_merged_parts_equal_the_whole():
    values = np.random.default_rng(7).lognormal(-1.0, 2.0, 4000)
    first, second, whole = filled(values[:1500]), filled(values[1500:]), filled(values)
    first.merge(second)
    assert [first.percentile(p) for p in LEVELS] == [whole.percentile(p) for p in LEVELS]
    assert first.count == whole.count
    assert first.sum == pytest.approx(whole.sum, rel=1e-13)
    empty = StreamingHistogram()
    empty.merge(whole)
    assert empty.percentile(42.0) == whole.percentile(42.0)


def test_memory_is_bounded_by_the_range():
    histogram = filled(10.0 ** np.random.default_rng(0).uniform(-12.0, 12.0, 100000), 5000)
    assert histogram._counts.values.nbytes < 170e3 + 2 * 8 * 256
    linear = LinearHistogram(-1.0, 1.0)
    linear.add(np.array([-1e12, 0.0, 1e12]))
    assert linear._counts.values.nbytes < 8 * (21 * 1000 + 2 * 256 + 2)
    assert linear.min == -1e12 and linear.max == 1e12
    assert linear.percentile(50.0) == pytest.approx(0.0, abs=2e-3)


def test_misuse_is_refused():
    with pytest.raises(ValueError, match='cannot be negative, got -0.5'):
        StreamingHistogram().add(np.array([1.0, -0.5]))
    with pytest.raises(ValueError, match='between 0 and 100, got 101'):
        StreamingHistogram().percentile(101.0)
    with pytest.raises(ValueError, match='same floor'):
        StreamingHistogram().merge(StreamingHistogram(floor=1e-3))
    with pytest.raises(ValueError, match='low < high'):
        LinearHistogram(1.0, 1.0)
    with pytest.raises(ValueError, match='same range'):
        LinearHistogram(0.0, 1.0).merge(LinearHistogram(0.0, 2.0))
    with pytest.raises(ValueError, match='periodic'):
        LinearHistogram(0.0, 1.0).shortest_arc()


def test_joint_percentiles_agree_with_numpy_to_a_thousandth_of_the_span():
    rng = np.random.default_rng(11)
    # Beyond the limits on both sides as well: the bins go on.
    values = rng.normal(0.4, 1.2, 20000)
    histogram = LinearHistogram(-1.0, 2.0)
    for part in np.array_split(values, 50):
        histogram.add(part)
    for p in LEVELS:
        assert histogram.percentile(p) == pytest.approx(np.percentile(values, p), abs=3e-3)
    assert histogram.min == values.min()


def test_span_of_a_sine_has_its_closed_form():
    # The p-th percentile of a sine over whole periods is sin(pi (p - 1/2)): arcsine law.
    phase = (np.arange(40000) + 0.5) / 40000 * 2.0 * np.pi
    histogram = LinearHistogram(-2.0, 2.0)
    histogram.add(np.sin(phase))
    span = histogram.percentile(95.0) - histogram.percentile(5.0)
    assert span == pytest.approx(2.0 * math.sin(0.45 * math.pi), abs=4e-3)


def test_wrapped_and_unwrapped_turns_give_the_same_counts():
    turns = np.linspace(-3.0, 17.0, 5000)
    unwrapped = LinearHistogram(-np.pi, np.pi, periodic=True)
    wrapped = LinearHistogram(-np.pi, np.pi, periodic=True)
    unwrapped.add(turns)
    wrapped.add(np.arctan2(np.sin(turns), np.cos(turns)))
    assert unwrapped.percentile(50.0) == pytest.approx(wrapped.percentile(50.0), abs=1e-2)
    assert unwrapped.shortest_arc(1.0) == pytest.approx(2.0 * np.pi, rel=1e-9)


def test_shortest_arc_spans_the_seam():
    histogram = LinearHistogram(-np.pi, np.pi, periodic=True)
    # One radian about the seam at +-pi: percentiles on the line would call it a whole turn.
    histogram.add(np.linspace(np.pi - 0.5, np.pi + 0.5, 20001))
    assert histogram.shortest_arc(1.0) == pytest.approx(1.0, abs=3 * 2 * np.pi / 1000)
    assert histogram.shortest_arc(0.9) == pytest.approx(0.9, abs=3 * 2 * np.pi / 1000)
    assert histogram.percentile(95.0) - histogram.percentile(5.0) > 5.0
    assert math.isnan(LinearHistogram(0.0, 1.0, periodic=True).shortest_arc())
