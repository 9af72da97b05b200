# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""
One posture of a serial chain at a time, angles and lengths on one scale.

`SerialChain` is made for many configurations at once; following a path needs one after the
other, where the cost of a call counts. Lengths are in arm lengths: joint variables y = q / s with
s = 1 for angles and s = L for sliding joints, and position errors divided by L.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from teleop_eval.core import rotations
from teleop_eval.core.kinematics import SerialChain
from teleop_eval.core.rotations import Array

# Beyond this angle (rad) the axis is not taken from the skew part, which vanishes at pi.
_WIDE_ANGLE = 3.0


class Target(NamedTuple):
    """Where the tip should be: (3,) m, and (3, 3) tip to base axes or None."""

    position: Array
    rotation: Array | None


class Posture(NamedTuple):
    """
    One configuration and what follows from it.

    `y` (n,) scaled variables; `position` (3,) m and `rotation` (3, 3) of the tip;
    `jacobian` (k, n) of the scaled task; `axes` (m, 3) and `columns` (m, 6) of the m moving
    joints: directions, and linear (arm lengths) and angular velocity of the tip for each.
    """

    y: Array
    position: Array
    rotation: Array
    jacobian: Array
    axes: Array
    columns: Array


class ScaledChain:
    """
    A chain whose variables, limits and errors are scaled by the reach.

    Parameters
    ----------
    chain
        The arm.
    reach_m
        Arm length L, m.
    with_orientation
        Whether the task is the pose (k = 6 rows) or the position alone (k = 3).

    Attributes
    ----------
    scale
        (n,) q = scale * y.
    lower, upper
        (n,) scaled limits.

    """

    def __init__(self, chain: SerialChain, reach_m: float, *, with_orientation: bool) -> None:
        self.chain, self.reach_m = chain, reach_m
        self.rows = 6 if with_orientation else 3
        self.scale = np.where(chain.prismatic, reach_m, 1.0)
        self.lower, self.upper = chain.lower / self.scale, chain.upper / self.scale
        steps, count = chain.steps, len(chain.steps)
        # Joint motion = drive @ y + offset, mimic joints included.
        self._drive = np.zeros((count, chain.size))
        for row, step in enumerate(steps):
            self._drive[row, step.variable] = step.factor * self.scale[step.variable]
        self._offset = np.array([step.offset for step in steps])
        self._slides = np.array([step.prismatic for step in steps], dtype=float)
        self._turns = 1.0 - self._slides
        self._any_slide = bool(self._slides.any())
        fixed = np.array([step.rotation for step in steps]).reshape(count, 3, 3)
        self._x, self._y, self._z = (np.ascontiguousarray(fixed[:, :, i]) for i in range(3))
        self._shift = np.array([step.translation for step in steps]).reshape(count, 3)
        end = chain.forward(np.zeros((1, chain.size)))
        self._local = np.zeros((count, 4, 4))
        self._local[:, :3, 2] = self._z
        self._local[:, :3, 3] = self._shift
        self._local[:, 3, 3] = 1.0
        self._end = self._end_transform(end.positions[0], end.rotations[0])

    def at(self, y: Array) -> Posture:
        """Return what follows from scaled variables (n,)."""
        frames = self._frames(y)
        last = frames[-1].dot(self._end)
        position = last[:3, 3]
        axes = frames[:, :3, 2]
        arm = (position - frames[:, :3, 3]) / self.reach_m
        ax, ay, az = axes[:, 0], axes[:, 1], axes[:, 2]
        bx, by, bz = arm[:, 0], arm[:, 1], arm[:, 2]
        columns = np.empty((len(axes), 6))
        columns[:, 0] = ay * bz - az * by
        columns[:, 1] = az * bx - ax * bz
        columns[:, 2] = ax * by - ay * bx
        columns[:, 3:] = axes
        if self._any_slide:
            slides = self._slides[:, None]
            columns[:, :3] += slides * (axes / self.reach_m - columns[:, :3])
            columns[:, 3:] *= self._turns[:, None]
        jacobian = columns[:, :self.rows].T.dot(self._drive)
        return Posture(y, position, last[:3, :3], jacobian, axes, columns)

    def error(self, posture: Posture, target: Target) -> Array:
        """Return (k,) target minus tip: arm lengths, then the rotation vector (rad, base)."""
        error = np.empty(self.rows)
        error[:3] = (target.position - posture.position) / self.reach_m
        if self.rows == 6:
            assert target.rotation is not None  # PathSolver asks for it
            error[3:] = rotation_vector(target.rotation.dot(posture.rotation.T))
        return error

    def bending(self, posture: Posture, error: Array) -> Array:
        """
        Return (n, n) B for which J^T J - B is the second derivative of |error|^2 / 2.

        A joint turns the columns of all joints behind it. With c and z the linear and angular
        columns of joints i, j (i nearer the base), e and w the errors of position and angle:
        B_ij = (e x z_i) . c_j + (w x z_i) . z_j / 2 + k (w x z_i) . (w x z_j), where
        k = (1 - |w| / 2 cot(|w| / 2)) / |w|^2 comes from the inverse of the exponential map's
        derivative (derived here; the tests compare it with differences).
        """
        turns = self._turns[:, None]
        turned = posture.axes.dot(_crossing(error[:3])) * turns
        upper = turned.dot(posture.columns[:, :3].T)
        both: Array | None = None
        if self.rows == 6:
            axes = posture.columns[:, 3:]
            turned = axes.dot(_crossing(error[3:]))
            upper += 0.5 * turned.dot(axes.T)
            both = _inverse_map(error[3:]) * turned.dot(turned.T)
        inner = np.triu(upper)
        inner += np.triu(inner, 1).T
        if both is not None:
            inner += both
        return np.asarray(self._drive.T.dot(inner).dot(self._drive))

    def _frames(self, y: Array) -> Array:
        """Return (m, 4, 4) the frame of each moving joint behind its motion, base axes."""
        motion = self._drive.dot(y) + self._offset
        turn = motion * self._turns if self._any_slide else motion
        cosine, sine = np.cos(turn)[:, None], np.sin(turn)[:, None]
        local = self._local
        local[:, :3, 0] = cosine * self._x + sine * self._y
        local[:, :3, 1] = cosine * self._y - sine * self._x
        if self._any_slide:
            local[:, :3, 3] = self._shift + self._z * (motion * self._slides)[:, None]
        frames = np.empty_like(local)
        frame = frames[0] = local[0]
        for index in range(1, len(local)):
            frame = frames[index] = frame.dot(local[index])
        return frames

    def _end_transform(self, position: Array, rotation: Array) -> Array:
        """Return the fixed (4, 4) transform from the last moving joint to the tip."""
        last = self._frames(np.zeros(self.chain.size))[-1]
        end = np.eye(4)
        end[:3, :3] = last[:3, :3].T @ rotation
        end[:3, 3] = last[:3, :3].T @ (position - last[:3, 3])
        return end


def rotation_vector(matrix: npt.NDArray[np.float64]) -> Array:
    """Return the rotation vector (3,) of one rotation matrix (3, 3), rad, norm in [0, pi]."""
    (a, b, c), (d, e, f), (g, h, i) = matrix.tolist()
    x, y, z = 0.5 * (h - f), 0.5 * (c - g), 0.5 * (d - b)
    sine = math.sqrt(x * x + y * y + z * z)
    angle = math.atan2(sine, 0.5 * (a + e + i - 1.0))
    if angle > _WIDE_ANGLE:
        return np.asarray(rotations.log(rotations.from_matrix(matrix)))
    ratio = angle / sine if sine > 1e-9 else 1.0
    return np.array([x * ratio, y * ratio, z * ratio])


def _crossing(v: Array) -> Array:
    """Return the matrix (3, 3) for which rows @ matrix are v x row."""
    x, y, z = v.tolist()
    return np.array([[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]])


def _inverse_map(w: Array) -> float:
    """Return (1 - a / 2 cot(a / 2)) / a^2 with a = |w|, 1 / 12 for a = 0."""
    square = float(w.dot(w))
    if square < 1e-4:
        return 1.0 / 12.0 + square / 720.0
    half = 0.5 * math.sqrt(square)
    return (1.0 - half / math.tan(half)) / square
