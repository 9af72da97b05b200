# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Tracking error: its accumulation over a run, and the metrics that come out."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from teleop_eval.core import rotations
from teleop_eval.core.blocks import BatchMeans
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.metric import INSUFFICIENT, UNOBSERVABLE, Metric, joined, missing

ARM_LENGTHS = 'arm lengths'


class MagnitudeStatistics:
    """RMS, 95th percentile and maximum of magnitudes, with the interval of the RMS."""

    def __init__(self) -> None:
        self._histogram = StreamingHistogram()
        self._blocks = BatchMeans()

    @property
    def samples(self) -> int:
        """Return the number of magnitudes."""
        return self._histogram.count

    def add(self, magnitudes: np.ndarray) -> None:
        """Add one window's magnitudes (n,) as one block."""
        if magnitudes.size:
            self._histogram.add(magnitudes)
            self._blocks.add(float(magnitudes @ magnitudes), magnitudes.size)

    def metrics(self, prefix: str, suffix: str, unit: str, *, factor: float = 1.0,
                reason: str = '', status: str = INSUFFICIENT,
                caveat: str = '') -> dict[str, Metric]:
        """
        Return the metrics {prefix}_rms{suffix}, _p95 and _max, values times `factor`.

        Without samples they have `status` for `reason`; `caveat` goes with a value.
        """
        names = [f'{prefix}_{which}{suffix}' for which in ('rms', 'p95', 'max')]
        if not self.samples:
            return {name: missing(status, unit, reason or 'no valid samples')
                    for name in names}
        interval = self._blocks.root_mean_ci()
        why_none = self._blocks.why_none(interval)
        if interval is not None:
            interval = (interval[0] * factor, interval[1] * factor)
        values = (math.sqrt(self._blocks.mean), self._histogram.percentile(95.0),
                  self._histogram.max)
        return {
            name: Metric(float(value) * factor, unit, interval if which == 0 else None,
                         self._blocks.n_blocks, self.samples,
                         reason=joined(caveat, why_none if which == 0 else ''))
            for which, (name, value) in enumerate(zip(names, values, strict=True))
        }


class OrientationStatistics:
    """
    Static mean and varying part of an orientation error.

    The errors' quaternion outer products add up to a matrix whose largest eigenvector is the
    mean rotation; the RMS angle about it follows from the eigenvalue, both in constant
    memory (chordal mean: Markley et al. 2007, "Averaging quaternions", J. Guidance, Control
    and Dynamics 30(4):1193-1197).
    """

    def __init__(self) -> None:
        self._outer = np.zeros((4, 4))
        self._angles = MagnitudeStatistics()

    @property
    def samples(self) -> int:
        """Return the number of orientations."""
        return self._angles.samples

    def add(self, ideal: np.ndarray, robot: np.ndarray) -> None:
        """Add R_i^T R_r of one window; both (n, 4) x, y, z, w."""
        error = rotations.multiply(rotations.conjugate(ideal), robot)
        self._outer += error.T @ error
        self._angles.add(rotations.angle_between(ideal, robot))

    def mean(self) -> np.ndarray:
        """Return the mean rotation (4,) x, y, z, w."""
        mean: np.ndarray = np.linalg.eigh(self._outer)[1][:, -1]
        return mean if mean[3] >= 0.0 else -mean

    def metrics(self, prefix: str, *, absorbed: bool, reason: str = '',
                caveat: str = '') -> dict[str, Metric]:
        """Return {prefix}_static_rad, _varying_rad and _rms_rad (also p95 and max)."""
        found = self._angles.metrics(prefix, '_rad', 'rad', reason=reason, caveat=caveat)
        n = self.samples
        blocks = found[f'{prefix}_rms_rad'].n
        if not n:
            why = reason or 'no valid samples'
            return {f'{prefix}_static_rad': missing(INSUFFICIENT, 'rad', why),
                    f'{prefix}_varying_rad': missing(INSUFFICIENT, 'rad', why), **found}
        static = float(rotations.angle_between(self.mean(), np.array([0.0, 0.0, 0.0, 1.0])))
        share = max(0.0, 1.0 - float(np.linalg.eigvalsh(self._outer)[-1]) / n)
        varying = 2.0 * math.asin(min(1.0, math.sqrt(share)))
        static_metric = Metric(static, 'rad', None, blocks, n, reason=caveat)
        if absorbed:
            static_metric = missing(
                UNOBSERVABLE, 'rad', 'the hand-to-tool rotation was estimated from this motion, '
                'which absorbs the static error; configure hand_to_tool_xyzw to see it')
        return {f'{prefix}_static_rad': static_metric,
                f'{prefix}_varying_rad': Metric(varying, 'rad', None, blocks, n, reason=caveat),
                **found}


@dataclass(frozen=True)
class JointErrors:
    """
    Joint errors at the robot's own sample times.

    `times_ns` (n,); `errors` (n, d) in rad or m, NaN where there is no command or the joint
    is not enabled.
    """

    times_ns: np.ndarray
    errors: np.ndarray


def joint_errors(robot_times_ns: np.ndarray, robot: np.ndarray, command_times_ns: np.ndarray,
                 command: np.ndarray, *, hold: bool, max_gap_ns: int, delay_ns: int = 0,
                 enabled: np.ndarray | None = None,
                 turning: np.ndarray | None = None) -> JointErrors:
    """
    Return robot minus command at the robot's own sample times, without a grid.

    Parameters
    ----------
    robot_times_ns, robot
        (n,) and (n, d).
    command_times_ns, command
        (m,) and (m, d), strictly increasing times.
    hold
        Hold the last command until the next; otherwise interpolate linearly, never over more
        than `max_gap_ns`, and never beyond the last command.
    delay_ns
        The command is taken this much earlier.
    enabled
        (m, d): joints switched on by each command, which holds until the next command.
    turning
        Columns of joints without limits: whole turns between the two sides are no error.

    """
    errors = np.full(robot.shape, np.nan)
    if not len(command_times_ns) or not len(robot_times_ns):
        return JointErrors(robot_times_ns, errors)
    times = robot_times_ns - delay_ns
    before = np.searchsorted(command_times_ns, times, side='right') - 1
    there = before >= 0
    left = np.maximum(before, 0)
    expected = command[left]
    if not hold:
        right = np.minimum(left + 1, len(command_times_ns) - 1)
        span = command_times_ns[right] - command_times_ns[left]
        exact = times == command_times_ns[left]
        there &= exact | ((span > 0) & (span <= max_gap_ns))
        share = np.divide(times - command_times_ns[left], span,
                          out=np.zeros(len(times)), where=span > 0)
        expected = expected + share[:, None] * (command[right] - expected)
    errors[there] = robot[there] - expected[there]
    if turning is not None:
        turn = 2.0 * math.pi
        errors[:, turning] -= turn * np.round(errors[:, turning] / turn)
    if enabled is not None:
        errors[~enabled[left]] = np.nan
    return JointErrors(robot_times_ns, errors)
