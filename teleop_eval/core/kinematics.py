# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Pose and Jacobian of a tool carried by a serial chain, for many configurations at once.

All poses are in the axes of the chain's base link; metres and radians.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from teleop_eval.core.chain_steps import merged_steps, path_between
from teleop_eval.core.description import PRISMATIC, RobotDescription
from teleop_eval.core.rotations import Array


@dataclass(frozen=True, eq=False)
class ChainPose:
    """
    Tip poses in base axes.

    Attributes
    ----------
    positions
        (N, 3) tip origin, m.
    rotations
        (N, 3, 3) from tip to base axes.

    """

    positions: Array
    rotations: Array


@dataclass(frozen=True, eq=False)
class JointAxes:
    """
    Lines of the chain's moving joints in base axes.

    Attributes
    ----------
    points
        (N, m, 3) a point on each axis: the joint frame's origin, m.
    directions
        (N, m, 3) unit vectors along the URDF axis, whichever way the joint is walked.

    """

    points: Array
    directions: Array


class SerialChain:
    """
    Joints between two links of a robot, as a function of the independent joint positions.

    Attributes
    ----------
    description, base_link, tip_link
        What the chain was taken from.
    joint_names
        Independent variables in chain order. A mimic joint stands for the joint that drives
        it, also when that one lies outside the chain.
    kinds
        'revolute', 'continuous' or 'prismatic' of each variable.
    lower, upper
        (n,) position limits, rad or m; -inf and inf for continuous joints.
    velocity_limits
        (n,) rad/s or m/s; inf where the description gives none.
    prismatic
        (n,) whether the variable is a length.
    steps
        Moving joints in chain order, mimic joints included.

    """

    def __init__(
        self, description: RobotDescription, base_link: str, tip_link: str
    ) -> None:
        """Take the chain out of the description; see `from_description`."""
        self.description = description
        self.base_link = base_link
        self.tip_link = tip_link
        self.steps, variables, self._end_rotation, self._end_translation = merged_steps(
            description, list(path_between(description, base_link, tip_link))
        )
        self.joint_names = tuple(joint.name for joint in variables)
        self.kinds = tuple(joint.kind for joint in variables)
        self.lower = np.array([joint.lower for joint in variables], dtype=float)
        self.upper = np.array([joint.upper for joint in variables], dtype=float)
        self.velocity_limits = np.array([joint.velocity for joint in variables], dtype=float)
        self.prismatic = np.array([kind == PRISMATIC for kind in self.kinds], dtype=bool)

    @classmethod
    def from_description(
        cls, description: RobotDescription, base_link: str, tip_link: str
    ) -> SerialChain:
        """
        Take the chain between two links.

        Parameters
        ----------
        description
            The robot.
        base_link, tip_link
            Any two links: the tip may lie above the base or in another branch; joints on the
            way up are walked backward.

        Returns
        -------
        The chain; without moving joints between the links it has no variables.

        Raises
        ------
        DescriptionError
            If a link does not exist, no way joins the two, or a joint on the way has a kind
            that one number cannot move (floating, planar).

        """
        return cls(description, base_link, tip_link)

    @property
    def size(self) -> int:
        """Return the number of independent variables n."""
        return len(self.joint_names)

    def forward(self, q: npt.ArrayLike) -> ChainPose:
        """
        Return the tip's poses.

        Parameters
        ----------
        q
            (N, n) joint positions in the order of `joint_names`, rad or m. Limits are not
            applied.

        Returns
        -------
        N poses in base axes; NaN where q is NaN.

        Raises
        ------
        ValueError
            If q is not of shape (N, n).

        """
        columns, position, _ = self._sweep(self._checked(q))
        rotations = _turned(self._end_rotation, columns).transpose(2, 1, 0)
        return ChainPose(np.ascontiguousarray(position.T), np.ascontiguousarray(rotations))

    def positions(self, q: npt.ArrayLike) -> Array:
        """
        Return the tip's positions alone, at less cost than `forward`.

        Parameters
        ----------
        q
            (N, n) joint positions, rad or m.

        Returns
        -------
        (N, 3) m, in base axes.

        """
        q = self._checked(q)
        # From the tip inwards only one vector per configuration has to be turned.
        vector = np.repeat(self._end_translation[:, None], len(q), axis=1)
        for step in reversed(self.steps):
            motion = step.motion(q)
            if step.prismatic:
                vector[2] += motion
            else:
                cosine, sine = np.cos(motion), np.sin(motion)
                x, y = vector[0], vector[1]
                vector[0], vector[1] = cosine * x - sine * y, sine * x + cosine * y
            vector = step.rotation @ vector + step.translation[:, None]
        return np.ascontiguousarray(vector.T)

    def jacobian(self, q: npt.ArrayLike) -> Array:
        """
        Return the tip's Jacobians.

        Parameters
        ----------
        q
            (N, n) joint positions, rad or m.

        Returns
        -------
        (N, 6, n): velocity of the tip's origin (m/s), then angular velocity (rad/s), in base
        axes, per unit rate of each independent variable.

        """
        q = self._checked(q)
        _, tip, axes = self._sweep(q)
        jacobian = np.zeros((self.size, 6, len(q)))
        for step, (point, direction) in zip(self.steps, axes, strict=True):
            column = jacobian[step.variable]
            if step.prismatic:
                column[:3] += step.factor * direction
            else:
                column[:3] += step.factor * _cross(direction, tip - point)
                column[3:] += step.factor * direction
        return np.ascontiguousarray(jacobian.transpose(2, 1, 0))

    def joint_axes(self, q: npt.ArrayLike) -> JointAxes:
        """
        Return the lines about or along which the chain's joints move.

        Parameters
        ----------
        q
            (N, n) joint positions, rad or m.

        Returns
        -------
        Lines of all m moving joints, in the order of `steps`.

        """
        q = self._checked(q)
        _, _, axes = self._sweep(q)
        lines = np.array(axes, dtype=float).reshape(len(axes), 2, 3, len(q))
        return JointAxes(lines[:, 0].transpose(2, 0, 1), lines[:, 1].transpose(2, 0, 1))

    def _sweep(self, q: Array) -> tuple[Array, Array, list[tuple[Array, Array]]]:
        """
        Walk from base to tip.

        Configurations run along the last axis, so that every operation is on contiguous
        memory: columns[c] is (3, N), the c-th column of all rotations.
        """
        count = len(q)
        columns = np.repeat(np.eye(3)[:, :, None], count, axis=2)
        position = np.zeros((3, count))
        axes: list[tuple[Array, Array]] = []
        for step in self.steps:
            position = position + _offset(step.translation, columns)
            columns = _turned(step.rotation, columns)
            axes.append((position, columns[2]))
            motion = step.motion(q)
            if step.prismatic:
                position = position + motion * columns[2]
            else:
                cosine, sine = np.cos(motion), np.sin(motion)
                x, y = columns[0], columns[1]
                columns[0], columns[1] = cosine * x + sine * y, cosine * y - sine * x
        return columns, position + _offset(self._end_translation, columns), axes

    def _checked(self, q: npt.ArrayLike) -> Array:
        q = np.asarray(q, dtype=float)
        if q.ndim != 2 or q.shape[1] != self.size:
            raise ValueError(
                f'joint positions must have shape (N, {self.size}) for '
                f'{", ".join(self.joint_names)}, got {q.shape}'
            )
        return q


def _turned(rotation: Array, columns: Array) -> Array:
    """Return the columns of R @ rotation."""
    return (rotation.T @ columns.reshape(3, -1)).reshape(columns.shape)


def _offset(translation: Array, columns: Array) -> Array:
    """Return R @ translation, (3, N)."""
    return (translation @ columns.reshape(3, -1)).reshape(columns.shape[1:])


def _cross(a: Array, b: Array) -> Array:
    return np.stack(
        [a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]]
    )
