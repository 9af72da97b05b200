# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Intervals from blocks: closed forms, the jackknife by hand, coverage."""

import math

import numpy as np
import pytest
from scipy import signal, stats

from teleop_eval.core.blocks import ALIKE, TOO_SHORT, BatchMeans


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


def test_unequal_weights_give_the_jackknife_of_the_ratio():
    # By hand for two kinds of blocks, weights 1 and 3, m = (10*1*2 + 10*3*4) / 40 = 3.5: without
    # one of the first kind it is 138/39, without one of the second 128/37.
    means = batches(np.tile([2.0, 4.0], 10), np.tile([1.0, 3.0], 10))
    assert means.mean == 3.5
    square = 10 * (138 / 39 - 3.5) ** 2 + 10 * (128 / 37 - 3.5) ** 2
    half = stats.t.ppf(0.975, 19) * math.sqrt(19 / 20 * square)
    assert means.ci95() == pytest.approx((3.5 - half, 3.5 + half), rel=1e-12)


def test_jackknife_is_leaving_out_block_after_block():
    rng = np.random.default_rng(5)
    weights = rng.uniform(0.5, 5.0, 30)
    values = np.where(np.arange(30) % 2, 2.0, 1.0) + rng.normal(0.0, 0.02, 30)
    sums, keep = values * weights, ~np.eye(30, dtype=bool)
    without = np.array([sums[one].sum() / weights[one].sum() for one in keep])
    mean = sums.sum() / weights.sum()
    half = stats.t.ppf(0.975, 29) * math.sqrt(29 / 30 * np.sum((without - mean) ** 2))
    assert batches(values, weights).ci95() == pytest.approx((mean - half, mean + half))


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
    freed = (30 * lag1 + 2) / 26
    factor = (1 + freed) / (1 - freed)
    half = stats.t.ppf(0.975, 29 / factor) * stats.sem(values) * math.sqrt(
        factor * 29 / (30 - factor))
    expected = values.mean() - half, values.mean() + half
    assert batches(values).ci95() == pytest.approx(expected, rel=1e-12)


def test_a_batch_less_than_half_full_joins_its_neighbour():
    # 129 blocks end as 32 batches of four, and one block that says little on its own. Blocks in
    # fours of alternating sign leave no positive correlation.
    values = np.append(np.repeat(np.tile([1.0, -1.0], 16), 4), 0.5) + 3.0
    ends = np.append(np.arange(0, 124, 4), 124)
    sums = np.add.reduceat(values, ends)
    sizes = np.diff(np.append(ends, 129))
    # The jackknife, each batch left out in turn.
    without = (values.sum() - sums) / (129 - sizes)
    half = stats.t.ppf(0.975, 31) * math.sqrt(
        31 / 32 * np.sum((without - values.mean()) ** 2))
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
        assert means.share_ci() is None and means.ci95(telescoping=True) is None
        assert means.why_none(None) == ALIKE and 'all blocks are alike' in ALIKE
        # One that differs is a spread.
        means.add(2.0 + value)
        assert means.why_none(means.ci95()) == ''
    assert batches(np.full(19, value)).why_none(None) == ''


def test_root_mean_interval_is_formed_on_the_log():
    # Half the relative half width of the mean square, on the log of its root.
    means = batches(np.random.default_rng(6).exponential(1.0, 40))
    half = means.ci95()[1] / means.mean - 1.0
    root = math.sqrt(means.mean)
    assert means.root_mean_ci() == pytest.approx(
        (root * math.exp(-half / 2), root * math.exp(half / 2)))
    # A single burst: Student's interval would end below 0.
    rare = batches(np.concatenate([np.zeros(39), [100.0]]))
    low, high = rare.root_mean_ci()
    assert rare.ci95()[0] < 0.0 < low < math.sqrt(2.5) < high


def test_an_rms_known_to_no_better_than_a_factor_of_ten_has_no_interval():
    # Nothing for half the run, then a rise: neighbours depend on each other over all of it.
    means = batches(np.concatenate([np.zeros(11), np.linspace(0.0, 3.0, 11) ** 3]))
    assert means.root_mean_ci() is None and means.why_none(None) == TOO_SHORT
    assert means.ci95() is not None


def test_wilsons_interval_of_a_share_for_independent_blocks():
    # 40 blocks of one sample, 16 hits, no positive correlation: the variance of the batches is
    # that of 39 independent samples, and Wilson's formula (written out as its quadratic's roots)
    # takes Student's quantile for 39 degrees of freedom.
    hits = np.tile([1.0, 0.0, 1.0, 0.0, 0.0], 8)
    z = stats.t.ppf(0.975, 39)
    roots = np.roots([1 + z**2 / 39, -(2 * 0.4 + z**2 / 39), 0.4**2])
    assert batches(hits).share_ci() == pytest.approx(sorted(roots), rel=1e-9)


def test_a_share_of_a_single_excursion_is_told_with_care():
    hits = np.zeros(100)
    hits[37] = 1.0
    low, high = batches(hits, max_batches=100).share_ci()
    assert 0.0 < low < 0.01
    # The exact binomial interval of 1 in 100 ends at 5.4 %; the variance too is from one event.
    assert high > stats.beta.ppf(0.975, 2, 99)
    assert batches(np.append(np.ones(39), 0.0)).share_ci()[1] < 1.0


def test_blocks_that_cancel_their_neighbours_have_a_narrower_interval():
    # Differences of independent ends: the mean of 60 is known far better than 60 blocks that
    # are independent would tell.
    ends = np.random.default_rng(7).normal(size=61)
    means = batches(np.diff(ends) + 5.0)
    assert lag_one(np.diff(ends)) < -0.3
    plain, telescoped = means.ci95(), means.ci95(telescoping=True)
    assert np.diff(telescoped) < 0.75 * np.diff(plain)
    low, high = telescoped
    assert low < 5.0 < high
    # Where neighbours do not cancel it is the same interval.
    values = signal.lfilter([1.0], [1.0, -0.25], np.random.default_rng(12).normal(size=30))
    assert batches(values).ci95(telescoping=True) == batches(values).ci95()


def test_coverage_of_blocks_that_telescope():
    # 1000 runs of a lag-1 correlation of -0.4: without regard to its sign the intervals are too
    # wide.
    noise = np.random.default_rng(9).normal(size=(1000, 160))
    runs = signal.lfilter([1.0], [1.0, 0.4], noise, axis=1)[:, 100:]
    hits = {True: 0, False: 0}
    for run in runs:
        means = batches(run)
        for telescoping in hits:
            low, high = means.ci95(telescoping=telescoping)
            hits[telescoping] += low <= 0.0 <= high
    assert hits[False] > 985
    assert 920 <= hits[True] <= 980


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
    # 1000 runs: the standard error of 95 % is 0.7 %. True mean 0, true mean square 1. Measured
    # with other seeds (3000 runs): 93 to 97 %.
    rng = np.random.default_rng([20, minutes, round(10 * tau)])
    hits_mean, hits_rms, given = 0, 0, 0
    for run in autoregressive_windows(tau, minutes, 1000, rng):
        low, high = batches(run.mean(axis=1)).ci95()
        hits_mean += low <= 0.0 <= high
        interval = batches((run**2).mean(axis=1)).root_mean_ci()
        if interval is not None:
            given += 1
            hits_rms += interval[0] <= 1.0 <= interval[1]
    assert 0.92 <= hits_mean / 1000 <= 0.98
    assert given >= 975 and 0.92 <= hits_rms / given <= 0.98


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
