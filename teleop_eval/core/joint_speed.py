# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""How fast the joints must move, against how fast the robot's description lets them."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from teleop_eval.core.blocks import BatchMeans
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, Metric, missing

P95, MAX = 'joint_speed_demand_p95', 'joint_speed_demand_max'


class JointSpeedDemand:
    """
    |joint speed| / velocity limit, in bounded memory.

    The speed over a step from one grid cell to the next is the joint's way divided by the time;
    of a joint without position limits, the shorter way round. The demand of a step is that of
    the joint nearest to, or farthest beyond, its limit. Joints without a velocity limit, or
    with 0, which some descriptions write for unknown, are left out and named.

    Parameters
    ----------
    limits
        (n,) rad/s or m/s, inf or 0 where there is none.
    turning
        (n,) whether a joint has no position limits.
    names
        Joint names (n,).
    period_s
        Time from one cell to the next, s.

    """

    def __init__(self, limits: np.ndarray, turning: np.ndarray, *, names: Sequence[str],
                 period_s: float) -> None:
        if not (math.isfinite(period_s) and period_s > 0.0):
            raise ValueError(f'the period must be positive, got {period_s!r}')
        self._limits = np.array(limits, dtype=float)
        self._known = np.isfinite(self._limits) & (self._limits > 0.0)
        self._turning = np.array(turning, dtype=bool)
        self._names = tuple(names)
        self._period_s = period_s
        self._joints = [StreamingHistogram() for _ in self._names]
        self._all = StreamingHistogram()
        self._blocks = BatchMeans()
        self.restart()

    def restart(self) -> None:
        """Forget the last cell: no step leads to the next one."""
        self._last = np.full((1, len(self._names)), np.nan)
        self._last_run = np.full(1, -1, dtype=np.int64)

    def add(self, q: np.ndarray, run: np.ndarray, *, apart: np.ndarray | None = None) -> None:
        """
        Add the joint positions of one window that follows the last one without a gap.

        Parameters
        ----------
        q
            (m, n) rad or m, NaN in cells that do not count.
        run
            (m,) number of the stretch a cell belongs to; no step leads from one to another.
        apart
            (m,) cells no step leads to, besides.

        """
        if not len(q):
            return
        rows = np.concatenate([self._last, q])
        runs = np.concatenate([self._last_run, np.asarray(run, dtype=np.int64)])
        self._last, self._last_run = rows[-1:], runs[-1:]
        if not self._known.any():
            return
        way = np.diff(rows, axis=0)
        turn = 2.0 * math.pi
        way[:, self._turning] -= turn * np.round(way[:, self._turning] / turn)
        demand = np.abs(way[:, self._known]) / (self._limits[self._known] * self._period_s)
        counts = (np.diff(runs) == 0) & np.isfinite(way).all(axis=1)
        if apart is not None:
            counts &= ~np.asarray(apart, dtype=bool)
        demand = demand[counts]
        if not len(demand):
            return
        largest = demand.max(axis=1)
        self._all.add(largest)
        self._blocks.add(float(largest.sum()), len(largest))
        for column, joint in enumerate(np.flatnonzero(self._known)):
            self._joints[joint].add(demand[:, column])

    def metrics(self) -> dict[str, Metric]:
        """Return joint_speed_demand_p95 and joint_speed_demand_max, each joint's in details."""
        without = [name for name, known in zip(self._names, self._known, strict=True)
                   if not known]
        if not self._known.any():
            return {name: missing(
                NOT_CONFIGURED, '1', 'The robot description gives no joint a velocity limit.')
                for name in (P95, MAX)}
        if not self._all.count:
            return {name: missing(
                INSUFFICIENT, '1', 'No two cells in a row have joint positions.')
                for name in (P95, MAX)}
        note = f'No velocity limit is given for {", ".join(without)}.' if without else ''
        found = {}
        for name, level in ((P95, 95.0), (MAX, 100.0)):
            joints = {joint: stream.percentile(level) for joint, stream, known in zip(
                self._names, self._joints, self._known, strict=True) if known}
            found[name] = Metric(
                self._all.percentile(level), '1', n=self._blocks.n_blocks,
                samples=self._all.count, reason=note, details={
                    'joints': joints, 'joint': max(joints, key=joints.__getitem__),
                    'joints_without_limit': without})
        return found
