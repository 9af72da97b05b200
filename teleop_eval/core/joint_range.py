# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""How much of the joints' limits a run uses, and how close it comes to them."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from teleop_eval.core.blocks import BatchMeans
from teleop_eval.core.histogram import LinearHistogram
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, Metric, missing

# Part of the limit span that counts as close to a limit.
NEAR_SHARE = 0.05
# A 5th percentile needs 20 samples to lie between two of them.
MIN_SAMPLES = 20

RANGE_USE, MARGIN_MIN, LIMIT_SHARE = 'joint_range_use', 'limit_margin_min', 'limit_share'
_NO_LIMITS = {
    'continuous': 'A continuous joint has no limits.',
    'locked': 'The lower limit of this joint equals its upper one, so there is no range to use.',
}


class JointRangeUse:
    """
    Use of each joint's range, in bounded memory; joints in rad, prismatic ones in m.

    Everything is relative to the joint's own limit span, so revolute and prismatic joints
    compare. Each call of `add` is one block for the interval of `limit_share`.

    Parameters
    ----------
    lower, upper
        Position limits (n,).
    continuous
        Whether a joint has no limits (n,); one with an infinite limit has none either.
    names
        Joint names (n,); 'joint_0' and so on where not given.

    Attributes
    ----------
    skipped
        Number of samples of each joint that were not finite, (n,).

    Raises
    ------
    ValueError
        If the shapes differ or a lower limit exceeds the upper one.

    """

    def __init__(
        self, lower: np.ndarray, upper: np.ndarray, continuous: np.ndarray, *,
        names: Sequence[str] | None = None,
    ) -> None:
        self.lower = np.array(lower, dtype=float)
        self.upper = np.array(upper, dtype=float)
        n = self.lower.size
        self.names = tuple(names) if names is not None else tuple(f'joint_{i}' for i in range(n))
        free = np.array(continuous, dtype=bool)
        if not self.lower.shape == self.upper.shape == free.shape == (len(self.names),):
            raise ValueError(
                f'limits, continuous and names need one length, got {self.lower.shape}, '
                f'{self.upper.shape}, {free.shape} and {len(self.names)}')
        self.continuous = free | ~(np.isfinite(self.lower) & np.isfinite(self.upper))
        wrong = np.flatnonzero(~self.continuous & ~(self.lower <= self.upper))
        if wrong.size:
            i = int(wrong[0])
            raise ValueError(
                f'joint {self.names[i]!r} has a lower limit {float(self.lower[i])!r} above its '
                f'upper one {float(self.upper[i])!r}')
        self._locked = ~self.continuous & (self.lower == self.upper)
        self._limited = ~self.continuous & ~self._locked
        self._span = np.where(self._limited, self.upper - self.lower, 1.0)
        self._streams = [self._stream(i) for i in range(n)]
        self._near = np.zeros(n, dtype=np.int64)
        self._near_any = BatchMeans()
        self._samples = 0

    @property
    def skipped(self) -> np.ndarray:
        """Return the number of samples (n,) of each joint that were not finite."""
        return np.array([stream.skipped for stream in self._streams], dtype=np.int64)

    def add(self, q: np.ndarray) -> None:
        """
        Add the joint positions (m, n) of one window.

        What is not finite is left out joint by joint; a sample counts as near a limit if any of
        its finite joints is.

        Raises
        ------
        ValueError
            If q is not of shape (m, n).

        """
        q = np.asarray(q, dtype=float)
        if q.ndim != 2 or q.shape[1] != len(self.names):
            raise ValueError(f'positions (m, {len(self.names)}) are needed, got shape {q.shape}')
        for i, stream in enumerate(self._streams):
            stream.add(q[:, i])
        finite = np.isfinite(q) & self._limited
        with np.errstate(invalid='ignore'):
            margin = np.minimum(q - self.lower, self.upper - q)
            near = finite & (margin <= NEAR_SHARE * self._span)
        self._near += np.count_nonzero(near, axis=0)
        seen = finite.any(axis=1)
        count = int(np.count_nonzero(seen))
        self._samples += count
        self._near_any.add(float(np.count_nonzero(near[seen].any(axis=1))), float(count))

    def joint_metrics(self) -> dict[str, dict[str, Metric]]:
        """Return joint_range_use, limit_margin_min and limit_share of each joint by its name."""
        return {name: self._of_joint(i) for i, name in enumerate(self.names)}

    def metrics(self) -> dict[str, Metric]:
        """
        Return joint_range_use, limit_margin_min and limit_share of the whole arm.

        The range use is the *mean* over the joints that have limits: each joint moves it, where a
        median would hide a locked or an overworked one. The margin is that of the joint that
        comes closest. The share is that of samples with *any* joint within 5 % of the span of a
        limit. Details name the joint at fault and give each joint's value.
        """
        joints = self.joint_metrics()
        if not self._limited.any():
            reason = 'No joint of this arm has limits with a range between them.'
            return {name: missing(NOT_CONFIGURED, '1', reason)
                    for name in (RANGE_USE, MARGIN_MIN, LIMIT_SHARE)}
        return {
            RANGE_USE: self._mean_use(joints),
            MARGIN_MIN: self._closest(joints),
            LIMIT_SHARE: self._any_near(joints),
        }

    def _stream(self, i: int) -> LinearHistogram:
        if self._limited[i]:
            return LinearHistogram(float(self.lower[i]), float(self.upper[i]))
        # A turn, so that wrapped and unwrapped readings of a continuous joint agree.
        return LinearHistogram(-math.pi, math.pi, periodic=True)

    def _of_joint(self, i: int) -> dict[str, Metric]:
        stream, span = self._streams[i], float(self._span[i])
        if not self._limited[i]:
            arc = {} if self._locked[i] or not stream.count else {
                'arc_90_rad': stream.shortest_arc(0.9)}
            reason = _NO_LIMITS['locked' if self._locked[i] else 'continuous']
            return {name: missing(NOT_CONFIGURED, '1', reason, **arc)
                    for name in (RANGE_USE, MARGIN_MIN, LIMIT_SHARE)}
        if stream.count < MIN_SAMPLES:
            reason = f'{stream.count} valid samples of this joint, {MIN_SAMPLES} are needed.'
            return {name: missing(INSUFFICIENT, '1', reason)
                    for name in (RANGE_USE, MARGIN_MIN, LIMIT_SHARE)}
        low, high = stream.percentile(5.0), stream.percentile(95.0)
        to_lower, to_upper = self._margins(i)
        margin = min(to_lower, to_upper)
        note = ''
        if margin < 0.0:
            note = f'The joint went {-margin:.3%} of its limit span beyond a limit.'
        return {
            RANGE_USE: self._metric(
                i, (high - low) / span, p5=low, p95=high, lower=float(self.lower[i]),
                upper=float(self.upper[i])),
            MARGIN_MIN: self._metric(
                i, min(max(margin, 0.0), 0.5), reason=note,
                limit='lower' if to_lower <= to_upper else 'upper',
                overshoot=max(-margin, 0.0), position_min=stream.min, position_max=stream.max),
            LIMIT_SHARE: self._metric(i, int(self._near[i]) / stream.count),
        }

    def _margins(self, i: int) -> tuple[float, float]:
        """Return the least distances to the lower and upper limit, shares of the span."""
        stream, span = self._streams[i], float(self._span[i])
        return ((stream.min - float(self.lower[i])) / span,
                (float(self.upper[i]) - stream.max) / span)

    def _metric(self, i: int, value: float, *, reason: str = '', **details: object) -> Metric:
        return Metric(
            value, '1', n=self._near_any.n_blocks, samples=self._streams[i].count, reason=reason,
            details=details)

    def _mean_use(self, joints: dict[str, dict[str, Metric]]) -> Metric:
        values = _values(joints, RANGE_USE)
        if not values:
            return self._too_few()
        return Metric(
            sum(values.values()) / len(values), '1', n=self._near_any.n_blocks,
            samples=self._samples, details={
                'joints': values, 'least_used': min(values, key=values.__getitem__),
                'most_used': max(values, key=values.__getitem__)})

    def _closest(self, joints: dict[str, dict[str, Metric]]) -> Metric:
        values = _values(joints, MARGIN_MIN)
        if not values:
            return self._too_few()
        # Beyond a limit the margin is 0 for all: signed ones tell the joints apart.
        signed = {name: min(self._margins(self.names.index(name))) for name in values}
        fault = min(signed, key=signed.__getitem__)
        worst = joints[fault][MARGIN_MIN]
        return Metric(
            values[fault], '1', n=self._near_any.n_blocks, samples=self._samples,
            reason=f'Joint {fault!r}: {worst.reason}' if worst.reason else '',
            details={
                'joints': values, 'joint': fault, 'limit': worst.details['limit'],
                'overshoot': worst.details['overshoot'],
                'joints_beyond': [name for name, margin in signed.items() if margin < 0.0]})

    def _any_near(self, joints: dict[str, dict[str, Metric]]) -> Metric:
        values = _values(joints, LIMIT_SHARE)
        if not values:
            return self._too_few()
        interval = self._near_any.share_ci()
        fault = max(values, key=values.__getitem__)
        return Metric(
            self._near_any.mean, '1', ci95=interval, n=self._near_any.n_blocks,
            samples=self._samples, reason=self._near_any.why_none(interval), details={
                'joints': values, 'joint': fault if values[fault] > 0.0 else None,
                'near_share_of_span': NEAR_SHARE})

    def _too_few(self) -> Metric:
        return missing(
            INSUFFICIENT, '1',
            f'No joint with limits has {MIN_SAMPLES} valid samples of engaged time.')


def _values(joints: dict[str, dict[str, Metric]], name: str) -> dict[str, float]:
    """Return the values by joint, without the joints that have none."""
    return {joint: metrics[name].number for joint, metrics in joints.items()
            if metrics[name].value is not None}
