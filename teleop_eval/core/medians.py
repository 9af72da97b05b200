# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The interval of a median that asks nothing of the distribution, under correlation.

References
----------
H. A. David, H. N. Nagaraja, "Order Statistics", 3rd ed., Wiley 2003, section 7.1:
distribution-free intervals of quantiles (citation from memory).

T. P. Hettmansperger, S. J. Sheather, "Confidence intervals based on interpolated order
statistics", Statistics & Probability Letters 4(2), 1986, 75-79 (citation from memory).

J. W. McKean, R. M. Schrader, "A comparison of methods for studentizing the sample median",
Communications in Statistics - Simulation and Computation 13(6), 1984, 751-773 (citation from
memory).

"""

from __future__ import annotations

import math

import numpy as np
from scipy.special import bdtr, ndtri, stdtrit  # far quicker to import than scipy.stats

from teleop_eval.core.blocks import MIN_BLOCKS

_LEVEL = 0.95
# Values that depend on each other count as fewer; with fewer than so many there is no interval.
_MIN_INDEPENDENT = 6.0
# Values correlated more than this tell nothing about how long the correlation lasts.
_LAG1_CAP = 0.9
# Terms summed of a correlation that dies out geometrically.
_LAGS = np.arange(1, 200)
TOO_SLOW = 'no interval: the values change too slowly for a run of this length'


def median_ranks(n: int) -> tuple[int, int] | None:
    """
    Return the one-based ranks of the sorted values that bound the median with 95 %.

    The narrowest symmetric pair (k, n + 1 - k) whose exact binomial coverage
    1 - 2 P(B <= k - 1), B ~ Binomial(n, 1/2), is at least 95 %; None if there is none (n < 6).
    """
    tail = (1.0 - _LEVEL) / 2.0
    # The normal approximation is right to within one or two ranks: start above and step down.
    k = min(int(n / 2.0 - 1.95996 * math.sqrt(n) / 2.0) + 3, n // 2)
    while k > 0 and bdtr(k - 1, n, 0.5) > tail:
        k -= 1
    return (k, n + 1 - k) if k > 0 else None


def median_ci(values: np.ndarray) -> tuple[float, float] | None:
    """
    Return the 95 % interval of the median of values (n,) in the order in which they came.

    The exact pair of ranks covers between 95 and 98.3 %, by n; interpolated between it and the
    next narrower one the level is 95 % to within 1 % for any continuous distribution. The
    distance from the middle grows with the correlation r of successive values, told from their
    ranks (for normal values r = 2 sin(pi r_ranks / 6), Pearson 1907) and freed of its bias as in
    `BatchMeans`: by sqrt(f), f = 1 + 2 sum (2 / pi) asin(r^k) for a Gaussian first-order
    autoregressive sequence, and by the lower degrees of freedom.

    Measured, 2000 runs each: 95 to 97 % cover with 20 to 180 independent values (normal,
    exponential, Cauchy), 94 to 95 % at r = 0.4, at r = 0.6 88 % with 20 values (of the 4 in 10
    runs that are given an interval), 93 % with 30, 96 % from 60 on. Taken as independent, 85 %
    at r = 0.4.

    Not finite ones are left out. None with fewer than 20 values, where their correlation leaves
    fewer than 6 independent ones, or where both ends are the same value.
    """
    found = _ends(values)
    return found if found is not None and found[1] > found[0] else None


def median_error(values: np.ndarray) -> float | None:
    """
    Return the standard error of the median of values (n,) in order, None as `median_ci`.

    Half the width of the interval divided by the normal quantile of its level (McKean and
    Schrader 1984), for the correlation as it is estimated: what makes an interval safe against
    a wrong estimate of it would make a standard error too large by a third. Measured with
    independent normal values: 12 % too large in the RMS with 20, 6 % with 60.
    """
    if median_ci(values) is None:
        return None
    values = _finite(values)
    from_middle = _from_middle(values.size) * math.sqrt(_inflation(values, safe=False))
    low, high = _at_ranks(values, from_middle)
    return (high - low) / (2.0 * float(ndtri(0.5 + _LEVEL / 2.0)))


def why_none(values: np.ndarray) -> str:
    """Return why enough values tell no interval though they differ, '' if they tell one."""
    values = _finite(values)
    enough = values.size >= MIN_BLOCKS and values.min() < values.max()
    return TOO_SLOW if enough and _ends(values) is None else ''


def _ends(values: np.ndarray) -> tuple[float, float] | None:
    values = _finite(values)
    n = values.size
    if n < MIN_BLOCKS:
        return None
    inflation = _inflation(values, safe=True)
    if n / inflation < _MIN_INDEPENDENT:
        return None
    from_middle = _from_middle(n)
    if inflation > 1.0:
        inflation *= (n - 1) / (n - inflation)
        quantiles = [float(stdtrit(freedom, 0.5 + _LEVEL / 2.0))
                     for freedom in ((n - 1) / inflation, n - 1)]
        from_middle *= math.sqrt(inflation) * quantiles[0] / quantiles[1]
    return None if from_middle > (n - 1) / 2.0 else _at_ranks(values, from_middle)


def _from_middle(n: int) -> float:
    """Return how many ranks from the middle the level of n >= 20 independent values is 95 %."""
    ranks = median_ranks(n)
    assert ranks is not None  # there are from 6 values on
    k = ranks[0]
    wide, narrow = (1.0 - 2.0 * float(bdtr(rank - 1, n, 0.5)) for rank in (k, k + 1))
    share = (wide - _LEVEL) / (wide - narrow)
    return (n + 1) / 2.0 - k - (n - k) * share / (k + (n - 2 * k) * share)


def _at_ranks(values: np.ndarray, from_middle: float) -> tuple[float, float]:
    """Return the sorted values so many ranks below and above the middle, interpolated."""
    n, ordered = values.size, np.sort(values)
    middle = (n - 1) / 2.0
    low, high = np.interp(
        [middle - from_middle, middle + from_middle], np.arange(n), ordered)
    return float(low), float(high)


def _inflation(values: np.ndarray, *, safe: bool) -> float:
    """
    Return by how much correlation raises the variance of a count of values (n,) below the median.

    `safe`: rather too much than too little, and at least 1; else without bias.
    """
    n = values.size
    _, place, counts = np.unique(values, return_inverse=True, return_counts=True)
    ranks = (np.cumsum(counts) - (counts - 1) / 2.0)[place.reshape(-1)] - (n + 1) / 2.0
    power = float(ranks @ ranks)
    lag1 = float(ranks[1:] @ ranks[:-1]) / power if power > 0.0 else 0.0
    lag1 = 2.0 * math.sin(math.pi / 6.0 * lag1)
    lag1 = max((n * lag1 + 2.0) / (n - 4), 0.0) if safe else max(lag1 + 1.0 / n, -_LAG1_CAP)
    lag1 = min(lag1, _LAG1_CAP)
    return 1.0 + 4.0 / math.pi * float(np.arcsin(lag1 ** _LAGS).sum())


def _finite(values: np.ndarray) -> np.ndarray:
    """Return the finite ones of some values."""
    values = np.asarray(values, dtype=float).reshape(-1)
    return values[np.isfinite(values)]
