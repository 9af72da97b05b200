# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""The interval of a median: published ranks, interpolation by hand, coverage, correlation."""

import math

import numpy as np
import pytest
from scipy import signal, stats

from teleop_eval.core.medians import TOO_SLOW, median_ci, median_error, median_ranks, why_none

# 0 to 19 in an order in which high and low alternate: no positive correlation.
SCATTERED = np.stack([np.arange(10.0), np.arange(19.0, 9.0, -1.0)], axis=1).ravel()


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
    assert median_ci(SCATTERED) is not None


def test_median_of_values_all_alike_has_no_interval():
    assert median_ci(np.full(30, 0.1)) is None and median_error(np.full(30, 0.1)) is None
    assert median_error(np.arange(19.0)) is None


def test_interpolated_ends_by_hand():
    # n = 20: ranks 6 and 15 hold 95.86 %, 7 and 14 hold 88.47 %. Hettmansperger and Sheather:
    # I = 0.86 / 7.39, share = 14 I / (6 + 8 I) of the way from the 6th (5.0) to the 7th (6.0).
    levels = [1.0 - 2.0 * stats.binom.cdf(k - 1, 20, 0.5) for k in (6, 7)]
    assert levels == pytest.approx([0.9586, 0.8847], abs=5e-5)
    part = (levels[0] - 0.95) / (levels[0] - levels[1])
    share = 14.0 * part / (6.0 + 8.0 * part)
    assert median_ci(SCATTERED) == pytest.approx((5.0 + share, 14.0 - share), rel=1e-12)


@pytest.mark.parametrize('n', [20, 22, 60, 400])
def test_error_of_the_median_is_its_spread_over_repetitions(n):
    """Normal values: also sqrt(pi / 2) / sqrt(n), the asymptotic closed form."""
    rng = np.random.default_rng(11)
    runs = rng.normal(0.0, 3.0, (1500, n))
    spread = np.std(np.median(runs, axis=1))
    told = np.sqrt(np.mean([error ** 2 for run in runs
                            if (error := median_error(run)) is not None]))
    # With few values the correlation they might have makes it larger, never smaller.
    tolerance = 0.2 if n < 60 else 0.08
    assert told == pytest.approx(spread, rel=tolerance)
    assert told == pytest.approx(3.0 * math.sqrt(math.pi / 2.0 / n), rel=tolerance)


def share_covered(runs, truth):
    """Return the share of runs with an interval and, of these, with the truth in it."""
    found = [one for run in runs if (one := median_ci(run)) is not None]
    return len(found) / len(runs), np.mean([low <= truth <= high for low, high in found])


@pytest.mark.parametrize('n', [20, 22, 60])
def test_median_interval_covers_at_its_level_whatever_the_distribution(n):
    # True medians 1, log 2 and 0. The exact pair of ranks covers 95.9, 98.3 and 97.3 %.
    rng = np.random.default_rng([8, n])
    for runs, truth in ((rng.lognormal(0.0, 1.0, (2000, n)), 1.0),
                        (rng.exponential(1.0, (2000, n)), math.log(2.0)),
                        (rng.standard_cauchy((2000, n)), 0.0)):
        given, covered = share_covered(runs, truth)
        assert given > 0.92
        assert 0.94 <= covered <= 0.98


def wandering(n, lag1, runs, rng):
    noise = rng.standard_normal((runs, n + 100))
    return signal.lfilter([1.0], [1.0, -lag1], noise, axis=1)[:, 100:]


@pytest.mark.parametrize('n, lag1, independent', [
    (20, 0.3, 0.92), (30, 0.4, 0.89), (60, 0.6, 0.8), (180, 0.8, 0.65)])
def test_values_that_wander_widen_the_interval(n, lag1, independent):
    runs = wandering(n, lag1, 1000, np.random.default_rng([9, n]))
    given, covered = share_covered(runs, 0.0)
    assert given > 0.75 and 0.90 <= covered <= 0.98
    # Taken as independent, as in any other order, they would not do.
    shuffled = np.random.default_rng(1).permuted(runs, axis=1)
    assert share_covered(shuffled, 0.0)[1] < independent


def test_values_that_hardly_wander_back_have_no_interval():
    drift = np.linspace(0.0, 1.0, 30)
    assert median_ci(drift) is None and median_error(drift) is None
    assert why_none(drift) == TOO_SLOW and 'too slowly' in TOO_SLOW
    assert why_none(SCATTERED) == why_none(np.full(30, 0.1)) == why_none(drift[:19]) == ''
    assert why_none(np.array([])) == ''
