# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Batch means and the interval of the median: published values, closed forms, coverage."""

import math

import numpy as np
import pytest
from scipy import signal, stats

from teleop_eval.core.blocks import BatchMeans, median_ci, median_error, median_ranks


def batches(values, weights=None, max_batches=64):
    means = BatchMeans(max_batches)
    weights = np.ones(len(values)) if weights is None else weights
    for value, weight in zip(values, weights, strict=True):
        means.add(value * weight, weight)
    return means


def test_mean_and_number_of_blocks_survive_any_amount_of_joining():
    values = np.random.default_rng(1).normal(3.0, 1.0, 5003)
    means = batches(values)
    assert means.n_blocks == 5003
    assert means.mean == pytest.approx(values.mean(), rel=1e-12)
    assert len(means._rows) <= 64


def test_independent_blocks_give_students_interval():
    # Alternating blocks have no positive correlation, so nothing is joined or inflated: the
    # textbook interval from scipy.stats is the outside reference.
    values = np.tile([1.0, 2.0], 15) + np.linspace(0.0, 1e-3, 30)
    low, high = batches(values).ci95()
    expected = stats.t.interval(0.95, 29, values.mean(), stats.sem(values))
    assert (low, high) == pytest.approx(expected, rel=1e-12)


def test_unequal_weights_give_the_ratio_estimator():
    # Closed form for two kinds of blocks, weights 1 and 3, m = (10*1*2 + 10*3*4) / 40 = 3.5:
    # residuals 1*(2 - 3.5) = -1.5 and 3*(4 - 3.5) = 1.5, all of square 2.25.
    means = batches(np.tile([2.0, 4.0], 10), np.tile([1.0, 3.0], 10))
    assert means.mean == 3.5
    half = stats.t.ppf(0.975, 19) * math.sqrt(20 / 19 * 20 * 2.25) / 40.0
    assert means.ci95() == pytest.approx((3.5 - half, 3.5 + half), rel=1e-12)


def lag_one(values):
    residual = values - values.mean()
    return np.sum(residual[1:] * residual[:-1]) / np.sum(residual**2)


def test_correlated_neighbours_are_joined():
    # Each value twice: the blocks correlate, the values do not, and the interval is Student's
    # over the values once.
    once = np.tile([1.0, 2.0, 2.0, 0.5, 1.5, 0.0], 4)
    assert lag_one(np.repeat(once, 2)) > 0.3 and lag_one(once) < -1 / 24
    expected = stats.t.interval(0.95, 23, once.mean(), stats.sem(once))
    assert batches(np.repeat(once, 2)).ci95() == pytest.approx(expected, rel=1e-9)


def test_what_correlation_is_left_widens_the_interval():
    # The stated rule by hand, for 30 blocks with a lag-1 correlation between 0 and 0.3.
    values = signal.lfilter([1.0], [1.0, -0.25], np.random.default_rng(12).normal(size=30))
    lag1 = lag_one(values)
    assert 0.05 < lag1 < 0.3
    factor = (1 + lag1 + 1 / 30) / (1 - lag1 - 1 / 30)
    half = stats.t.ppf(0.975, 29 / factor) * stats.sem(values) * math.sqrt(factor)
    expected = values.mean() - half, values.mean() + half
    assert batches(values).ci95() == pytest.approx(expected, rel=1e-12)


def test_a_batch_less_than_half_full_joins_its_neighbour():
    # 129 blocks end as 32 batches of four, and one block that says little on its own. Blocks in
    # fours of alternating sign leave no positive correlation.
    values = np.append(np.repeat(np.tile([1.0, -1.0], 16), 4), 0.5) + 3.0
    ends = np.append(np.arange(0, 124, 4), 124)
    sums = np.add.reduceat(values, ends)
    sizes = np.diff(np.append(ends, 129))
    residual = sums - values.mean() * sizes
    half = stats.t.ppf(0.975, 31) * math.sqrt(32 / 31 * np.sum(residual**2)) / 129
    expected = values.mean() - half, values.mean() + half
    assert batches(values).ci95() == pytest.approx(expected, rel=1e-12)


def test_weights_scale_out():
    rng = np.random.default_rng(4)
    values, weights = rng.normal(size=200), rng.uniform(0.5, 2.0, 200)
    assert batches(values, weights).ci95() == pytest.approx(batches(values, 7 * weights).ci95())


def test_fewer_than_twenty_blocks_have_no_interval():
    means = batches(np.arange(19.0))
    assert means.ci95() is None and means.root_mean_ci() is None
    means.add(19.0)
    assert means.ci95() is not None
    assert math.isnan(BatchMeans().mean)


def test_blocks_without_weight_or_number_do_not_count():
    means = batches(np.arange(20.0))
    before = means.ci95()
    means.add(0.0, 0.0)
    means.add(math.nan, 1.0)
    assert (means.n_blocks, means.n_skipped) == (20, 1)
    assert means.ci95() == before
    with pytest.raises(ValueError, match='negative, got -1.0'):
        means.add(1.0, -1.0)
    with pytest.raises(ValueError, match='even and at least 40, got 41'):
        BatchMeans(41)


@pytest.mark.parametrize('value', [0.0, 1.0, 2.5, 0.1])
def test_blocks_that_are_all_alike_tell_no_interval(value):
    weights = np.random.default_rng(3).uniform(0.5, 2.0, 50)
    for means in (batches(np.full(50, value)), batches(np.full(50, value), weights)):
        assert means.mean == pytest.approx(value, rel=1e-12)
        assert means.ci95() is None and means.root_mean_ci() is None
        assert 'all blocks are alike' in means.caveat
        # One that differs is a spread.
        means.add(2.0 + value)
        assert means.ci95() is not None and means.caveat == ''
    assert batches(np.full(19, value)).caveat == ''


def test_root_mean_interval_is_the_root_of_both_ends():
    means = batches(np.random.default_rng(6).exponential(1.0, 40))
    low, high = means.ci95()
    assert means.root_mean_ci() == pytest.approx((math.sqrt(low), math.sqrt(high)))
    rare = batches(np.concatenate([np.zeros(39), [100.0]]))
    assert rare.ci95()[0] < 0.0 and rare.root_mean_ci()[0] == 0.0


def autoregressive_windows(tau, minutes, runs, rng):
    """Return windows of 2 s at 10 Hz of unit-variance AR(1) runs, (runs, windows, 20)."""
    n = int(minutes * 600)
    phi = math.exp(-0.1 / tau)
    noise = rng.standard_normal((runs, n)) * math.sqrt(1.0 - phi**2)
    noise[:, 0] = rng.standard_normal(runs)
    return signal.lfilter([1.0], [1.0, -phi], noise, axis=1).reshape(runs, -1, 20)


@pytest.mark.parametrize('minutes', [2, 5, 10])
@pytest.mark.parametrize('tau', [0.2, 1.0, 3.0])
def test_coverage_under_correlation_is_near_the_nominal(tau, minutes):
    # 1000 runs: the standard error of 95 % is 0.7 %. True mean 0, true mean square 1.
    rng = np.random.default_rng([20, minutes, round(10 * tau)])
    hits_mean = hits_rms = 0
    for run in autoregressive_windows(tau, minutes, 1000, rng):
        low, high = batches(run.mean(axis=1)).ci95()
        hits_mean += low <= 0.0 <= high
        low, high = batches((run**2).mean(axis=1)).root_mean_ci()
        hits_rms += low <= 1.0 <= high
    assert 0.90 <= hits_mean / 1000 <= 0.98
    # Squares are skewed: their short runs stay below the nominal (89.8 % of 3000 runs at
    # 2 minutes and 3 s).
    assert 0.88 <= hits_rms / 1000 <= 0.98


def test_treating_correlated_blocks_as_independent_would_fail():
    windows = autoregressive_windows(3.0, 2, 400, np.random.default_rng(20))
    plain = guarded = 0
    for run in windows:
        values = run.mean(axis=1)
        half = stats.t.ppf(0.975, values.size - 1) * stats.sem(values)
        plain += abs(values.mean()) <= half
        low, high = batches(values).ci95()
        guarded += low <= 0.0 <= high
    assert plain / 400 < 0.80 < 0.90 <= guarded / 400


@pytest.mark.parametrize(('n', 'ranks', 'level'), [
    # Table A.7 'Confidence intervals for the population median' of a statistics textbook,
    # seen second-hand on a public course page: x(k), x(n+1-k) with their level in per cent.
    (6, (1, 6), 96.9), (8, (1, 8), 99.2), (9, (2, 8), 96.1), (12, (3, 10), 96.1),
    (15, (4, 12), 96.5), (17, (5, 13), 95.1), (18, (5, 14), 96.9), (19, (5, 15), 98.1),
    (20, (6, 15), 95.9),
])
def test_ranks_equal_the_published_table(n, ranks, level):
    assert median_ranks(n) == ranks
    inside = stats.binom.cdf(n - ranks[0], n, 0.5) - stats.binom.cdf(ranks[0] - 1, n, 0.5)
    assert 100.0 * inside == pytest.approx(level, abs=0.051)


def test_ranks_are_the_narrowest_that_hold_the_level():
    for n in (*range(6, 400), 1000, 20001, 1000000):
        k = median_ranks(n)[0]
        assert 1.0 - 2.0 * stats.binom.cdf(k - 1, n, 0.5) >= 0.95, n
        assert 1.0 - 2.0 * stats.binom.cdf(k, n, 0.5) < 0.95, n


def test_too_few_values_have_no_interval():
    assert [median_ranks(n) for n in range(6)] == [None] * 6
    assert median_ci(np.arange(19.0)) is None
    assert median_ci(np.array([])) is None
    assert median_ci(np.append(np.arange(19.0), np.nan)) is None
    assert median_ci(np.arange(20.0)[::-1]) == (5.0, 14.0)


def test_median_of_values_all_alike_has_no_interval():
    assert median_ci(np.full(30, 0.1)) is None and median_error(np.full(30, 0.1)) is None
    assert median_error(np.arange(19.0)) is None


@pytest.mark.parametrize('n', [20, 60, 400])
def test_error_of_the_median_is_its_spread_over_repetitions(n):
    """Normal values: also sqrt(pi / 2) / sqrt(n), the asymptotic closed form, within 10 %."""
    rng = np.random.default_rng(11)
    runs = rng.normal(0.0, 3.0, (1500, n))
    spread = np.std(np.median(runs, axis=1))
    told = np.sqrt(np.mean([median_error(run) ** 2 for run in runs]))
    assert told == pytest.approx(spread, rel=0.12)
    assert told == pytest.approx(3.0 * math.sqrt(math.pi / 2.0 / n), rel=0.1)


def test_median_interval_covers_at_its_exact_level():
    # Lognormal, true median 1; n = 20 covers 95.86 %, standard error 0.45 % over 2000 runs.
    rng = np.random.default_rng(8)
    hits = 0
    for _ in range(2000):
        low, high = median_ci(rng.lognormal(0.0, 1.0, 20))
        hits += low <= 1.0 <= high
    assert hits / 2000 == pytest.approx(0.9586, abs=0.0135)
