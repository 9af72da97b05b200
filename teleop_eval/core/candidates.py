# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
What one configured mapping would have asked of the robot for the recorded operator motion.

A prediction: the operator moved as they did under the mapping that was active, and would have
moved otherwise under this one. Every metric here carries `predicted: true` in its details.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from teleop_eval.core import workspace
from teleop_eval.core.blocks import BatchMeans
from teleop_eval.core.cell_grid import VisitedCells
from teleop_eval.core.description import CONTINUOUS
from teleop_eval.core.geometry import RobotGeometry
from teleop_eval.core.histogram import StreamingHistogram
from teleop_eval.core.inverse_kinematics import PathSolver, orientation_possible, pull_share
from teleop_eval.core.joint_range import MARGIN_MIN, JointRangeUse
from teleop_eval.core.joint_speed import MAX as SPEED_MAX
from teleop_eval.core.joint_speed import P95 as SPEED_P95
from teleop_eval.core.joint_speed import JointSpeedDemand
from teleop_eval.core.manipulability import manipulability_norm
from teleop_eval.core.mappings.base import Ideal
from teleop_eval.core.metric import INSUFFICIENT, NOT_CONFIGURED, OK, Metric, joined, missing
from teleop_eval.core.reachable_cells import ReachableSet
from teleop_eval.core.tracking import ARM_LENGTHS, MagnitudeStatistics

NOTE = 'Predicted from the recorded motion, without the adaptation of the operator.'
# What tells how postures are chosen where several reach a pose.
POSTURE_RULE = (
    'Where a mapping gives tool poses, postures begin near the one in which the robot was in the '
    'first cell that counts, and are the nearest to the one before, drawn back to that first one '
    'within 2 s where the pose leaves a choice.')
_MIDDLE = ('postures begin at the middle of the joint ranges, since that of the robot was not '
           'measured')
_BEYOND = 1e-9
_NOTHING = 'The mapping gives no ideal command for any cell that counts.'
_NO_LIMITS = 'No joint of this arm has position limits.'
_NO_SEARCH = ('The mapping gives the joints themselves; what the arm cannot do is in '
              'limit_violation_share.')
_NO_HOLD = ('The mapping gives the joints themselves and nothing holds them at their limits; '
            'limit_violation_share tells how often they lie beyond.')
_NO_VIOLATION = ('Postures for tool poses are searched inside the limits only; see at_limit_share '
                 'and not_reached_share.')
# Metrics that depend on the posture taken for a pose.
_OF_POSTURES = ('not_reached_share', 'at_limit_share', SPEED_P95, SPEED_MAX, MARGIN_MIN,
                'manipulability_min', 'manipulability_p5')


@dataclass(frozen=True, eq=False)
class Start:
    """
    Where the postures of a prediction begin.

    `posture` (n,): measured in the first usable cell of the recording that has one, in the order
    of the chain; None to begin at the middle of the joint ranges. `cell`: of the window, before
    which it is not known and no posture is searched.
    """

    posture: np.ndarray | None = None
    cell: int = 0


class CandidateAccumulator:
    """
    Adds up one arm's prediction under one mapping, in bounded memory.

    A mapping between joints gives the postures; any other gives tool poses, and inverse
    kinematics (`PathSolver`) the postures: they begin near the posture that the robot had in the
    first cell that counts and are drawn to it, since an arm stays in its branch. Where a pose is
    out of reach, the closest posture counts for limits and manipulability, but not for joint
    speed, and neither does a step to another branch. Workspace use is that of the ideal command,
    also beyond reach.

    Parameters
    ----------
    robot
        The arm.
    period_s
        Length of a cell, s.
    between_joints
        Whether the mapping gives joints.
    with_orientation
        Whether the mapping gives orientations that the arm should follow; it does only with 6
        or more joints.
    gives_velocity
        Whether the mapping is judged by its velocities (rate). Everything but the discrepancy
        is then taken from the integrated positions.

    """

    def __init__(self, robot: RobotGeometry, *, period_s: float, between_joints: bool,
                 with_orientation: bool = True, gives_velocity: bool = False) -> None:
        chain = robot.chain
        self._robot, self._velocity = robot, gives_velocity
        self._asked_to_turn = with_orientation
        self._turns = with_orientation and orientation_possible(chain)
        self._between, self._period_s = between_joints, period_s
        # Made when it is known where the robot is.
        self._solver: PathSolver | None = None
        self._measured = False
        turning = np.array([kind == CONTINUOUS for kind in chain.kinds], dtype=bool)
        # A locked joint is always at its limits, which says nothing.
        self._limited = chain.lower < chain.upper
        self._limited &= np.isfinite(chain.lower) | np.isfinite(chain.upper)
        self._speed = JointSpeedDemand(
            chain.velocity_limits, turning, names=chain.joint_names, period_s=period_s)
        self._range = JointRangeUse(
            chain.lower, chain.upper, turning, names=chain.joint_names)
        self._visited = VisitedCells(period_s=period_s)
        self._reach = StreamingHistogram()
        self._discrepancy = MagnitudeStatistics()
        self._manipulability = StreamingHistogram()
        self._miss = StreamingHistogram()
        self._lost, self._limit = BatchMeans(), BatchMeans()
        self._limit_cells = np.zeros(chain.size, dtype=np.int64)
        self._asked = self._searches = self._postures = 0

    def restart(self) -> None:
        """Begin anew after cells that were not fed; nothing is bridged."""
        self._speed.restart()
        if self._solver is not None:
            self._solver.interrupt()

    @property
    def followed_s(self) -> float:
        """Return for how long postures were searched, s."""
        return self._asked * self._period_s

    def add(self, ideal: Ideal, *, usable: np.ndarray, run: np.ndarray,
            robot_joints: np.ndarray, operator: np.ndarray | None = None,
            start: Start = Start()) -> None:
        """
        Add one window, which follows the last one without a gap unless `restart` came between.

        Parameters
        ----------
        ideal
            The mapping's ideal command (m cells), NaN where it is not known.
        usable
            (m,) cells that count.
        run
            (m,) number of the stretch between two boundaries a cell belongs to.
        robot_joints
            (m, n) measured, which carry a moving shoulder; also read for a fixed one.
        operator
            (m, 3) normalised positions u_o, arm lengths, or for a mapping that gives velocities
            their rates, arm lengths per second; NaN where there is none. None without them.
        start
            Where postures begin; after the first search it has no effect.

        """
        positions = ideal.positions_m
        good = np.asarray(usable, dtype=bool) & np.isfinite(positions).all(axis=1)
        carrying = robot_joints if ideal.joints is None else ideal.joints
        u = np.where(good[:, None], self._robot.normalise(positions, carrying), np.nan)
        self._visited.add(u)
        self._reach.add(np.linalg.norm(u[np.isfinite(u).all(axis=1)], axis=1))
        self._compare(ideal, u, operator, np.asarray(usable, dtype=bool))
        if self._between:
            self._take_joints(ideal, good, run)
        else:
            asked = good & (np.arange(len(good)) >= start.cell)
            if asked.any() or self._asked:
                self._follow(self._begun(start), ideal, asked, run)

    def _begun(self, start: Start) -> PathSolver:
        if self._solver is None:
            chain, rest = self._robot.chain, start.posture
            self._measured = rest is not None
            self._solver = PathSolver(
                chain, reach_m=self._robot.reach.length_m, with_orientation=self._turns,
                rest=None if rest is None else np.clip(rest, chain.lower, chain.upper),
                pull=pull_share(self._period_s))
        return self._solver

    def _compare(self, ideal: Ideal, u: np.ndarray, operator: np.ndarray | None,
                 usable: np.ndarray) -> None:
        if operator is None:
            return
        if self._velocity:
            if ideal.velocities_mps is None:
                return
            u = np.where(
                usable[:, None], ideal.velocities_mps / self._robot.reach.length_m, np.nan)
        apart = np.linalg.norm(u - operator, axis=1)
        self._discrepancy.add(apart[np.isfinite(apart)])

    def _take_joints(self, ideal: Ideal, good: np.ndarray, run: np.ndarray) -> None:
        chain = self._robot.chain
        joints = np.full((len(good), chain.size), np.nan)
        if ideal.joints is not None:
            joints[good] = ideal.joints[good]
        beyond = ((joints < chain.lower - _BEYOND) | (joints > chain.upper + _BEYOND))
        self._add_postures(joints, beyond)
        self._speed.add(joints, run)

    def _follow(self, solver: PathSolver, ideal: Ideal, good: np.ndarray,
                run: np.ndarray) -> None:
        turns = ideal.orientations
        if self._turns and turns is None:
            turns = np.full((len(good), 4), np.nan)
        found = solver.solve(np.where(good[:, None], ideal.positions_m, np.nan), turns)
        self._add_postures(found.joints, found.at_limit)
        asked = int(np.count_nonzero(found.asked))
        lost = found.asked & ~found.reached
        self._asked += asked
        self._searches += int(np.count_nonzero(found.jumped))
        self._lost.add(float(np.count_nonzero(lost)), float(asked))
        self._miss.add(found.position_error_m[lost] / self._robot.reach.length_m)
        followed = np.where(found.reached[:, None], found.joints, np.nan)
        self._speed.add(followed, run, apart=found.jumped)

    def _add_postures(self, joints: np.ndarray, limit: np.ndarray) -> None:
        known = np.isfinite(joints).all(axis=1)
        joints, limit = joints[known], limit[known] & self._limited
        if not len(joints):
            return
        self._postures += len(joints)
        self._range.add(joints)
        self._manipulability.add(manipulability_norm(
            self._robot.chain, joints, self._robot.reach.length_m))
        self._limit_cells += np.count_nonzero(limit, axis=0)
        self._limit.add(float(np.count_nonzero(limit.any(axis=1))), float(len(joints)))

    def metrics(self, reachable: ReachableSet | None = None, *,
                no_operator: str = 'needs operator positions in arm lengths',
                postures: str = '') -> dict[str, Metric]:
        """
        Return the predictions by name.

        Parameters
        ----------
        reachable
            What the robot can reach, for its coverage.
        no_operator
            Reason why there is nothing to compare with, where there is not.
        postures
            What is to be said of the metrics that depend on the postures.

        """
        engaged = self._visited.duration_s
        found = self._discrepancy_metrics(no_operator)
        found['workspace_coverage_robot'] = workspace.coverage_robot(
            self._visited, reachable, engaged_s=engaged)
        found |= workspace.reach_metrics(
            self._reach, blocks=self._visited.blocks, engaged_s=engaged)
        found |= self._limit_metrics()
        found['not_reached_share'] = self._lost_metric()
        found |= self._speed.metrics()
        found[MARGIN_MIN] = self._range.metrics()[MARGIN_MIN]
        found |= self._manipulability_metrics()
        begun = _MIDDLE if self._asked and not self._measured else ''
        if caveat := joined(postures, begun):
            for name in _OF_POSTURES:
                if found[name].status == OK:
                    found[name] = replace(
                        found[name], reason=joined(caveat, found[name].reason))
        for metric in found.values():
            metric.details['predicted'] = True
        return found

    def _discrepancy_metrics(self, no_operator: str) -> dict[str, Metric]:
        name, unit = 'predicted_discrepancy', ARM_LENGTHS
        suffix = '_norm_s' if self._velocity else '_norm'
        if self._velocity:
            unit = f'{ARM_LENGTHS}/s'
        # A discrepancy of nothing is a matter of the configuration unless cells were compared.
        status, reason = NOT_CONFIGURED, no_operator
        if not self._visited.samples:
            status, reason = INSUFFICIENT, _NOTHING
        found = self._discrepancy.metrics(name, suffix, unit, reason=reason, status=status)
        if self._velocity:
            found['predicted_discrepancy_rms_norm'] = missing(
                NOT_CONFIGURED, ARM_LENGTHS,
                'A mapping that gives velocities is compared by velocities.')
        return found

    def _limit_metrics(self) -> dict[str, Metric]:
        """Return the share beyond a limit, which only a mapping between joints has, or at it."""
        other, why = (('at_limit_share', _NO_HOLD) if self._between
                      else ('limit_violation_share', _NO_VIOLATION))
        name = 'limit_violation_share' if self._between else 'at_limit_share'
        return {name: self._limit_metric(), other: missing(NOT_CONFIGURED, '1', why)}

    def _limit_metric(self) -> Metric:
        if not self._limited.any():
            return missing(NOT_CONFIGURED, '1', _NO_LIMITS)
        if not self._postures:
            return missing(INSUFFICIENT, '1', _NOTHING)
        names = self._robot.chain.joint_names
        shares = {name: int(cells) / self._postures for name, cells, limited in zip(
            names, self._limit_cells, self._limited, strict=True) if limited}
        fault = max(shares, key=shares.__getitem__)
        return self._share(self._limit, self._postures, {
            'joints': shares, 'joint': fault if shares[fault] > 0.0 else None})

    def _lost_metric(self) -> Metric:
        if self._between:
            return missing(NOT_CONFIGURED, '1', _NO_SEARCH)
        if not self._asked:
            return missing(INSUFFICIENT, '1', _NOTHING)
        note = ''
        if self._asked_to_turn and not self._turns:
            note = ('Only positions are followed: the orientation of the tool needs 6 or more '
                    f'joints, and there are {self._robot.chain.size}.')
        missed = self._miss
        return self._share(self._lost, self._asked, {
            'orientation_followed': self._turns,
            'postures_searched': self._searches,
            'miss_p95_norm': missed.percentile(95.0) if missed.count else 0.0,
            'miss_max_norm': missed.max if missed.count else 0.0}, note)

    def _share(self, blocks: BatchMeans, samples: int, details: dict[str, object],
               note: str = '') -> Metric:
        interval = blocks.share_ci()
        return Metric(blocks.mean, '1', ci95=interval, n=blocks.n_blocks, samples=samples,
                      reason=joined(note, blocks.why_none(interval)), details=details)

    def _manipulability_metrics(self) -> dict[str, Metric]:
        histogram, blocks = self._manipulability, self._limit.n_blocks
        names = {'manipulability_min': 0.0, 'manipulability_p5': 5.0}
        if not histogram.count:
            return {name: missing(INSUFFICIENT, '1', _NOTHING) for name in names}
        return {name: Metric(histogram.percentile(level), '1', n=blocks, samples=histogram.count)
                for name, level in names.items()}
