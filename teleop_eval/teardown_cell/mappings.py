# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
The two mappings that the cell offers its operator, written apart from the evaluator's models.

The evaluator is told about them by config/teardown_cell.yaml; that both describe the same is
what the demonstration shows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import to_matrix
from teleop_eval.teardown_cell.human_arm import JOINT_NAMES, SHOULDER_M, Array, HumanArm
from teleop_eval.teardown_cell.single_pose import SingleChain


@dataclass(frozen=True)
class Follow:
    """One robot joint that follows one operator joint."""

    source: str
    sign: float
    scale: float
    offset: float


# By robot joint, in chain order. The robot has no humeral roll: one human joint is unused.
FOLLOWS = {
    'column_pan': Follow('shoulder_yaw', 1.0, 1.0, 0.0),
    'shoulder_lift': Follow('shoulder_pitch', 1.0, 0.9, -0.1),
    'elbow_bend': Follow('elbow_flexion', -1.0, 0.9, 0.1),
    'forearm_turn': Follow('forearm_roll', 1.0, 1.0, 0.0),
    'wrist_bend': Follow('wrist_flexion', 1.0, 1.0, 0.0),
    'wrist_swing': Follow('wrist_deviation', 1.0, 1.0, 0.0),
}


def shoulder_and_reach(chain: SerialChain) -> tuple[Array, float]:
    """
    Return the arm's shoulder (3,) in base axes and its reach, m.

    The pan axis meets the lift axis at the shoulder, and at zero the arm is stretched: no
    search is needed for this arm.
    """
    zero = np.zeros((1, chain.size))
    shoulder = chain.joint_axes(zero).points[0, 1]
    return shoulder, float(np.linalg.norm(chain.forward(zero).positions[0] - shoulder))


class Mirror:
    """Joint space: each robot joint = sign * scale * operator joint + offset."""

    def __init__(self) -> None:
        """Resolve names to columns."""
        self._columns = [JOINT_NAMES.index(follow.source) for follow in FOLLOWS.values()]
        self._gain = np.array([follow.sign * follow.scale for follow in FOLLOWS.values()])
        self._offset = np.array([follow.offset for follow in FOLLOWS.values()])

    def joints(self, operator_joints: npt.ArrayLike) -> Array:
        """Return robot joints (..., 6) for operator joints (..., 7), rad."""
        source = np.asarray(operator_joints, dtype=float)[..., self._columns]
        return np.asarray(self._gain * source + self._offset)


class Reach:
    """
    Task space, normalised: the tool goes where the hand is, both in arm lengths.

    Parameters
    ----------
    chain
        The arm.
    shoulder_m
        (3,) shoulder of the robot in base axes.
    reach_m
        Length of the robot from shoulder to tool.

    """

    # Of the least squares problem, m (rad): large enough to stay calm where the arm is
    # stretched, small enough to leave no error that would show beside the tracking error.
    damping = 1e-3
    rounds = 6
    tolerance = 1e-6

    def __init__(self, chain: SerialChain, *, shoulder_m: npt.ArrayLike,
                 reach_m: float) -> None:
        """Keep the geometry."""
        self._chain = SingleChain(chain)
        self._lower, self._upper = chain.lower, chain.upper
        self._shoulder = np.asarray(shoulder_m, dtype=float)
        self._scale = reach_m / HumanArm().length_m

    @classmethod
    def of(cls, chain: SerialChain) -> Reach:
        """Return the mapping onto an arm."""
        shoulder, reach = shoulder_and_reach(chain)
        return cls(chain, shoulder_m=shoulder, reach_m=reach)

    def target(self, hand: npt.ArrayLike) -> Array:
        """Return the tool's goal (..., 3) for hands (..., 3), m."""
        return np.asarray(self._shoulder + self._scale * (np.asarray(hand) - SHOULDER_M))

    def joints(self, hand: npt.ArrayLike, orientation: npt.ArrayLike,
               start: npt.ArrayLike) -> Array:
        """
        Return robot joints that take the tool to the hand's place and orientation.

        Parameters
        ----------
        hand, orientation
            (3,) m and (4,) quaternion x, y, z, w of the hand in the operator's frame.
        start
            (6,) joints to begin from, rad: the last solution.

        Returns
        -------
        (6,) rad, within the limits; damped least squares, at most `rounds` steps.

        References
        ----------
        Nakamura and Hanafusa 1986, "Inverse kinematic solutions with singularity robustness
        for robot manipulator control", J. Dyn. Sys. Meas. Control 108(3), 163-171 (from
        memory).

        """
        goal, turn = self.target(hand), to_matrix(orientation)
        q = np.array(start, dtype=float)
        for _ in range(self.rounds):
            pose = self._chain.pose(q.tolist())
            error = np.concatenate([
                goal - pose.position, _rotation_error(turn, pose.rotation)])
            if np.max(np.abs(error)) < self.tolerance:
                break
            jacobian = pose.jacobian
            square = jacobian @ jacobian.T + self.damping**2 * np.eye(6)
            step = jacobian.T @ np.linalg.solve(square, error)
            q = np.clip(q + np.clip(step, -0.3, 0.3), self._lower, self._upper)
        return q


def _rotation_error(goal: Array, current: Array) -> Array:
    """Return the rotation vector (3,) in base axes from current to goal, both (3, 3)."""
    turn = goal @ current.T
    axis = 0.5 * np.array([turn[2, 1] - turn[1, 2], turn[0, 2] - turn[2, 0],
                           turn[1, 0] - turn[0, 1]])
    sine = float(np.linalg.norm(axis))
    angle = float(np.arctan2(sine, 0.5 * (np.trace(turn) - 1.0)))
    return axis if sine < 1e-9 else np.asarray(axis * angle / sine)
