# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
Pose and Jacobian of one configuration, fast.

`SerialChain` is made for many configurations at once; for one, the overhead of its array
operations would be most of a control cycle on a busy machine. Here plain floats do.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from teleop_eval.core.kinematics import SerialChain
from teleop_eval.teardown_cell.servo import Array

Vector = tuple[float, float, float]
Matrix = tuple[Vector, Vector, Vector]  # three columns: the axes of the turned frame


@dataclass(frozen=True, eq=False)
class SinglePose:
    """Tip position (3,) m, rotation (3, 3) and Jacobian (6, n), linear rows first."""

    position: Array
    rotation: Array
    jacobian: Array


class SingleChain:
    """
    A chain of free revolute joints, one configuration at a time.

    Parameters
    ----------
    chain
        The chain; each of its variables drives one revolute joint.

    """

    def __init__(self, chain: SerialChain) -> None:
        """Take the fixed transforms between the joints."""
        if any(step.prismatic for step in chain.steps) or len(chain.steps) != chain.size:
            raise ValueError('only chains of free revolute joints')
        self._steps = [(_columns(step.rotation), _vector(step.translation), step.variable,
                        step.factor, step.offset) for step in chain.steps]
        at_zero = chain.forward(np.zeros((1, chain.size)))
        bare = self.pose([0.0] * chain.size, end=False)
        self._end_rotation = bare.rotation.T @ at_zero.rotations[0]
        self._end = _vector(bare.rotation.T @ (at_zero.positions[0] - bare.position))

    def pose(self, q: list[float], *, end: bool = True) -> SinglePose:
        """
        Return the tip's pose and Jacobian.

        Parameters
        ----------
        q
            n joint positions, rad.
        end
            Whether the fixed transform behind the last joint is added.

        """
        axes: Matrix = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0))
        place: Vector = (0.0, 0.0, 0.0)
        lines: list[tuple[int, float, Vector, Vector]] = []
        for rotation, translation, variable, factor, offset in self._steps:
            place = _add(place, _turn(axes, translation))
            axes = (_turn(axes, rotation[0]), _turn(axes, rotation[1]),
                    _turn(axes, rotation[2]))
            angle = factor * q[variable] + offset
            c, s = math.cos(angle), math.sin(angle)
            x, y, z = axes
            axes = ((c * x[0] + s * y[0], c * x[1] + s * y[1], c * x[2] + s * y[2]),
                    (c * y[0] - s * x[0], c * y[1] - s * x[1], c * y[2] - s * x[2]), z)
            lines.append((variable, factor, place, z))
        turned = np.array(axes).T
        if end:
            place = _add(place, _turn(axes, self._end))
            turned = turned @ self._end_rotation
        jacobian = np.zeros((6, len(q)))
        for variable, factor, point, (zx, zy, zz) in lines:
            ax, ay, az = place[0] - point[0], place[1] - point[1], place[2] - point[2]
            jacobian[:, variable] = (
                factor * (zy * az - zz * ay), factor * (zz * ax - zx * az),
                factor * (zx * ay - zy * ax), factor * zx, factor * zy, factor * zz)
        return SinglePose(np.array(place), turned, jacobian)


def _vector(values: Array) -> Vector:
    x, y, z = (float(value) for value in values)
    return x, y, z


def _columns(matrix: Array) -> Matrix:
    return _vector(matrix[:, 0]), _vector(matrix[:, 1]), _vector(matrix[:, 2])


def _add(a: Vector, b: Vector) -> Vector:
    return a[0] + b[0], a[1] + b[1], a[2] + b[2]


def _turn(axes: Matrix, v: Vector) -> Vector:
    x, y, z = axes
    return (x[0] * v[0] + y[0] * v[1] + z[0] * v[2], x[1] * v[0] + y[1] * v[1] + z[1] * v[2],
            x[2] * v[0] + y[2] * v[1] + z[2] * v[2])
