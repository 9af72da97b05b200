# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Everything one arm's run under one mapping adds up to, in bounded memory."""

from __future__ import annotations

import numpy as np

from teleop_eval.core import workspace
from teleop_eval.core.budget import BudgetStatistics
from teleop_eval.core.cell_grid import VisitedCells
from teleop_eval.core.delays import DelayStatistics
from teleop_eval.core.frequency_response import FrequencyResponse
from teleop_eval.core.geometry import NO_ROBOT, OperatorGeometry, RobotGeometry
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.joint_range import JointRangeUse
from teleop_eval.core.manipulability import manipulability_norm
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, Metric, missing
from teleop_eval.core.reachable_cells import ReachableSet
from teleop_eval.core.silence import Heard
from teleop_eval.core.tracking import ARM_LENGTHS, MagnitudeStatistics, OrientationStatistics

LATENCIES = ('latency_s', 'latency_command_s', 'latency_response_s')


def total_unit(units: tuple[str, ...]) -> str:
    """Return the commoner unit: angles and lengths are never added up."""
    return max(sorted(set(units)), key=units.count) if units else 'rad'


class JointErrorStatistics:
    """Joint error by joint, and over all joints of one kind."""

    def __init__(self, names: tuple[str, ...], units: tuple[str, ...]) -> None:
        self._names = names
        self._units = units
        self._single = [MagnitudeStatistics() for _ in names]
        self._all = MagnitudeStatistics()
        self._total_unit = total_unit(units)
        self._total = np.array([unit == self._total_unit for unit in units], dtype=bool)

    def add(self, errors: np.ndarray) -> None:
        """Add one window's errors (n, d), NaN where there is none."""
        for column, statistics in enumerate(self._single):
            one = errors[:, column]
            statistics.add(np.abs(one[np.isfinite(one)]))
        chosen = errors[:, self._total]
        self._all.add(np.abs(chosen[np.isfinite(chosen)]))

    def metrics(self, prefix: str, *, reason: str, status: str = INSUFFICIENT,
                caveat: str = '') -> dict[str, Metric]:
        """Return {prefix}_rms, _p95, _max over the joints and {prefix}_rms.JOINT of each."""
        found = self._all.metrics(
            prefix, '', self._total_unit, reason=reason, status=status, caveat=caveat)
        for name, unit, one in zip(self._names, self._units, self._single, strict=True):
            each = one.metrics(
                prefix, '', unit, reason=reason, status=status, caveat=caveat)
            found.update({f'{key}.{name}': value for key, value in each.items()})
        return found


class MappingAccumulator:
    """Sums, histograms and visited cells of one arm under one mapping."""

    def __init__(self, robot: RobotGeometry | None, joint_names: tuple[str, ...],
                 joint_units: tuple[str, ...], period_s: float, *, suffix: str = '_norm',
                 unit: str = ARM_LENGTHS) -> None:
        self._robot = robot
        self._period_s = period_s
        self.engaged_cells = 0
        self.engagements = 0
        self.heard = Heard()
        self.raw = MagnitudeStatistics()
        self.compensated = MagnitudeStatistics()
        self.spin = MagnitudeStatistics()
        self.budget = BudgetStatistics(suffix=suffix, unit=unit)
        self.turn_raw = OrientationStatistics()
        self.turn_compensated = OrientationStatistics()
        self.joints_raw = JointErrorStatistics(joint_names, joint_units)
        self.joints_compensated = JointErrorStatistics(joint_names, joint_units)
        self.delays = {name: DelayStatistics() for name in LATENCIES}
        self.responses = {name: FrequencyResponse(1.0 / period_s)
                          for name in ('latency_s', 'latency_response_s')}
        self._reach = {'': StreamingHistogram(), '_operator': StreamingHistogram()}
        self._visited = {which: VisitedCells(period_s=period_s)
                         for which in ('robot', 'operator', 'ideal')}
        self._manipulability = StreamingHistogram()
        self._range: JointRangeUse | None = None
        if robot is not None:
            chain = robot.chain
            self._range = JointRangeUse(
                chain.lower, chain.upper,
                np.array([kind == 'continuous' for kind in chain.kinds]),
                names=chain.joint_names)

    @property
    def engaged_s(self) -> float:
        """Return the engaged time, s."""
        return self.engaged_cells * self._period_s

    def add_positions(self, which: str, u: np.ndarray) -> None:
        """Add normalised positions (n, 3) of 'robot', 'operator' or 'ideal'."""
        self._visited[which].add(u)
        suffix = {'robot': '', 'operator': '_operator'}.get(which)
        if suffix is not None:
            self._reach[suffix].add(np.linalg.norm(u, axis=1))

    def add_joints(self, q: np.ndarray) -> None:
        """Add the chain's joint positions (n, d) of one window."""
        if self._robot is None or self._range is None or not len(q):
            return
        self._range.add(q)
        self._manipulability.add(
            manipulability_norm(self._robot.chain, q, self._robot.reach.length_m))

    def restart(self) -> None:
        """Forget the time axis, as at the start of a segment."""
        for delay in self.delays.values():
            delay.restart()

    def workspace_metrics(self, operator: OperatorGeometry, reachable: ReachableSet | None,
                          *, has_operator: bool, has_ideal: str) -> dict[str, Metric]:
        """
        Return workspace use, joint range and manipulability.

        `has_ideal` is '' if there is an ideal command, else the reason why not.
        """
        engaged = self.engaged_s
        found: dict[str, Metric] = {}
        found['workspace_coverage_operator'] = (
            workspace.coverage_operator(self._visited['operator'], engaged_s=engaged)
            if has_operator else _no_operator('1', operator))
        if self._robot is None:
            return {**found, **self._without_robot()}
        found['workspace_coverage_robot'] = workspace.coverage_robot(
            self._visited['robot'], reachable, engaged_s=engaged)
        found['workspace_overlap'] = (
            missing(NOT_CONFIGURED, '1', has_ideal) if has_ideal else
            workspace.overlap(self._visited['ideal'], self._visited['robot'], engaged_s=engaged))
        for suffix, which in (('', 'robot'), ('_operator', 'operator')):
            there = which == 'robot' or has_operator
            reach = workspace.reach_metrics(
                self._reach[suffix], blocks=self._visited[which].blocks, engaged_s=engaged)
            hull = workspace.hull_volume(self._visited[which], engaged_s=engaged)
            for name, metric in {**reach, 'hull_volume_norm': hull}.items():
                found[name + suffix] = metric if there else _no_operator(metric.unit, operator)
        assert self._range is not None  # made together with the robot
        found.update(self._range.metrics())
        found.update(self._manipulability_metrics())
        if operator.scale_uncertainty is not None:
            for name, metric in found.items():
                if name.endswith('_operator'):
                    metric.details['scale_uncertainty'] = operator.scale_uncertainty
        return found

    def _manipulability_metrics(self) -> dict[str, Metric]:
        histogram, blocks = self._manipulability, self._visited['robot'].blocks
        if not histogram.count:
            return {name: missing(INSUFFICIENT, '1', 'no engaged sample with joint positions')
                    for name in ('manipulability_min', 'manipulability_p5')}
        return {
            'manipulability_min': Metric(histogram.min, '1', n=blocks, samples=histogram.count),
            'manipulability_p5': Metric(histogram.percentile(5.0), '1', n=blocks,
                                        samples=histogram.count),
        }

    def _without_robot(self) -> dict[str, Metric]:
        units = {
            'workspace_coverage_robot': '1', 'workspace_overlap': '1',
            'reach_p50_norm': ARM_LENGTHS, 'reach_p95_norm': ARM_LENGTHS,
            'reach_max_norm': ARM_LENGTHS, 'hull_volume_norm': 'arm lengths^3',
            'joint_range_use': '1', 'limit_margin_min': '1', 'limit_share': '1',
            'manipulability_min': '1', 'manipulability_p5': '1',
        }
        return {name: missing(NOT_CONFIGURED, unit, NO_ROBOT) for name, unit in units.items()}


def _no_operator(unit: str, operator: OperatorGeometry) -> Metric:
    if operator.lacking:
        return missing(INSUFFICIENT, unit, operator.lacking)
    lacking = operator.missing or 'operator.hand_topic'
    return missing(NOT_CONFIGURED, unit, f'needs {lacking}')
